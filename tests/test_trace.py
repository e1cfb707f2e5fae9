"""Every number on the page of a D can be recomputed from the page's own numbers, by formulas written out here."""

from __future__ import annotations

import io
import json
import math
import re
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from rich.console import Console
from scipy import optimize, special
from typer.testing import CliRunner

from sessions import demo_copy, small_session
from test_audit import short_session
from tieline import runner
from tieline.cli import app
from tieline.configuration import load
from tieline.errors import InputError
from tieline.terminal_trace import trace_tree
from tieline.tracing.finding import find_coefficient
from tieline.tracing.page import Source, trace

Page = dict[str, Any]
RTOL = 1e-9


def source_of(config: Path, overrides: Sequence[str] = ()) -> Source:
    session = load(config, overrides=overrides)
    runner.run(session)
    session, tables, files = runner.finished(session, "classify")
    return Source(tables, session.settings, files)


@pytest.fixture(scope="module")
def source(tmp_path_factory: pytest.TempPathFactory) -> Source:
    return source_of(short_session(tmp_path_factory.mktemp("trace")))


def pages(source: Source, step: int = 1, **where: str) -> Iterator[Page]:
    rows = source.tables["classify"].to_pylist()
    for row in [row for row in rows if all(row[name] == text for name, text in where.items())][::step]:
        yield trace(source, row["experiment"], row["alpha"], row["beta"], row["element"])


def phases(page: Page) -> Iterator[Page]:
    yield page["alpha_phase"]
    yield page["beta_phase"]


def column(spots: Sequence[Page], name: str) -> np.ndarray:
    return np.array([spot[name] for spot in spots], dtype=np.float64)


def number(cell: Page | None) -> float:
    assert cell is not None
    return float(cell["raw"])


def check_random_effects(mean: Page, x: np.ndarray, sigma: np.ndarray) -> None:
    """The mean from the values and the sigmas used, tau solved for here."""
    n = len(x)

    def excess(tau2: float) -> float:
        w = 1 / (sigma**2 + tau2)
        return float(np.sum(w * (x - np.sum(w * x) / np.sum(w)) ** 2) - (n - 1))

    tau2 = (
        0.0
        if excess(0.0) <= 0
        else optimize.brentq(excess, 0.0, 1e3 * np.var(x) + 1e-30, xtol=1e-18, rtol=1e-14)
    )
    np.testing.assert_allclose(mean["tau_ppm"], math.sqrt(tau2), rtol=1e-6, atol=1e-9 * np.std(x))
    w = 1 / (sigma**2 + max(tau2, 4 * np.mean(sigma**2) / (n - 1)))
    p, v = w / w.sum(), sigma**2 + tau2
    m = np.sum(p * x)
    np.testing.assert_allclose(mean["weights"], p, rtol=1e-6)
    np.testing.assert_allclose(mean["mean_ppm"], m, rtol=1e-8)
    se2 = np.sum(p**2 * v) * np.sum(p * (x - m) ** 2) / np.sum(p * (1 - p) * v)
    np.testing.assert_allclose(mean["se_ppm"], math.sqrt(se2), rtol=1e-6)
    np.testing.assert_allclose(mean["counting_se_ppm"], math.sqrt(np.sum(p**2 * sigma**2)), rtol=1e-6)
    assert mean["dof"] == n - 1
    w0 = 1 / sigma**2
    mswd = np.sum((x - np.sum(w0 * x) / w0.sum()) ** 2 / sigma**2) / (n - 1)
    np.testing.assert_allclose(mean["mswd"], mswd, rtol=1e-8)


