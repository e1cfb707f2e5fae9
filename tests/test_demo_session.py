"""The demo session is what its script writes and is physically consistent, by arithmetic of its own."""

from __future__ import annotations

import csv
import subprocess
import sys
import tomllib
from collections import Counter, defaultdict
from pathlib import Path

import numpy as np
import periodictable
import pytest

from tieline.settings import SessionSettings

ROOT = Path(__file__).resolve().parent.parent
SCRIPT = ROOT / "example_runs" / "write_ember.py"
EMBER = ROOT / "configs" / "ember"
CATIONS_AND_OXYGENS = {"SiO2": (1, 2), "TiO2": (1, 2), "Al2O3": (2, 3), "Cr2O3": (2, 3), "FeO": (1, 1),
                       "MnO": (1, 1), "MgO": (1, 1), "NiO": (1, 1), "CaO": (1, 1), "Na2O": (2, 1),
                       "K2O": (2, 1)}  # fmt: skip
IDEAL = {"olivine": (4, 3.0), "clinopyroxene": (6, 4.0), "plagioclase": (8, 5.0)}
CONFIGURATION = tomllib.loads((ROOT / "configs" / "ember.toml").read_text(encoding="utf-8"))
ASSUMED_SIO2 = CONFIGURATION["convert"]["internal_standard"][0]["assumed"]
MOLAR_MASS = {oxide: periodictable.formula(oxide).mass for oxide in CATIONS_AND_OXYGENS}


def read(name: str) -> list[dict[str, str]]:
    with (EMBER / name).open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


TRUTH = {row["spot"]: row for row in read("truth/spots.csv")}
PROBE, LASER = read("probe.csv"), read("laser.csv")
ISOTOPES = [name for name in LASER[0] if f"{name} 1s" in LASER[0]]


def element_of(isotope: str) -> str:
    return isotope.rstrip("0123456789")


def true_compositions() -> dict[tuple[str, str], dict[str, float]]:
    table: dict[tuple[str, str], dict[str, float]] = defaultdict(dict)
    for row in read("truth/compositions.csv"):
        table[row["experiment"], row["phase"]][row["analyte"]] = float(row["value"])
    return table


COMPOSITIONS = true_compositions()
COEFFICIENTS = {
    (row["experiment"], row["alpha"], row["element"]): float(row["D"])
    for row in read("truth/partition_coefficients.csv")
}
PROPORTIONS = {
    (r["experiment"], r["phase"]): float(r["mass_fraction"]) for r in read("truth/phase_proportions.csv")
}


def clean_groups(rows: list[dict[str, str]]) -> dict[tuple[str, str], list[dict[str, str]]]:
    groups = defaultdict(list)
    for row in rows:
        truth = TRUTH.get(row["Point"])
        if truth and truth["condition"] == "clean":
            groups[truth["experiment"], truth["phase"]].append(row)
    return groups


CLEAN_PROBE, CLEAN_LASER = clean_groups(PROBE), clean_groups(LASER)


def cation_sum(oxides: dict[str, float], oxygens: int) -> float:
    moles = {oxide: oxides[oxide] / MOLAR_MASS[oxide] for oxide in CATIONS_AND_OXYGENS}
    cations = sum(moles[oxide] * CATIONS_AND_OXYGENS[oxide][0] for oxide in moles)
    return oxygens * cations / sum(moles[oxide] * CATIONS_AND_OXYGENS[oxide][1] for oxide in moles)


def exchange(crystal: dict[str, float], glass: dict[str, float]) -> float:
    return (crystal["FeO"] / crystal["MgO"]) / (glass["FeO"] / glass["MgO"])


def oxide_means(rows: list[dict[str, str]]) -> dict[str, float]:
    return {oxide: float(np.mean([float(row[oxide]) for row in rows])) for oxide in CATIONS_AND_OXYGENS}


# --- files ---


def run_script(*arguments: str, script: Path = SCRIPT) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, str(script), *arguments], capture_output=True, text=True, check=False
    )


