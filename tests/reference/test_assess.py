"""Published and independently computed values of the evidence: curves, lines, exchange coefficients, ferric iron."""

import numpy as np
import pandas as pd
import pytest
from scipy.optimize import lsq_linear, nnls

from assess.frames import partition
from tieline.assess.bulk import bulk_partition, stated_modes
from tieline.assess.condition_values import inverse_temperature
from tieline.assess.exchange_coefficients import exchange_coefficient
from tieline.assess.ferric import kress_carmichael
from tieline.assess.trends import trend_tables
from tieline.chemistry.elements import atomic_weight
from tieline.chemistry.exchange import windows_for
from tieline.chemistry.radii import ionic_radius
from tieline.statistics.lattice_strain import Coefficients, fit_curve, lattice_strain
from tieline.statistics.lattice_strain_problem import STRAIN_FACTOR
from tieline.statistics.mass_balance import mix, shortfall
from tieline.statistics.york import york_line

# D0 0.50, r0 1.02 Å, E 290 GPa, 1300 °C, eightfold radii of Shannon (1976): Blundy & Wood (1994), Nature 372:452, eq. 2,
# evaluated in SI units; the parameters are for illustration
WORKED = {
    "La": 0.080155, "Ce": 0.123462, "Nd": 0.244051, "Sm": 0.366959, "Gd": 0.454597, "Dy": 0.497898,
    "Y": 0.499957, "Er": 0.489278, "Yb": 0.451322, "Lu": 0.428733, "Sc": 0.088061,
}  # fmt: skip
WORKED_K = 1573.15


def worked_radii() -> np.ndarray:
    return np.array([ionic_radius(element, 3, 8) for element in WORKED])


def test_lattice_strain_prefactor():
    # 4 pi N_A / R in GPa and Å, computed from the SI constants
    assert pytest.approx(910.1785, abs=5e-5) == STRAIN_FACTOR


def test_lattice_strain_worked_series():
    D = lattice_strain(worked_radii(), WORKED_K, 0.50, 1.02, 290.0)
    np.testing.assert_allclose(D, list(WORKED.values()), atol=6e-7)


def test_lattice_strain_agrees_with_si_units():
    r, r0, temperature = 1.16e-10, 1.02e-10, 1573.15
    strain = 0.5 * r0 * (r - r0) ** 2 + (r - r0) ** 3 / 3
    by_hand = 0.5 * np.exp(-4 * np.pi * 290e9 * 6.02214076e23 * strain / (8.314462618 * temperature))
    assert lattice_strain(np.array([1.16]), temperature, 0.5, 1.02, 290.0)[0] == pytest.approx(
        by_hand, rel=1e-9
    )


def test_the_fit_recovers_the_worked_series():
    D = np.array(list(WORKED.values()))
    fit = fit_curve(Coefficients(worked_radii(), D, (0.05 * D) ** 2), WORKED_K)
    assert fit.verdict == "fitted"
    assert (fit.D0.value, fit.r0.value, fit.E.value) == pytest.approx((0.50, 1.02, 290.0), rel=1e-5)


PEARSON_X = np.array([0, 0.9, 1.8, 2.6, 3.3, 4.4, 5.2, 6.1, 6.5, 7.4])
PEARSON_Y = np.array([5.9, 5.4, 4.4, 4.6, 3.5, 3.7, 2.8, 2.8, 2.4, 1.5])
WEIGHT_X = np.array([1000, 1000, 500, 800, 200, 80, 60, 20, 1.8, 1])
WEIGHT_Y = np.array([1, 1.8, 4, 8, 20, 20, 70, 70, 100, 500])


def test_york_line_of_pearsons_data():
    # data: Pearson (1901), Phil. Mag. 2:559, with the weights of York (1966), Can. J. Phys. 44:1079;
    # solution: York et al. (2004), Am. J. Phys. 72:367
    line = york_line(PEARSON_X, PEARSON_Y, WEIGHT_X**-0.5, WEIGHT_Y**-0.5)
    assert line.intercept == pytest.approx(5.479910, abs=1e-6)
    assert line.slope == pytest.approx(-0.4805334, abs=1e-7)
    assert line.chi_square == pytest.approx(11.86635, abs=1e-5)
    assert line.mswd == pytest.approx(1.48329, abs=1e-5)
    assert (line.intercept_se, line.slope_se) == pytest.approx((0.29497, 0.05799), abs=1e-5)
    assert (line.intercept_se_scatter, line.slope_se_scatter) == pytest.approx((0.35925, 0.07062), abs=1e-5)
    # the correlation published for another form of the standard errors is -0.962
    assert line.covariance / (line.intercept_se * line.slope_se) == pytest.approx(-0.962, abs=2e-3)


