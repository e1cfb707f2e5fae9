"""Published conversions and end-members, from a CSV table through `tieline run` to the stage files.

Factors: element over oxide mass fraction from the standard atomic weights of Prohaska et al. (2022), Pure
Appl. Chem. 94:573, computed outside with a general-purpose chemistry library. End-members: wt% of the ideal
formulas, from the same weights.
"""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pandas as pd
import pytest

from sessions import result, small_session

FACTORS = """SiO2 .46744; TiO2 .59935; Al2O3 .52926; Cr2O3 .68421; V2O3 .67976; Fe2O3 .69943; FeO .77731; MnO .77446;
MgO .60304; NiO .78580; CoO .78649; ZnO .80340; CuO .79887; CaO .71470; SrO .84560; BaO .89565; Li2O .46454; Na2O .74186;
K2O .83015; Rb2O .91441; Cs2O .94323; P2O5 .43643; Sc2O3 .65197; Y2O3 .78744; La2O3 .85268; Ce2O3 .85377; Nd2O3 .85736;
Sm2O3 .86236; Eu2O3 .86362; Gd2O3 .86759; Dy2O3 .87132; Er2O3 .87452; Yb2O3 .87821; Lu2O3 .87938; ZrO2 .74032; HfO2 .84798;
Nb2O5 .69905; Ta2O5 .81897; ThO2 .87881; UO2 .88150; SO3 .40046; H2O .11191; CO2 .27292"""

# phase -> (wt% of the ideal formula, cation sum)
END_MEMBERS = {
    ("Fo", "olivine"): ({"MgO": 57.29, "SiO2": 42.71}, 3),
    ("Fa", "olivine"): ({"FeO": 70.51, "SiO2": 29.49}, 3),
    ("En", "orthopyroxene"): ({"MgO": 40.15, "SiO2": 59.85}, 4),
    ("Di", "clinopyroxene"): ({"CaO": 25.90, "MgO": 18.61, "SiO2": 55.49}, 4),
    ("Hd", "clinopyroxene"): ({"CaO": 22.60, "FeO": 28.96, "SiO2": 48.44}, 4),
    ("Jd", "clinopyroxene"): ({"Na2O": 15.33, "Al2O3": 25.22, "SiO2": 59.45}, 4),
    ("An", "plagioclase"): ({"CaO": 20.16, "Al2O3": 36.65, "SiO2": 43.19}, 5),
    ("Ab", "plagioclase"): ({"Na2O": 11.82, "Al2O3": 19.44, "SiO2": 68.74}, 5),
    ("Kfs", "alkali feldspar"): ({"K2O": 16.92, "Al2O3": 18.32, "SiO2": 64.76}, 5),
    ("Prp", "garnet"): ({"MgO": 29.99, "Al2O3": 25.29, "SiO2": 44.71}, 8),
    ("Alm", "garnet"): ({"FeO": 43.30, "Al2O3": 20.48, "SiO2": 36.21}, 8),
    ("Grs", "garnet"): ({"CaO": 37.35, "Al2O3": 22.64, "SiO2": 40.02}, 8),
    ("Spl", "spinel"): ({"MgO": 28.33, "Al2O3": 71.67}, 3),
    ("Ilm", "ilmenite"): ({"FeO": 47.36, "TiO2": 52.64}, 2),
    ("Zrn", "zircon"): ({"ZrO2": 67.22, "SiO2": 32.78}, 2),
    ("Ttn", "titanite"): ({"CaO": 28.61, "TiO2": 40.74, "SiO2": 30.65}, 3),
    ("Ap", "apatite"): ({"CaO": 55.60, "P2O5": 42.22, "F": 3.77}, 8),
}

TABLE = """
[[ingest.tables]]
path = "probe.csv"
batch = "one"
unit = "wt%"
columns = { spot = "Point", experiment = "Run", phase = "Phase" }
"""