def test_script_reproduces_the_committed_bytes():
    result = run_script("--check")
    assert (result.returncode, result.stderr) == (0, "")


def test_check_names_the_file_that_differs(tmp_path):
    for name in ("write_ember.py", "ember_charges.py"):
        (tmp_path / "example_runs").mkdir(exist_ok=True)
        (tmp_path / "example_runs" / name).write_bytes((SCRIPT.parent / name).read_bytes())
    script = tmp_path / "example_runs" / "write_ember.py"
    assert run_script(script=script).returncode == 0
    written = tmp_path / "configs" / "ember"
    names = {path.relative_to(written) for path in written.rglob("*.csv")}
    assert names == {path.relative_to(EMBER) for path in EMBER.rglob("*.csv")}
    content = (written / "laser.csv").read_bytes()
    (written / "laser.csv").write_bytes(content.replace(b"8", b"9", 1))
    (written / "truth" / "spots.csv").unlink()
    result = run_script("--check", script=script)
    assert result.returncode == 1
    assert result.stderr.count("differs") == 2
    assert "laser.csv" in result.stderr
    assert "spots.csv" in result.stderr


def test_script_stands_alone():
    for name in ("write_ember.py", "ember_charges.py"):
        assert "tieline" not in (SCRIPT.parent / name).read_text(encoding="utf-8")


def test_configuration_is_valid_and_names_what_exists():
    settings = SessionSettings.model_validate(CONFIGURATION)
    ingest = settings.ingest
    assert ingest.experiments
    assert ingest.reference_materials.path
    assert settings.screen.rulings
    for path in (ingest.experiments.path, ingest.reference_materials.path, settings.screen.rulings):
        assert (ROOT / "configs" / path).is_file()
    for table in ingest.tables:
        header = read(Path(table.path).name)[0].keys()
        named = table.columns.model_dump(exclude_none=True, exclude={"ignore"})
        assert set(named.values()) | set(table.columns.ignore) <= header
        assert table.sigma
        assert table.limit
        others = {*named.values(), *table.columns.ignore}
        analytes = [name for name in header if name not in others and not name.endswith((" 1s", " DL"))]
        assert len(analytes) == (11 if table.technique == "EPMA" else 33)
        for analyte in analytes:
            assert table.sigma.pattern.format(analyte=analyte) in header
            assert (table.limit.pattern or "").format(analyte=analyte) in header
    labels = {label for spellings in ingest.phases.values() for label in spellings}
    materials = {row["material"] for row in read("accepted.csv")}
    assert {row["Phase"] for row in PROBE + LASER} == labels | materials


# --- what a real session contains ---


def test_every_spot_has_its_truth_and_labels_are_unique():
    unknowns = [row["Point"] for row in PROBE + LASER if row["Run"]]
    assert Counter(unknowns) == Counter(list(TRUTH))
    assert max(Counter(row["Point"] for row in PROBE + LASER).values()) == 1


def test_sizes():
    conditions = read("experiments.csv")
    assert len(conditions) == 10
    assert len({(row["T"], row["P"]) for row in conditions}) == 10
    for rows, glass, crystal in ((PROBE, (6, 8), (6, 8)), (LASER, (4, 6), (5, 7))):
        sizes = Counter((row["Run"], row["Phase"]) for row in rows if row["Run"])
        assert {run for run, _ in sizes} == {row["Run"] for row in conditions}
        for (_, phase), size in sizes.items():
            low, high = glass if phase == "gl" else crystal
            assert low <= size <= high
    assert len(ISOTOPES) >= 25