def check_phase(phase: Page) -> None:
    assert phase["mean"]["agrees"]
    units, standard = phase["units"], phase["internal_standard"]
    plain = units["ppm_per_unit"] * units["element_fraction"]
    for spot in [*phase["spots_used"], *phase["spots_left_out"]]:
        check_calibration_factor(spot, phase)
        factor = plain * standard_factor(spot, standard) / spot.get("calibration_factor", 1.0)
        if spot["value_ppm"] is None:
            np.testing.assert_allclose(spot["limit_ppm"], number(spot["cells"]["limit"]) * factor, rtol=RTOL)
            continue
        own = factor * spot.get("other_factor", 1.0)
        np.testing.assert_allclose(spot["value_ppm"], number(spot["cells"]["value"]) * own, rtol=RTOL)
        sigma = number(spot["cells"]["sigma"]) / units["sigma"]["divided_by"]
        np.testing.assert_allclose(spot["sigma_ppm"], sigma * own, rtol=RTOL)
    check_drift(phase)
    mean = phase["mean"]
    if mean["estimator"] != "random-effects" or len(phase["spots_used"]) < 2:
        return
    x, sigma = (column(phase["spots_used"], name) for name in ("value_ppm", "sigma_ppm"))
    k = mean["sigma_slope_per_ppm"]
    used = sigma if k is None else sigma / np.sqrt(np.maximum(1 + k * (x - x.mean()), 0.1))
    np.testing.assert_allclose(column(phase["spots_used"], "sigma_used_ppm"), used, rtol=1e-7)
    weights = column(phase["spots_used"], "weight")
    check_random_effects(mean | {"weights": weights}, x, used)


def standard_factor(spot: Page, standard: Page | None) -> float:
    """Actual over assumed; the assumed value is the settings' or the spot's own cell."""
    if standard is None:
        return 1.0
    if standard["factor"] is not None:
        np.testing.assert_allclose(
            standard["factor"], standard["actual_ppm"] / standard["assumed_ppm"], rtol=RTOL
        )
        return float(standard["factor"])
    assumed = float(spot["assumed"]["raw"]) * standard["ppm_per_unit"]
    np.testing.assert_allclose(spot["assumed"]["ppm"], assumed, rtol=RTOL)
    np.testing.assert_allclose(spot["standard_factor"], standard["actual_ppm"] / assumed, rtol=RTOL)
    return float(standard["actual_ppm"] / assumed)


def check_calibration_factor(spot: Page, phase: Page) -> None:
    """The factor of its own calibration with the drift removed, times that of the standard's measurement."""
    own, behind = phase["calibration"], (phase["internal_standard"] or {}).get("calibration")
    expected = own["factor"]
    if own["drift_applied"]:
        expected *= 1 + own["drift_applied"] * (spot["sequence"] - own["drift_centre"])
    expected *= behind["factor"] if behind else 1.0
    np.testing.assert_allclose(spot.get("calibration_factor", expected), expected, rtol=RTOL)


def check_drift(phase: Page) -> None:
    drift, calibration = phase["drift"], phase["calibration"]
    assert (drift is None) == (not calibration["drift_left"])
    if drift is None or not phase["spots_used"]:
        return
    place = column(phase["spots_used"], "sequence").mean()
    np.testing.assert_allclose(drift["mean_place"], place, rtol=RTOL)
    shift = calibration["drift_left"] * (place - calibration["drift_centre"])
    np.testing.assert_allclose(drift["shift"], shift, rtol=RTOL, atol=1e-15)


def check_standard(standard: Page | None) -> None:
    if standard is None:
        return
    if standard["source"] == "configured":
        assert standard["source_key"] is None
        assert standard["dof"] is None
        return
    x = np.array([float(spot["raw"]) for spot in standard["spots"]]) * standard["ppm_per_unit"]
    np.testing.assert_allclose(x, column(standard["spots"], "value_ppm"), rtol=RTOL)
    mean, sigma, n = standard["mean"], column(standard["spots"], "sigma_ppm"), len(x)
    m, scale = mean["mean_ppm"], mean["scale_ppm"]
    np.testing.assert_allclose(standard["actual_ppm"], m, rtol=RTOL)
    drawn_in = np.clip(x, m - 1.5 * scale, m + 1.5 * scale)
    np.testing.assert_allclose(drawn_in.mean(), m, rtol=1e-9)
    np.testing.assert_allclose(np.sum((drawn_in - m) ** 2) / (n - 1) / 0.778465, scale**2, rtol=1e-5)
    np.testing.assert_allclose(math.sqrt(mean["constant"] / n) * scale, mean["se_ppm"], rtol=1e-9)
    counting = math.sqrt(mean["counting_constant"] * np.mean(sigma**2) / n)
    np.testing.assert_allclose(counting, mean["counting_se_ppm"], rtol=1e-9)
    assert 1.0 <= mean["counting_constant"] < 1.05
    np.testing.assert_allclose(standard["relative_sd"], max(mean["se_ppm"], counting) / m, rtol=RTOL)
    np.testing.assert_allclose(standard["dof"], mean["dof"], rtol=RTOL)
    assert 0 < standard["dof"] <= n - 1
    check_calibration(standard["calibration"])