def run_until_convert(config: Path) -> None:
    command = [sys.executable, "-m", "tieline", "run", str(config), "--until", "convert", "--quiet"]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr


def test_oxide_factors(tmp_path: Path):
    factors = dict(part.split() for part in FACTORS.replace("\n", " ").split("; "))
    header = ["Point", "Run", "Phase", *factors]
    # FeO and Fe2O3 of one spot would be added up: one spot each.
    rows = [
        ["a", "X", "gl", *("" if oxide == "Fe2O3" else 1 for oxide in factors)],
        ["b", "X", "gl", *(1 if oxide == "Fe2O3" else "" for oxide in factors)],
    ]
    session = small_session(tmp_path, {"probe.csv": (header, rows)}, TABLE)
    run_until_convert(session.path)
    found = result(session, "convert").dropna(subset="value_ppm").set_index("analyte")["value_ppm"] / 1e4
    assert set(found.index) == set(factors)
    for oxide, factor in factors.items():
        # Sulfur's standard weight is an interval; libraries round its middle differently.
        assert found[oxide] == pytest.approx(float(factor), abs=5e-5 if oxide == "SO3" else 2e-5), oxide


@pytest.fixture(scope="module")
def end_members(tmp_path_factory: pytest.TempPathFactory) -> pd.DataFrame:
    oxides = sorted({oxide for composition, _ in END_MEMBERS.values() for oxide in composition})
    rows = [
        [name, "X", phase, *(composition.get(oxide, "") for oxide in oxides)]
        for (name, phase), (composition, _) in END_MEMBERS.items()
    ]
    folder = tmp_path_factory.mktemp("ends")
    # A bare F may be many things; its unit makes it fluorine.
    headers = ["F (wt%)" if oxide == "F" else oxide for oxide in oxides]
    session = small_session(folder, {"probe.csv": (["Point", "Run", "Phase", *headers], rows)}, TABLE)
    run_until_convert(session.path)
    return result(session, "convert.formula").set_index("spot")


def test_cation_sums_of_ideal_end_members(end_members: pd.DataFrame):
    for (name, _), (_, expected) in END_MEMBERS.items():
        # wt% to two decimals leave a few 1e-4 at most.
        assert end_members.loc[name, "cation_sum"] == pytest.approx(expected, abs=6e-4), name


def test_totals_of_ideal_end_members(end_members: pd.DataFrame):
    for (name, _), (composition, _) in END_MEMBERS.items():
        # O=F 0.42106: 3.77 wt% F replace 1.59 wt% O in fluorapatite.
        expected = sum(composition.values()) - 0.42106 * composition.get("F", 0.0)
        assert end_members.loc[name, "total_wt"] == pytest.approx(expected, abs=1e-3), name


def test_components_of_ideal_end_members(end_members: pd.DataFrame):
    expected = {
        ("Fo", "mg_number"): 1,
        ("Fa", "mg_number"): 0,
        ("An", "an"): 1,
        ("Ab", "ab"): 1,
        ("Kfs", "or"): 1,
    }
    expected |= {("Di", "wo"): 0.5, ("Di", "en"): 0.5, ("En", "en"): 1, ("Hd", "wo"): 0.5}
    for (name, column), value in expected.items():
        assert end_members.loc[name, column] == pytest.approx(value, abs=2e-4), (name, column)


def test_ferrous_and_ferric_share_of_magnetite(tmp_path: Path):
    # Magnetite 31.03 FeO + 68.97 Fe2O3; with all iron as FeO: 31.03 + 68.97 * 0.89981 = 93.09.
    body = TABLE + '[convert.formula]\nferric = ["magnetite"]\n'
    session = small_session(
        tmp_path, {"probe.csv": (["Point", "Run", "Phase", "FeO"], [["m", "X", "mag", 93.09]])}, body
    )
    run_until_convert(session.path)
    formula = result(session, "convert.formula").iloc[0]
    assert formula["ferric_fraction"] == pytest.approx(2 / 3, abs=1e-4)