def test_conditions_of_spots():
    counts = Counter(row["condition"] for row in TRUTH.values())
    assert (
        counts["mislabelled"] == counts["bad-total"] == counts["crystal-in-glass"] == counts["inclusion"] == 1
    )
    assert counts["low-total"] == 2
    for table in ("probe.csv", "laser.csv"):
        crystals = [r for r in TRUTH.values() if r["table"] == table and r["labelled"] != "glass"]
        overlaps = [r for r in crystals if r["condition"] == "overlap"]
        assert 0.15 <= len(overlaps) / len(crystals) <= 0.20
        assert all(5e-4 <= float(r["overlap_fraction"]) <= 5e-2 for r in overlaps)
        heavy = Counter(r["condition"] for r in crystals if r["experiment"] == "EM-04")
        assert heavy["overlap"] > heavy["clean"] >= 6
    zoned = {(r["experiment"], r["labelled"]) for r in TRUTH.values() if r["condition"] == "zoned"}
    assert zoned == {("EM-07", "clinopyroxene")}


def test_batches_begin_and_end_with_the_reference_glass():
    for rows in (PROBE, LASER):
        for batch in {row["Session"] for row in rows}:
            unknown = [bool(row["Run"]) for row in rows if row["Session"] == batch]
            assert not unknown[0]
            assert not unknown[-1]
            assert "1" * 16 not in "".join("01"[flag] for flag in unknown)
    shared = defaultdict(set)
    for row in LASER:
        if row["Run"]:
            shared[row["Run"]].add(row["Session"])
    assert [run for run, sessions in shared.items() if len(sessions) > 1] == ["EM-06"]


def test_limits_stand_for_values_only_below_the_limit():
    limit_only = 0
    for row in LASER:
        for isotope in ISOTOPES:
            text, limit = row[isotope], row[f"{isotope} DL"]
            if text.startswith("<"):
                limit_only += 1
                assert text == f"<{limit}"
                assert row[f"{isotope} 1s"] == ""
            else:
                assert float(text) >= float(limit)
                assert float(row[f"{isotope} 1s"]) > 0
    assert limit_only > 300
    below = sum(
        float(row[oxide]) < float(row[f"{oxide} DL"]) for row in PROBE for oxide in CATIONS_AND_OXYGENS
    )
    assert below > 300


def test_rulings_speak_of_spots_that_exist():
    rulings = {row["spot"]: row for row in read("rulings.csv")}
    assert sorted(row["verdict"] for row in rulings.values()) == ["drop", "keep"]
    assert {TRUTH[spot]["condition"] for spot in rulings} == {"inclusion", "low-total"}


# --- physical consistency ---


def test_true_crystals_are_stoichiometric_and_exchange_iron_and_magnesium():
    for (run, phase), composition in COMPOSITIONS.items():
        assert sum(composition[oxide] for oxide in CATIONS_AND_OXYGENS) == pytest.approx(100, abs=2e-5)
        if phase in IDEAL:
            assert cation_sum(composition, IDEAL[phase][0]) == pytest.approx(IDEAL[phase][1], abs=1e-4)
        if phase == "olivine":
            assert exchange(composition, COMPOSITIONS[run, "glass"]) == pytest.approx(0.30, abs=0.02)
        if phase == "clinopyroxene":
            assert exchange(composition, COMPOSITIONS[run, "glass"]) == pytest.approx(0.25, abs=0.02)


def test_true_phases_balance_with_the_starting_material():
    start = {row["analyte"]: float(row["value"]) for row in read("starting_composition.csv")}
    runs = {run for run, _ in PROPORTIONS}
    bulk: dict[str, dict[str, float]] = {run: defaultdict(float) for run in runs}
    for (run, phase), fraction in PROPORTIONS.items():
        for analyte, value in COMPOSITIONS[run, phase].items():
            bulk[run][analyte] += fraction * value
    for run in runs:
        assert sum(f for (r, _), f in PROPORTIONS.items() if r == run) == pytest.approx(1)
        for oxide, value in start.items():
            assert bulk[run][oxide] == pytest.approx(value, rel=1e-5)
        for analyte, value in bulk[run].items():
            assert value == pytest.approx(bulk["EM-01"][analyte], rel=1e-5)


def test_true_coefficients_are_ratios_of_the_true_compositions():
    for (run, phase, element), d in COEFFICIENTS.items():
        analyte = next(
            (o for o in CATIONS_AND_OXYGENS if o.rstrip("0123456789O").rstrip("2") == element), element
        )
        ratio = COMPOSITIONS[run, phase][analyte] / COMPOSITIONS[run, "glass"][analyte]
        assert d == pytest.approx(ratio, rel=1e-5)