def check_calibration(calibration: Page) -> None:
    for one in calibration["materials"]:
        x, sigma = column(one["spots"], "value_ppm"), column(one["spots"], "sigma_ppm")
        assert len(x) == one["n_spots"]
        if len(x) > 1:
            check_random_effects(one["mean"], x, sigma)
        np.testing.assert_allclose(one["mean"]["mean_ppm"], one["measured_ppm"], rtol=RTOL)
        np.testing.assert_allclose(one["mean"]["se_ppm"], one["measured_se_ppm"], rtol=RTOL)
        if one["ratio"] is None:
            continue
        ratio = one["measured_ppm"] / one["accepted_ppm"]
        np.testing.assert_allclose(one["ratio"], ratio, rtol=RTOL)
        own = math.hypot(
            one["measured_se_ppm"] / one["accepted_ppm"], ratio * one["accepted_sd_ppm"] / one["accepted_ppm"]
        )
        np.testing.assert_allclose(one["ratio_se"], own, rtol=RTOL)
    if calibration["bias"] is not None and calibration["materials"]:
        check_bias(calibration)
    check_slope(calibration)


def check_bias(calibration: Page) -> None:
    """Weights, tau between materials, bias, its standard error and degrees of freedom from the materials' ratios."""
    known = [one for one in calibration["materials"] if one["ratio"] is not None]
    relative = [one["ratio_se"] / abs(one["ratio"]) for one in known]
    enough = max(0.1, 3 * min(relative))
    for one, own in zip(known, relative, strict=True):
        assert (one["weight"] is None) == (own > enough)
    kept = [one for one in known if one["weight"] is not None]
    ratio, v = column(kept, "ratio"), column(kept, "ratio_se") ** 2

    def excess(tau2: float) -> float:
        w = 1 / (v + tau2)
        return float(np.sum(w * (ratio - np.sum(w * ratio) / w.sum()) ** 2) - (len(kept) - 1))

    alone = len(kept) == 1 or excess(0.0) <= 0
    tau2 = 0.0 if alone else optimize.brentq(excess, 0.0, 1.0, xtol=1e-18, rtol=1e-14)
    np.testing.assert_allclose(calibration["between_sd"], math.sqrt(tau2), rtol=1e-5, atol=1e-12)
    p = 1 / (v + tau2) / np.sum(1 / (v + tau2))
    np.testing.assert_allclose(column(kept, "weight"), p, rtol=1e-5)
    bias, se2 = np.sum(p * ratio), np.sum(p**2 * (v + tau2))
    np.testing.assert_allclose(calibration["bias"], bias, rtol=1e-8)
    np.testing.assert_allclose(calibration["bias_se"], math.sqrt(se2), rtol=1e-5)
    removed = calibration["factor"] != 1.0
    left = math.sqrt(se2) / bias if removed else math.hypot(bias - 1, math.sqrt(se2))
    np.testing.assert_allclose(calibration["relative_sd"], left, rtol=1e-5)
    if not removed:
        assert calibration["relative_dof"] is None
        return
    np.testing.assert_allclose(calibration["factor"], bias, rtol=1e-8)
    measured, n = (
        (column(kept, "measured_se_ppm") / column(kept, "accepted_ppm")) ** 2,
        column(kept, "n_spots"),
    )
    dof = se2**2 / np.sum((p**2 * measured)[n > 1] ** 2 / (n[n > 1] - 1))
    dof = min(dof, len(kept) - 1) if tau2 > 0 else dof
    np.testing.assert_allclose(calibration["relative_dof"], dof, rtol=1e-4)


def check_slope(calibration: Page) -> None:
    slope = calibration["drift_applied"] or calibration["drift_left"]
    if not slope:
        return
    deviation, place = [], []
    for one in calibration["materials"]:
        if one["ratio"] is not None:
            x, at = column(one["spots"], "value_ppm"), column(one["spots"], "place")
            deviation.append(x / x.mean() - 1)
            place.append(at - at.mean())
    y, t = np.concatenate(deviation), np.concatenate(place)
    np.testing.assert_allclose(slope, np.sum(t * y) / np.sum(t**2), rtol=1e-8)
    known = [one for one in calibration["materials"] if one["ratio"] is not None]
    centre = np.concatenate([column(one["spots"], "place") for one in known]).mean()
    np.testing.assert_allclose(calibration["drift_centre"], centre, rtol=RTOL)


