"""Which D's an overlap would explain and which it would not."""

import numpy as np

from assess.frames import partition
from tieline.assess.overlap import overlap_checks


def rows(bound, **changes):
    given = [
        {"element": "La", "D": 0.001, "D_overlap_lo": 0.0},
        {"element": "Ce", "D": 0.002, "D_overlap_lo": 0.0005},
        {"element": "Yb", "D": 0.04, "D_overlap_lo": 0.035},
        {"element": "Ni", "D": 6.0, "D_overlap_lo": 5.7},
    ]
    return partition([row | changes for row in given], overlap_bound=bound)


def test_small_ones_beside_the_smallest_are_only_upper_limits():
    found = overlap_checks(rows(0.0008))
    assert found["value"].tolist() == [0.0008]
    assert found["verdict"].tolist() == ["cannot tell"]
    assert "30% or more of La (D 0.001), Ce (D 0.002, at least 0.0005): upper limits" in found["detail"][0]
    assert found["detail"][0].endswith(
        "Of the other 2, from Yb (D 0.04, at least 0.035) upwards, it leaves more than 70%."
    )


def test_the_smallest_sets_the_bound_and_says_nothing_of_the_others():
    found = overlap_checks(rows(0.0004))
    assert found["verdict"].tolist() == ["consistent"]
    assert "Only the smallest, La (D 0.001), which sets that bound" in found["detail"][0]
    assert "Of the other 3, from Ce" in found["detail"][0]


def test_where_the_bound_is_far_below_all_is_well():
    found = overlap_checks(rows(1e-5))
    assert found["verdict"].tolist() == ["consistent"]
    assert found["detail"][0].endswith("Of all 4, from La (D 0.001) upwards, it leaves more than 70%.")


def test_compatible_elements_are_not_made_by_overlap():
    found = overlap_checks(rows(0.9))
    assert "Of the other 1, from Ni" in found["detail"][0]


def test_without_a_d_below_one_nothing_bounds_the_overlap():
    found = overlap_checks(partition([{"element": "Ni", "D": 6.0, "D_overlap_lo": 0.0}], overlap_bound=1.0))
    assert found["verdict"].tolist() == ["cannot tell"]
    assert np.isnan(found["value"][0])
    assert "can only have lowered" in found["detail"][0]


def test_pairs_without_a_bound_and_limits_have_no_row():
    assert overlap_checks(rows(np.nan)).empty
    assert overlap_checks(rows(0.1, kind="upper-limit")).empty