def test_ordinary_least_squares_is_the_case_of_exact_x():
    # Pearson's data without weights: 5.76119, -0.53958
    line = york_line(PEARSON_X, PEARSON_Y, np.zeros(10), np.ones(10))
    assert (line.intercept, line.slope) == pytest.approx((5.76119, -0.53958), abs=1e-5)


def test_exchange_by_mass_and_by_amount_is_one_number():
    # olivine and melt in wt%: the same K_D, whether Fe and Mg are weighed or counted; Roeder & Emslie (1970),
    # Contrib. Mineral. Petrol. 29:275, found 0.30 for olivine
    olivine, melt = {"Fe": 10.0, "Mg": 27.9}, {"Fe": 7.5, "Mg": 6.3}
    amounts = [
        {element: wt / atomic_weight(element) for element, wt in phase.items()} for phase in (olivine, melt)
    ]
    molar = (amounts[0]["Fe"] / amounts[0]["Mg"]) / (amounts[1]["Fe"] / amounts[1]["Mg"])
    D = {element: olivine[element] / melt[element] for element in olivine}
    found = exchange_coefficient(D["Fe"], D["Mg"], np.diag([1e-4, 1e-4]))
    assert found.value == pytest.approx(molar, rel=1e-12)
    window = windows_for("olivine")[0]
    assert (window.centre, window.half_width) == (0.30, 0.03)
    assert abs(found.value - window.centre) < window.half_width


# Average ocean-ridge basalt, oxide wt% (rounded, from memory)
RIDGE_BASALT = {
    "SiO2": 50.5, "TiO2": 1.5, "Al2O3": 15.0, "FeO": 10.2, "MnO": 0.18, "MgO": 7.6, "CaO": 11.3, "Na2O": 2.7,
    "K2O": 0.15, "P2O5": 0.15,
}  # fmt: skip


def test_ferric_share_of_ridge_basalt():
    # Cottrell & Kelley (2011), Earth Planet. Sci. Lett. 305:270: Fe3+/ΣFe 0.16 ± 0.01 stands for 0.10 log units above
    # fayalite-magnetite-quartz, by the model of Kress & Carmichael (1991) at 1200 °C and 1 bar; buffer after Frost (1991).
    # All from memory, so the tolerance is wide: 0.01 is a quarter of a log unit.
    buffer = -25096.3 / 1473.15 + 8.735
    share = kress_carmichael(RIDGE_BASALT, 1473.15, 1e-4, buffer + 0.10, 0.18, 0.0)
    assert share.value == pytest.approx(0.16, abs=0.01)
    assert share.sd == pytest.approx(0.01, abs=0.005)


def test_ferric_share_follows_oxygen_fugacity_and_pressure():
    at = [
        kress_carmichael(RIDGE_BASALT, 1473.15, p, f, 0.0, 0.0).value
        for p, f in ((0, -8), (0, -4), (0, -0.68), (1, -8))
    ]
    assert at[0] < at[1] < at[2]
    assert at[2] > 0.6  # in air most of the iron is ferric (Kennedy 1948, Am. J. Sci. 246:529; from memory)
    assert at[3] < at[0]


GAS_CONSTANT = 8.314462618
# Blundy & Wood (1991), Geochim. Cosmochim. Acta 55:193, plagioclase over melt: RT ln D = a + b X_An in J/mol (from memory)
PLAGIOCLASE = {"Sr": (26_800, -26_700), "Ba": (10_200, -38_200)}