FACTORS = ("calibration", "matrix", "drift", "internal standard", "calibration of the standard")


def check_budget(page: Page) -> dict[str, Page]:
    """Every line from the phases' own numbers: what it is, what the interval makes of it, and what cancels."""
    budget = {line["source"]: line for line in page["budget"]}
    confidence = page["result"]["confidence"]
    z = special.ndtri(0.5 + confidence / 2)
    for side, phase in zip(("alpha", "beta"), phases(page), strict=True):
        calibration, standard = phase["calibration"], phase["internal_standard"]
        dofs = {
            "calibration": calibration["relative_dof"], "internal standard": (standard or {}).get("dof"),
        }  # fmt: skip
        for name in FACTORS:
            dof = dofs.get(name)
            w = special.stdtrit(dof, 0.5 + confidence / 2) / z if dof else 1.0
            np.testing.assert_allclose(budget[name][f"widening_{side}"], w, rtol=RTOL)
        assert budget["calibration"][side] == calibration["relative_sd"]
        assert budget["matrix"][side] == calibration["matrix_sd"]
        assert budget["internal standard"][side] == (standard or {}).get("relative_sd")
        behind = (standard or {}).get("calibration")
        assert budget["calibration of the standard"][side] == (behind or {}).get("relative_sd")
        assert budget["drift"][side] == (phase["drift"] or {}).get("shift")
    a, b = phases(page)
    assert budget["calibration"]["cancels"] == (a["calibration_key"] == b["calibration_key"])
    keys = [(phase["internal_standard"] or {}).get("source_key") for phase in (a, b)]
    assert budget["calibration of the standard"]["cancels"] == (keys[0] is not None and keys[0] == keys[1])
    return budget


def squares(line: Page, page: Page, power: int) -> tuple[float, float]:
    """Squares of alpha's and beta's part, each times its widening to `power`; the drift's all with alpha."""
    if line["cancels"]:
        return 0.0, 0.0
    first, second = ((line[side] or 0.0) * line[f"widening_{side}"] ** power for side in ("alpha", "beta"))
    if line["source"] == "drift":
        a, b = (phase["calibration_key"] for phase in phases(page))
        return ((first - second) ** 2 if a == b else first**2 + second**2), 0.0
    return first**2, second**2


def check_result(page: Page) -> None:
    result, interval = page["result"], page["interval"]
    a, b = (phase["mean"]["mean_ppm"] for phase in phases(page))
    if result["D"] is not None and a is not None and b is not None:
        np.testing.assert_allclose(result["D"], a / b, rtol=RTOL)
    budget = check_budget(page)
    u = [
        math.sqrt(sum(one)) for one in zip(*(squares(budget[name], page, 1) for name in FACTORS), strict=True)
    ]
    np.testing.assert_allclose([interval["u_alpha"], interval["u_beta"]], u, rtol=RTOL)
    if interval["method"] != "fieller":
        return
    for side, phase, own in zip(("alpha", "beta"), phases(page), u, strict=True):
        mean = phase["mean"]
        counting = min(mean["counting_se_ppm"], mean["se_ppm"])
        np.testing.assert_allclose(budget["counting"][side], counting / mean["mean_ppm"], rtol=RTOL)
        spread = math.sqrt(max(mean["se_ppm"] ** 2 - counting**2, 0.0)) / mean["mean_ppm"]
        np.testing.assert_allclose(budget["spread"][side], spread, rtol=1e-6, atol=1e-12)
        np.testing.assert_allclose(
            interval[f"V_{side}"], mean["se_ppm"] ** 2 + own**2 * mean["mean_ppm"] ** 2, rtol=RTOL
        )
    plain = {line["source"]: sum(squares(line, page, 0)) for line in page["budget"]}
    for line in page["budget"]:
        np.testing.assert_allclose(line["squared"], plain[line["source"]], rtol=RTOL)
    if result["D_sd"] is not None:
        in_budget = sum(sum(squares(line, page, 0)) for line in page["budget"])
        np.testing.assert_allclose(result["D_sd"], result["D"] * math.sqrt(in_budget), rtol=RTOL)
        for line in page["budget"]:
            np.testing.assert_allclose(line["share"], line["squared"] / sum(plain.values()), rtol=RTOL)
        check_ends(page, a, b)


