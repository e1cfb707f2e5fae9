"""GUM example H.2 (JCGM 100:2008): simultaneous resistance and reactance from correlated means.

A test of the way D's uncertainties are formed: means, their covariances and a ratio through the
`uncertainties` package. The raw readings are from memory; the published results are R 127.732(71),
X 219.847(295) and Z 254.260(236) ohm with r(R,X) -0.588, r(R,Z) -0.485, r(X,Z) 0.993.
"""

from __future__ import annotations

import numpy as np
import pytest
from uncertainties import correlated_values, correlation_matrix, umath

VOLTAGE = [5.007, 4.994, 5.005, 4.990, 4.999]
CURRENT = [19.663e-3, 19.639e-3, 19.640e-3, 19.685e-3, 19.678e-3]
PHASE = [1.0456, 1.0438, 1.0468, 1.0428, 1.0433]


def test_resistance_reactance_and_impedance():
    readings = np.array([VOLTAGE, CURRENT, PHASE])
    covariance = np.cov(readings) / readings.shape[1]
    V, I, phi = correlated_values(readings.mean(axis=1), covariance)  # noqa: E741
    R, X, Z = V / I * umath.cos(phi), V / I * umath.sin(phi), V / I
    assert (R.n, X.n, Z.n) == (
        pytest.approx(127.732, abs=5e-4),
        pytest.approx(219.847, abs=5e-4),
        pytest.approx(254.260, abs=5e-4),
    )
    assert (R.s, X.s, Z.s) == (
        pytest.approx(0.071, abs=5e-4),
        pytest.approx(0.2955, abs=1e-3),
        pytest.approx(0.236, abs=5e-4),
    )
    r = correlation_matrix([R, X, Z])
    assert r[0, 1] == pytest.approx(-0.588, abs=1e-3)
    assert r[0, 2] == pytest.approx(-0.485, abs=1e-3)
    assert r[1, 2] == pytest.approx(0.993, abs=1e-3)


def test_ignoring_the_correlation_is_noticed():
    # With V and I taken as independent, u(Z)/Z = hypot(0.0032/4.999, 0.0095/19.661): 0.204, not 0.236.
    readings = np.array([VOLTAGE, CURRENT])
    mean, se = readings.mean(axis=1), readings.std(axis=1, ddof=1) / np.sqrt(5)
    independent = mean[0] / mean[1] * np.hypot(se[0] / mean[0], se[1] / mean[1])
    assert independent == pytest.approx(0.204, abs=1e-3)


def test_the_same_ratio_through_the_program():
    """Z = V/I as a D whose two means share a factor: their correlation must enter D_sd as it does in H.2.

    The program's shared factors give positive correlations; so the sign of one deviation is turned, which turns
    r(V, I) = -0.355 into +0.355, and the package's own result is the reference.
    """
    from tieline.propagation import Side, by_arrays

    readings = np.array([VOLTAGE, CURRENT])
    readings[1] = 2 * readings[1].mean() - readings[1]
    mean = readings.mean(axis=1)
    covariance = np.cov(readings) / 5
    V, I = correlated_values(mean, covariance)  # noqa: E741
    shared = np.sqrt(covariance[0, 1] / mean.prod())
    own = np.sqrt(np.diag(covariance) / mean**2 - shared**2)

    def side(row: int) -> Side:
        zero = np.zeros(1)
        return Side(
            mean[[row]],
            own[[row]],
            zero,
            np.array([shared]),
            np.array([7]),
            zero,
            zero,
            np.array([-1 - row]),
            zero,
            np.array([-1 - row]),
        )

    assert by_arrays(side(0), side(1)).D_sd[0] == pytest.approx((V / I).s, rel=1e-3)