@pytest.mark.parametrize(("element", "at_1200"), [("Sr", 2.998), ("Ba", 0.4835)])
def test_a_published_temperature_dependence_comes_back(element, at_1200):
    """An50 at six temperatures: slope, intercept and the prediction at 1200 °C, computed outside from the equation."""
    a, b = PLAGIOCLASE[element]
    energy = a + b * 0.5
    celsius = np.array([1050.0, 1100.0, 1150.0, 1250.0, 1300.0, 1350.0])
    D = np.exp(energy / (GAS_CONSTANT * (celsius + 273.15)))
    names = [f"P{place}" for place in range(6)]
    rows = [
        {"experiment": name, "alpha": "plagioclase", "element": element, "D": d}
        for name, d in zip(names, D, strict=True)
    ]
    x, x_sd = (pd.Series(values, names) for values in inverse_temperature(celsius, np.full(6, 5.0)))
    made = trend_tables(partition(rows), "10^4/T", x, x_sd, predict=(1e4 / 1473.15,))
    assert made.trends["slope"][0] == pytest.approx(energy / (1e4 * GAS_CONSTANT), rel=1e-9)
    assert made.trends["intercept"][0] == pytest.approx(0.0, abs=1e-9)
    assert made.predictions["D"][0] == pytest.approx(at_1200, rel=2e-4)


# wt% of forsterite, diopside and anorthite from the atomic weights of 2022 (Pure Appl. Chem. 94:573), and the sums of
# 20, 30 and 50 % of them, made by hand
END_MEMBERS = {
    "SiO2": (42.71, 55.49, 43.19), "MgO": (57.29, 18.61, 0.0), "CaO": (0.0, 25.90, 20.16), "Al2O3": (0.0, 0.0, 36.65),
}  # fmt: skip
MIXTURE = {"SiO2": 46.784, "MgO": 17.041, "CaO": 17.850, "Al2O3": 18.325}


def end_members() -> tuple[np.ndarray, np.ndarray]:
    return np.array(list(MIXTURE.values())), np.array(list(END_MEMBERS.values()))


def test_sums_of_end_members_come_apart():
    start, phases = end_members()
    found = mix(start, 0.01 * start, phases, 0.01 * phases)
    np.testing.assert_allclose(found.proportions, [0.2, 0.3, 0.5], atol=1e-6)
    assert found.chi_square == pytest.approx(0.0, abs=1e-9)
    assert found.squares == pytest.approx(0.0, abs=1e-9)
    # A tenth of the magnesium gone: 1 - 0.9.
    kept = np.array([True, False, True, True])
    without = mix(start[kept], 0.01 * start[kept], phases[kept], 0.01 * phases[kept])
    lost = shortfall(without, start[~kept], 0.01 * start[~kept], 0.9 * phases[~kept], 0.009 * phases[~kept])
    assert lost.loss[0] == pytest.approx(0.1, abs=1e-6)


def test_proportions_agree_with_general_solvers():
    """Not an exact sum: unweighted against `nnls`, weighted with sure phases against `lsq_linear` of SciPy."""
    start, phases = end_members()
    start = start + np.array([0.6, -0.4, 0.3, -0.5])
    sd = np.array([0.5, 0.2, 0.2, 0.2])
    found = mix(start, sd, phases, np.zeros_like(phases))
    plain, norm = nnls(phases, start)
    np.testing.assert_allclose(found.unweighted, plain, atol=1e-6)
    assert found.squares == pytest.approx(norm**2, rel=1e-6)
    weighted = lsq_linear(phases / sd[:, None], start / sd, (0, np.inf))
    np.testing.assert_allclose(found.proportions, weighted.x, atol=1e-6)
    assert found.chi_square == pytest.approx(2 * weighted.cost, rel=1e-6)
    # A phase that is not there is held at none by both.
    absent = np.array([0.5, -0.1, 0.5]) @ phases.T
    np.testing.assert_allclose(
        mix(absent, sd, phases, np.zeros_like(phases)).unweighted, nnls(phases, absent)[0], atol=1e-6
    )


def test_bulk_coefficient_of_a_lherzolite():
    # D of La from McKenzie & O'Nions (1991), J. Petrol. 32:1021 (from memory): 0.0004, 0.002 and 0.054; 60, 25 and 15 % by
    # mass, invented: 0.6 x 0.0004 + 0.25 x 0.002 + 0.15 x 0.054 = 0.00884
    D = {"olivine": 0.0004, "orthopyroxene": 0.002, "clinopyroxene": 0.054}
    table = partition(
        [{"alpha": phase, "element": "La", "D": value} for phase, value in D.items()], common_sd=0.0
    )
    modes = stated_modes({"olivine": 0.60, "orthopyroxene": 0.25, "clinopyroxene": 0.15}, 0.1, 0.95)
    assert bulk_partition(table, {"A": modes})["bulk_D"][0] == pytest.approx(0.00884, rel=1e-9)