def roots(a: float, b: float, v_a: float, v_b: float, q: float) -> np.ndarray:
    return np.sort(np.roots([b**2 - q**2 * v_b, -2 * a * b, a**2 - q**2 * v_a]).real)


def check_ends(page: Page, a: float, b: float) -> None:
    interval, result = page["interval"], page["result"]
    r = {name: interval[f"r_{name}"] for name in ("alpha", "beta", "u")}
    np.testing.assert_allclose(sum(r.values()), 1.0, rtol=RTOL)
    dofs = interval["dof_alpha"], interval["dof_beta"]
    x = 1 + min(dofs) / max(dofs) * (1 - r["u"]) ** 4 - r["u"] * (1 - r["u"]) / 2
    np.testing.assert_allclose(interval["exponent"], x, rtol=RTOL)
    dof = 1 / (r["alpha"] ** x / dofs[0] + r["beta"] ** x / dofs[1])
    np.testing.assert_allclose(interval["dof"], dof, rtol=1e-8)
    t = special.stdtrit(dof, 0.5 + result["confidence"] / 2)
    np.testing.assert_allclose(interval["t"], t, rtol=1e-8)
    scatter = roots(a, b, interval["V_alpha"], interval["V_beta"], t)
    counting = roots(a, b, interval["V_alpha_counting"], interval["V_beta_counting"], interval["z"])
    np.testing.assert_allclose(result["D_lo"], min(scatter[0], counting[0]), rtol=1e-7)
    np.testing.assert_allclose(result["D_hi"], max(scatter[1], counting[1]), rtol=1e-7)
    classification = page["classification"]
    for one, name in zip(classification["boundaries"], ("highly", "compatible"), strict=True):
        B = one["value"]
        pivot = (a - B * b) / math.sqrt(interval["V_alpha"] + B**2 * interval["V_beta"])
        p = special.stdtr(dof, pivot)
        floor = special.ndtr(
            (a - B * b) / math.sqrt(interval["V_alpha_counting"] + B**2 * interval["V_beta_counting"])
        )
        above = min(p, floor) if a > B * b else max(p, floor)
        shown = (
            1 - classification["p_highly_incompatible"]
            if name == "highly"
            else classification["p_compatible"]
        )
        np.testing.assert_allclose(shown, above, rtol=1e-8, atol=1e-12)


def test_every_page_of_a_session_is_recomputed(source: Source):
    methods = set()
    for page in pages(source, step=7):
        methods.add(page["interval"]["method"])
        for phase in phases(page):
            check_phase(phase)
            check_standard(phase["internal_standard"])
            check_calibration(phase["calibration"])
        check_result(page)
    assert {"fieller", "likelihood"} <= methods


def test_limits_of_a_censored_mean_give_the_interval(source: Source):
    """MOVER-R written out; the limits of the means themselves come from the likelihood."""
    checked = 0
    for page in pages(source, interval="likelihood", kind="upper-limit"):
        interval, result = page["interval"], page["result"]
        a, b = (interval[f"limits_{side}"] for side in ("alpha", "beta"))
        u = interval["z"] * math.hypot(interval["u_alpha"], interval["u_beta"])
        low_b = b["mean_ppm"] - math.hypot(b["mean_ppm"] - b["low_ppm"], u * b["mean_ppm"])
        # high of a/b is 1 / low of b/a
        numerator = low_b * (2 * b["mean_ppm"] - low_b)
        product = a["mean_ppm"] * b["mean_ppm"]
        inside = product**2 - numerator * a["high_ppm"] * (2 * a["mean_ppm"] - a["high_ppm"])
        np.testing.assert_allclose(result["D_hi"], (product + math.sqrt(inside)) / numerator, rtol=1e-8)
        checked += 1
    assert checked > 3