def test_clean_probe_spots_have_good_totals_and_cation_sums():
    tolerance = {"olivine": 0.02, "clinopyroxene": 0.02, "plagioclase": 0.05}
    for (_, phase), rows in CLEAN_PROBE.items():
        for row in rows:
            oxides = {oxide: float(row[oxide]) for oxide in CATIONS_AND_OXYGENS}
            assert sum(oxides.values()) == pytest.approx(float(row["Total"]), abs=0.012)
            assert 98.0 < sum(oxides.values()) < 102.0
            if phase in IDEAL:
                assert abs(cation_sum(oxides, IDEAL[phase][0]) - IDEAL[phase][1]) < tolerance[phase]


def test_marred_probe_spots_show_it():
    by_spot = {row["Point"]: row for row in PROBE}
    for spot, truth in TRUTH.items():
        if truth["condition"] in ("bad-total", "low-total"):
            assert float(by_spot[spot]["Total"]) < 98.5
        if truth["condition"] == "mislabelled":
            row = by_spot[spot]
            assert row["Phase"] == "ol"
            assert truth["phase"] == "clinopyroxene"
            oxides = {oxide: float(row[oxide]) for oxide in CATIONS_AND_OXYGENS}
            assert cation_sum(oxides, 6) == pytest.approx(4.0, abs=0.02)
            assert oxides["CaO"] > 15


def test_clean_probe_means_keep_exchange_and_mass_balance():
    start = {row["analyte"]: float(row["value"]) for row in read("starting_composition.csv")}
    for run in {run for run, _ in PROPORTIONS}:
        phases = [phase for r, phase in PROPORTIONS if r == run]
        means = {phase: oxide_means(CLEAN_PROBE[run, phase]) for phase in phases}
        for phase in {"olivine", "clinopyroxene"} & set(phases):
            true = exchange(COMPOSITIONS[run, phase], COMPOSITIONS[run, "glass"])
            if (run, phase) != ("EM-07", "clinopyroxene"):
                assert exchange(means[phase], means["glass"]) == pytest.approx(true, rel=0.03)
        matrix = np.array([[means[phase][oxide] for phase in phases] for oxide in CATIONS_AND_OXYGENS])
        target = np.array([start[oxide] for oxide in CATIONS_AND_OXYGENS])
        fitted, residual, *_ = np.linalg.lstsq(matrix, target, rcond=None)
        assert residual[0] < 1.0
        np.testing.assert_allclose(fitted, [PROPORTIONS[run, phase] for phase in phases], atol=0.04)


def laser_mean(rows: list[dict[str, str]], isotope: str) -> tuple[float, float] | None:
    """Mean and squared relative standard error; None where a value is only a limit."""
    texts = [row[isotope] for row in rows]
    if any(text.startswith("<") for text in texts):
        return None
    values = np.array([float(text) for text in texts])
    mean = float(values.mean())
    return mean, float(values.var(ddof=1) / len(values) / mean**2)


def measured_over_true(run: str, phase: str, isotope: str) -> tuple[float, float] | None:
    """D of clean laser spots, rescaled to the probe's SiO2, over the true D; and its standard error."""
    sides = []
    for name in (phase, "glass"):
        mean = laser_mean(CLEAN_LASER[run, name], isotope)
        if mean is None:
            return None
        silica = [float(row["SiO2"]) for row in CLEAN_PROBE[run, name]]
        variance = mean[1] + np.var(silica, ddof=1) / len(silica) / np.mean(silica) ** 2
        sides.append((mean[0] * np.mean(silica) / ASSUMED_SIO2[name], variance))
    ratio = sides[0][0] / sides[1][0] / COEFFICIENTS[run, phase, element_of(isotope)]
    return float(ratio), float(ratio * np.sqrt(sides[0][1] + sides[1][1]))


