"""Which D's an overlap would explain and which it would not."""

import numpy as np

from assess.frames import partition
from tieline.assess.overlap import overlap_checks


def rows(bound, **changes):
    given = [
        {"element": "La", "D": 0.001, "D_overlap_lo": 0.0},
        {"element": "Yb", "D": 0.04, "D_overlap_lo": 0.035},
        {"element": "Ni", "D": 6.0, "D_overlap_lo": 5.7},
    ]
    return partition([row | changes for row in given], overlap_bound=bound)


def test_small_ones_are_only_upper_limits():
    found = overlap_checks(rows(0.0008))
    assert found["value"].tolist() == [0.0008]
    assert found["verdict"].tolist() == ["cannot tell"]
    limits, safe = found["detail"][0].split("Not overlap: ")
    assert "La" in limits
    assert "Yb" not in limits
    assert "Yb (D 0.04, at least 0.035)" in safe
    assert "Ni" in safe


def test_where_the_bound_is_far_below_all_is_well():
    found = overlap_checks(rows(1e-5))
    assert found["verdict"].tolist() == ["consistent"]
    assert "Upper limits" not in found["detail"][0]


def test_compatible_elements_are_not_made_by_overlap():
    found = overlap_checks(rows(0.9))
    assert "Ni" in found["detail"][0].split("Not overlap: ")[1]


def test_pairs_without_a_bound_and_limits_have_no_row():
    assert overlap_checks(rows(np.nan)).empty
    assert overlap_checks(rows(0.1, kind="upper-limit")).empty