def test_a_reference_value_that_was_ruled_out_is_told_and_has_no_part(tmp_path: Path):
    config = short_session(tmp_path)
    plain = source_of(config, ["calibrate.correct=bias"])
    with (config.parent / "ember" / "rulings.csv").open("a", encoding="utf-8") as file:
        file.write("TWG-1-L01,*,drop,A.N.,2026-03-14,bubble\nTWG-1-L01,Ni60,keep,M.T.,2026-03-15,not here\n")
        file.write("TWG-1-L02,Ni60,drop,M.T.,2026-03-15,spike\n")
    source = source_of(config, ["calibrate.correct=bias"])
    seen = set()
    for element, spot, who in (("Ni", "TWG-1-L02", "M.T."), ("Sc", "TWG-1-L01", "A.N.")):
        page = trace(source, "EM-02", "olivine", "glass", element)
        before = trace(plain, "EM-02", "olivine", "glass", element)
        for phase, other in zip(phases(page), phases(before), strict=True):
            calibration = phase["calibration"]
            check_calibration(calibration)
            (ruled,) = calibration["ruled_out"]
            assert (ruled["material"], ruled["spot"], ruled["analyst"]) == ("TWG-1", spot, who)
            (material,), (whole,) = calibration["materials"], other["calibration"]["materials"]
            named = [{one["spot"] for one in listed["spots"]} for listed in (material, whole)]
            assert named[1] - named[0] == {spot}
            assert other["calibration"]["ruled_out"] == []
            seen.add(calibration["factor"] == other["calibration"]["factor"])
        printed = io.StringIO()
        Console(file=printed, width=200).print(trace_tree(page))
        assert printed.getvalue().count("ruled out of TWG-1: " + spot) == 1
    assert seen == {False}


@pytest.mark.parametrize(
    "overrides",
    [
        ["calibrate.correct=bias"],
        ["calibrate.correct=bias+drift", "calibrate.drift_p=0.9"],
        ["calibrate.drift_p=0.9"],
        ["pair.mean=arithmetic"],
        ["pair.mean=huber"],
        ["pair.mean=median"],
        ["pair.average=grains"],
        ["partition.interval=gum-s1"],
        ["calibrate.matrix_sd={laser=0.02}"],
        ["screen.overlap.use=unmix"],
    ],
)
def test_page_agrees_under_other_settings(tmp_path: Path, overrides: list[str]):
    source = source_of(short_session(tmp_path), overrides)
    for page in pages(source, step=29):
        for phase in phases(page):
            assert phase["mean"]["agrees"]
            for unit in (mean := phase["mean"]).get("units") or ():
                assert unit["sd_ppm"] >= unit["counting_sd_ppm"]
            if mean.get("units"):
                grains = column(mean["units"], "mean_ppm")
                np.testing.assert_allclose(np.sum(mean["weights"] * grains), mean["mean_ppm"], rtol=1e-8)
            if "average" not in overrides[0] and "unmix" not in overrides[0]:
                check_phase(phase)
            check_calibration(phase["calibration"])
            check_standard(phase["internal_standard"])
        if "partition" not in overrides[0]:
            check_result(page)


def test_across_batches_the_calibration_is_followed_to_the_reference_spots(tmp_path: Path):
    source = source_of(demo_copy(tmp_path))
    rows = [row for row in source.tables["classify"].to_pylist() if row["batch_alpha"] != row["batch_beta"]]
    assert rows
    for row in rows[::20]:
        page = trace(source, row["experiment"], row["alpha"], row["beta"], row["element"])
        for phase in phases(page):
            assert phase["calibration"]["materials"]
            check_calibration(phase["calibration"])
            check_standard(phase["internal_standard"])
        check_result(page)


MATERIALS = {"R1": (52.0, 60.0, 0.6), "R2": (48.0, 200.0, 2.0), "R3": (50.0, 80.0, 30.0)}
SESSION = """
[[ingest.tables]]
path = "probe.csv"
technique = "EPMA"
unit = "wt%"
columns = { spot = "Point", batch = "Session", experiment = "Run", phase = "Phase" }
sigma = { pattern = "{analyte} 1s" }

[[ingest.tables]]
path = "laser.csv"
technique = "laser"
unit = "ppm"
columns = { spot = "Point", batch = "Session", experiment = "Run", phase = "Phase" }
sigma = { pattern = "{analyte} 1s" }

[ingest.reference_materials]
path = "accepted.csv"

[[convert.internal_standard]]
technique = "laser"
element = "SiO2"
unit = "wt%"
assumed_from = "table"
actual = "probe-mean"
source_technique = "EPMA"
"""