def test_clean_laser_spots_give_the_true_coefficients():
    # spots share growth and internal-standard scatter over the elements, so only the whole is judged
    deviations = []
    for run, phase in CLEAN_LASER:
        if phase == "glass" or run == "EM-06":
            continue
        for isotope in ISOTOPES:
            found = measured_over_true(run, phase, isotope)
            if found:
                deviations.append((found[0] - 1) / found[1])
    assert len(deviations) > 350
    # t-like deviations of means of 3 to 7 spots: near 1 by robust scale, heavier tails than normal
    assert 0.7 < np.median(np.abs(deviations)) / 0.6745 < 1.5
    assert np.abs(np.mean(deviations)) < 0.4
    assert np.mean(np.abs(deviations) > 4) < 0.03


def test_laser_batches_differ_where_one_experiment_spans_them():
    deviations = {True: [], False: []}
    for isotope in ISOTOPES:
        references = [
            np.mean([float(r[isotope]) for r in LASER if not r["Run"] and r["Session"] == batch])
            for batch in ("laser-1", "laser-2")
        ]
        for phase in ("olivine", "clinopyroxene", "plagioclase"):
            found = measured_over_true("EM-06", phase, isotope)
            if found and found[1] < 0.03:
                between = references[1] / references[0]
                deviations[False].append((found[0] - 1) / found[1])
                deviations[True].append((found[0] * between - 1) / found[1])
    spread = {corrected: float(np.std(values)) for corrected, values in deviations.items()}
    assert len(deviations[True]) > 40
    assert spread[True] < spread[False]


def test_overlapped_laser_spots_lie_on_the_line_to_the_glass():
    # Ba of olivine and clinopyroxene is all glass: Ba of the spot over Ba of the glass is the fraction
    checked = 0
    for row in LASER:
        truth = TRUTH.get(row["Point"])
        if not truth or truth["condition"] != "overlap" or truth["phase"] == "plagioclase":
            continue
        run, phase = truth["experiment"], truth["phase"]
        fraction = float(truth["overlap_fraction"])
        silica, melt_silica = COMPOSITIONS[run, phase]["SiO2"], COMPOSITIONS[run, "glass"]["SiO2"]
        silica += fraction * (melt_silica - silica)
        to_fraction = silica / ASSUMED_SIO2[phase] / COMPOSITIONS[run, "glass"]["Ba"]
        # 4 sigma of counting, and 5 % for the batch's bias and the internal standard's scatter
        margin = 4 * float(row["Ba137 1s"]) * to_fraction + 0.05 * fraction
        assert float(row["Ba137"]) * to_fraction == pytest.approx(fraction, abs=margin)
        checked += 1
    assert checked >= 15
    for (_, phase), rows in CLEAN_LASER.items():
        if phase in ("olivine", "clinopyroxene"):
            assert sum(row["Ba137"].startswith("<") for row in rows) >= len(rows) - 2


def test_crystal_in_glass_and_inclusion_are_visible():
    for row in LASER:
        condition = TRUTH.get(row["Point"], {"condition": ""})["condition"]
        if condition == "inclusion":
            normal = laser_mean(CLEAN_LASER["EM-05", "clinopyroxene"], "Cr53")
            assert normal
            assert float(row["Cr53"]) > 2 * normal[0]
        if condition == "crystal-in-glass":
            normal = laser_mean(CLEAN_LASER["EM-08", "glass"], "Ba137")
            assert normal
            assert float(row["Ba137"]) == pytest.approx(normal[0] * (1 - 0.12), rel=0.05)


def test_zoned_clinopyroxene_rises_in_incompatible_elements_toward_the_rim():
    rows = [row for row in LASER if row["Run"] == "EM-07" and row["Phase"] == "cpx"]
    distances = np.array([float(row["Rim um"]) for row in rows])
    for isotope in ("La139", "Zr90", "Ti49"):
        values = np.array([float(row[isotope]) for row in rows])
        assert np.corrcoef(distances, values)[0, 1] < -0.85
        assert values[distances > 60].mean() < 0.85 * values[distances <= 20].mean()