def session_in_many_batches(folder: Path, correct: str, oxide: str = "SiO2", metal: str = "Ni") -> Source:
    """Every phase in batches of its own, by both techniques, with three reference materials of which one is hardly known.

    The laser table holds its assumed SiO2 spot by spot; the second laser batch drifts. oxide, metal: of what the
    accepted values are.
    """
    random = np.random.default_rng(7)
    probe, laser = [], []
    for number, (phase, silica, nickel) in enumerate((("olivine", 40.0, 2000.0), ("glass", 50.0, 150.0))):
        names = [(f"{phase}-{place}", "X1", phase, silica, nickel) for place in range(6)]
        names += [
            (f"{name}-{number}-{place}", "", name, *MATERIALS[name][:2])
            for place in range(8)
            for name in MATERIALS
        ]
        for place, (spot, run, name, si, ni) in enumerate(names):
            value = round(float(si * 1.01 * random.normal(1, 0.004)), 4)
            probe.append((spot + "p", f"probe-{number}", run, name, value, 0.12))
            gain = (1.05 - 0.03 * number) * (1 + 0.004 * number * place)
            value = round(float(ni * gain * random.normal(1, 0.014)), 5)
            laser.append((spot + "l", f"laser-{number}", run, name, si + place % 2, 0.2, value, 0.02 * ni))
    accepted = [
        line
        for name, (si, ni, ni_sd) in MATERIALS.items()
        for line in ((name, oxide, si, "wt%", 0.1, "invented"), (name, metal, ni, "ppm", ni_sd, "invented"))
    ]
    own = ("Point", "Session", "Run", "Phase")
    session = small_session(
        folder,
        {
            "probe.csv": ((*own, "SiO2", "SiO2 1s"), probe),
            "laser.csv": ((*own, "SiO2 (wt%)", "SiO2 1s", "Ni", "Ni 1s"), laser),
            "accepted.csv": (("material", "analyte", "value", "unit", "sd", "source"), accepted),
        },
        f"{SESSION}\n[calibrate]\ndrift_p = 0.2\ncorrect = {correct}\n",
    )
    runner.run(session)
    session, tables, files = runner.finished(session, "classify")
    return Source(tables, session.settings, files)


@pytest.mark.parametrize("correct", ["false", '"bias"', '"bias+drift"'])
def test_several_materials_drift_and_standards_from_two_batches(tmp_path: Path, correct: str):
    source = session_in_many_batches(tmp_path, correct)
    page = trace(source, "X1", "olivine", "glass", "Ni")
    for phase in phases(page):
        check_phase(phase)
        check_standard(phase["internal_standard"])
        check_calibration(phase["calibration"])
        weights = {one["material"]: one["weight"] for one in phase["calibration"]["materials"]}
        assert weights["R3"] is None
        assert weights["R1"] + weights["R2"] == pytest.approx(1.0)
        assert len({spot["assumed"]["raw"] for spot in phase["spots_used"]}) == 2
    check_result(page)
    budget = {line["source"]: line for line in page["budget"]}
    assert not any(line["cancels"] for line in budget.values())
    assert budget["calibration of the standard"]["squared"] > 0
    assert (budget["drift"]["squared"] > 0) == (correct != '"bias+drift"')
    assert (page["beta_phase"]["calibration"]["drift_applied"] != 0) == (correct == '"bias+drift"')
    (row,) = [row for row in source.tables["classify"].to_pylist() if row["element"] == "Ni"]
    calibration = ("calibration", "matrix", "drift", "calibration of the standard")
    assert row["share_calibration"] == pytest.approx(sum(budget[name]["share"] for name in calibration))
    assert row["share_internal_standard"] == pytest.approx(budget["internal standard"]["share"])


def test_an_uncertainty_that_nothing_tells_is_said_and_has_no_share(tmp_path: Path):
    source = session_in_many_batches(tmp_path, "false", oxide="MgO", metal="Co")
    page = trace(source, "X1", "olivine", "glass", "Ni")
    unknown = {line["source"] for line in page["budget"] if line["unknown"]}
    assert unknown == {"calibration", "calibration of the standard"}
    assert {line["share"] for line in page["budget"] if line["unknown"]} == {None}
    assert not page["result"]["complete"]
    assert page["classification"]["class"] == "unresolved"
    assert any("does not cover" in line for line in page["classification"]["how"])


def test_ruling_and_finding_are_told_with_person_date_and_reason(source: Source):
    page = trace(source, "EM-02", "olivine", "glass", "Ni")
    (left_out,) = page["alpha_phase"]["spots_left_out"]
    assert left_out["spot"] == "EM02-ol-L2"
    (ruling,) = [one for one in left_out["findings"] if one["code"] == "ruling"]
    assert (ruling["analyst"], ruling["date"]) == ("K.V.", "2026-03-12")
    assert ruling["reason"] == "too high, by far (see notes)"
    # Its other values are used: the ruling is on one analyte.
    other = trace(source, "EM-02", "olivine", "glass", "Co")
    assert "EM02-ol-L2" in {spot["spot"] for spot in other["alpha_phase"]["spots_used"]}


def test_cells_are_those_of_the_file(source: Source):
    page = trace(source, "EM-02", "olivine", "glass", "Ni")
    (table,) = {spot["table"] for spot in page["alpha_phase"]["spots_used"]}
    lines = bytes(source.files[table].data).decode().splitlines()
    header = lines[0].split(",")
    for spot in page["alpha_phase"]["spots_used"]:
        for cell in spot["cells"].values():
            assert lines[cell["row"] - 1].split(",")[header.index(cell["column"])] == cell["raw"]


def test_the_printed_page_holds_the_numbers(source: Source):
    """D from the printed means, and the mean from the printed weights, to the digits printed."""

    page = trace(source, "EM-05", "clinopyroxene", "glass", "Cr")
    for width in (80, 120):
        console = Console(width=width, record=True, file=io.StringIO())
        console.print(trace_tree(page))
        text = console.export_text()
        assert max(len(line) for line in text.splitlines()) <= width
        a, b, D = (float(one) for one in re.search(r"D = (\S+) / (\S+) = (\S+)", text).groups())  # type: ignore[union-attr]
        assert pytest.approx(a / b, rel=2e-6) == D
        rows = [line.split() for line in text.splitlines() if re.search(r"EM05-cpx-L\d +\d+ ", line)]
        used = len(page["alpha_phase"]["spots_used"])
        start = 1 + rows[0].index(page["alpha_phase"]["spots_used"][0]["spot"])
        rows = [row[start:] for row in rows[:used]]
        x = np.array([float(row[3]) for row in rows])
        p = np.array([float(row[-1]) for row in rows])
        assert np.sum(p * x) == pytest.approx(a, rel=1e-6)


def test_command_and_its_refusals(tmp_path: Path):
    config = short_session(tmp_path)
    session = load(config)
    with pytest.raises(InputError, match="ingest is missing"):
        runner.finished(session, "classify")
    runner.run(session)
    arguments = ["trace", str(config), "EM-02", "olivine/glass", "Ni"]
    result = CliRunner().invoke(app, [*arguments, "--json"])
    assert json.loads(result.stdout)["result"]["kind"] == "value"
    assert "reference materials" in CliRunner().invoke(app, arguments).stdout
    for wrong, told in ((["EM-2", "olivine/glass", "Ni"], "EM-02"), (["EM-02", "olivine/glass", "Xx"], "Ni")):
        error = CliRunner().invoke(app, ["trace", str(config), *wrong]).exception
        assert isinstance(error, InputError)
        assert told in str(error)
    with pytest.raises(InputError, match="stale"):
        runner.finished(load(config, overrides=["partition.confidence=0.9"]), "classify")


@pytest.mark.parametrize(
    ("alpha", "beta", "remedy"),
    [
        ("ol", "gl", 'Did you mean "olivine/glass"?'),
        ("olivine", "Melt", 'Did you mean "olivine/glass"?'),
        ("glass", "cpx", 'Did you mean "clinopyroxene/glass"?'),
        ("green", "glass", 'Did you mean "olivine/glass"?'),
        ("olivin", "glass", 'Did you mean "olivine/glass"?'),
        ("titanite", "fluid", "There are: olivine/glass, clinopyroxene/glass."),
    ],
)
def test_a_pair_that_is_not_there_names_the_one_that_is_meant(source, alpha, beta, remedy):
    spellings = {**source.settings.ingest.phases, "olivine": ("green",)}
    with pytest.raises(InputError) as error:
        find_coefficient(source.tables["classify"], "EM-02", alpha, beta, "Ni", spellings)
    (problem,) = error.value.problems
    assert problem.message == f'no D of the pair "{alpha}/{beta}" in EM-02.'
    assert problem.remedy == remedy
