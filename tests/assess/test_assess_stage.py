"""The stage as it runs: its tables against the truth behind the demo session, and what its settings change."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from sessions import ROOT, demo_copy, result
from tieline import runner
from tieline.assess import assess, read_starting_composition
from tieline.columns import (
    CALIBRATE,
    EVIDENCE,
    INGEST_EXPERIMENTS,
    PAIR,
    PAIR_CORRELATIONS,
    PARTITION,
    PARTITION_COVARIANCE,
)
from tieline.configuration import Session, load
from tieline.errors import InputError
from tieline.reading.input_file import InputFile
from tieline.settings.assess import AssessSettings
from tieline.tables import empty

TRUTH = ROOT / "configs" / "ember" / "truth"
PAIR_KEYS = ["experiment", "alpha", "beta"]


@pytest.fixture(scope="module")
def demo(tmp_path_factory: pytest.TempPathFactory) -> Session:
    session = load(demo_copy(tmp_path_factory.mktemp("demo")))
    runner.run(session)
    return session


@pytest.fixture(scope="module")
def own(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A copy to edit; tests only ever change `[assess]`."""
    config = demo_copy(tmp_path_factory.mktemp("own"))
    runner.run(load(config))
    return config


def changed(config: Path, *overrides: str) -> Session:
    session = load(config, overrides=overrides)
    runner.run(session)
    return session


def true_coefficients() -> pd.DataFrame:
    return pd.read_csv(TRUTH / "partition_coefficients.csv").rename(columns={"D": "D_true"})


def test_exchange_coefficients_are_the_true_ones(demo: Session):
    D = true_coefficients().pivot(index=PAIR_KEYS, columns="element", values="D_true")
    found = result(demo, "assess.exchange").set_index(PAIR_KEYS)
    true = (D["Fe"] / D["Mg"]).reindex(found.index)
    assert len(found) == 22
    inside = (found["K_D_lo"] <= true) & (true <= found["K_D_hi"])
    assert inside.sum() >= 17  # fewer would come about in one of 1000 sets of 22 independent 95 % intervals
    assert np.abs(np.log(found["K_D"] / true)).max() < 0.06
    ferromagnesian = found[found["window_lo"].notna()]
    for phase, near in (("olivine", 0.30), ("clinopyroxene", 0.25)):
        own_values = ferromagnesian.xs(phase, level="alpha")["K_D"]
        assert np.abs(own_values - near).max() < 0.02
    assert set(ferromagnesian["verdict"]) == {"consistent"}
    assert set(found[found["window_lo"].isna()]["verdict"]) == {"cannot tell"}


def test_proportions_are_the_true_ones(demo: Session):
    found = result(demo, "assess.proportions").set_index(["experiment", "phase"])
    true = pd.read_csv(TRUTH / "phase_proportions.csv").set_index(["experiment", "phase"])["mass_fraction"]
    assert sorted(found.index) == sorted(true.index)
    true = true.reindex(found.index)
    assert np.abs(found["proportion"] - true).max() < 0.02
    inside = (found["proportion_lo"] <= true) & (true <= found["proportion_hi"])
    assert inside.sum() >= 30  # of 32: the starting composition is exact, though only said to be known to 1 %


def test_bulk_coefficients_are_the_true_ones(demo: Session):
    modes = pd.read_csv(TRUTH / "phase_proportions.csv").rename(columns={"phase": "alpha"})
    joined = true_coefficients().merge(modes, on=["experiment", "alpha"])
    joined["weighted"] = joined["D_true"] * joined["mass_fraction"]
    sums = joined.groupby(["experiment", "element"])[["weighted", "mass_fraction"]].sum()
    found = result(demo, "assess.bulk").set_index(["experiment", "element"])
    true = (sums["weighted"] / sums["mass_fraction"]).reindex(found.index)
    inside = (found["bulk_D_lo"] <= true) & (true <= found["bulk_D_hi"])
    # The proportions are common to all elements of an experiment, which fail together where they are off.
    assert inside.mean() > 0.90
    assert (inside.groupby("experiment").mean() > 0.8).sum() >= 7
    values = found[found["kind"] == "value"]
    assert np.nanmedian(np.abs(np.log(values["bulk_D"] / true[values.index]))) < 0.03


def test_curves_give_the_true_coefficients(demo: Session):
    """Rare earths of clinopyroxene: one curve made them, so the curve through the measured ones must return them."""
    elements = result(demo, "assess.elements")
    own = elements[
        (elements["alpha"] == "clinopyroxene") & (elements["charge"] == 3) & (elements["role"] == "fitted")
    ]
    joined = own.merge(true_coefficients(), on=[*PAIR_KEYS, "element"])
    assert len(joined) > 90
    off = np.abs(np.log(joined["curve_D"] / joined["D_true"]))
    assert np.median(off) < 0.02
    assert off.max() < 0.08
    curves = result(demo, "assess.curves")
    rare_earths = curves[(curves["alpha"] == "clinopyroxene") & (curves["charge"] == 3)]
    pressure = result(demo, "ingest.experiments")
    pressure = pressure[pressure["condition"] == "pressure_GPa"].set_index("experiment")["value"]
    r0 = 1.015 - 0.004 * rare_earths["experiment"].map(
        pressure
    )  # as example_runs/ember_charges.py makes them
    assert (rare_earths["verdict"] == "fitted").all()
    inside_r0 = (rare_earths["r0_angstrom_lo"] <= r0) & (r0 <= rare_earths["r0_angstrom_hi"])
    inside_E = (rare_earths["E_GPa_lo"] <= 285) & (rare_earths["E_GPa_hi"] >= 285)
    assert inside_r0.sum() >= len(r0) - 2
    assert inside_E.sum() >= len(r0) - 2


def test_every_check_has_a_verdict_and_none_is_a_verdict_on_equilibrium(demo: Session):
    checks = result(demo, "assess")
    assert set(checks["verdict"]) <= {"consistent", "differs", "cannot tell"}
    assert {"exchange", "lattice-strain", "overlap", "mass-balance", "trend"} <= set(checks["check"])
    assert (checks["detail"].str.len() > 10).all()
    assert not checks["subject"].str.contains("equilibrium").any()


def test_iron_loss_and_a_stated_ferric_share_are_seen(own: Path):
    path = own.parent / "ember" / "starting_composition.csv"
    before = path.read_text(encoding="utf-8")
    path.write_text(before.replace("FeO,9.000", "FeO,10.500"), encoding="utf-8")
    try:
        session = load(
            own, overrides=["assess.exchange.ferric.model='stated'", "assess.exchange.ferric.share=0.15"]
        )
        report = runner.run(session)
        checks = result(session, "assess")
        iron = checks[checks["subject"] == "Fe loss"]
        assert (iron["verdict"] == "differs").all()
        assert np.abs(iron["value"] - 1.5 / 10.5).max() < 0.06
        assert any("Fe lost" in remark.message for remark in report[-1].remarks)
        exchange = result(session, "assess.exchange")
        assert (exchange["ferric_share"] == 0.15).all()
        olivine = exchange[exchange["alpha"] == "olivine"]["K_D"]
        assert np.abs(olivine - 0.30 / 0.85).max() < 0.02
        assert any("K_D(Fe-Mg)" in remark.message for remark in report[-1].remarks)
    finally:
        path.write_text(before, encoding="utf-8")


def test_stated_modes_stand_in_for_the_mass_balance(own: Path):
    session = changed(own, "assess.modes.proportions={'EM-01' = {olivine = 0.3, glass = 0.7}}")
    bulk = result(session, "assess.bulk").set_index(["experiment", "element"])
    D = (
        result(session, "partition")
        .query("experiment == 'EM-01' and kind == 'value'")
        .set_index("element")["D"]
    )
    assert bulk.loc[("EM-01", "Ni"), "bulk_D"] == pytest.approx(D["Ni"])


def test_what_is_switched_off_leaves_no_rows(own: Path):
    session = changed(own, "assess.lattice_strain.enabled=false", "assess.trends.conditions=['nothing']")
    for table in ("assess.curves", "assess.elements", "assess.trends", "assess.trend_points"):
        assert result(session, table).empty
    assert set(result(session, "assess")["check"]) == {"exchange", "mass-balance", "overlap-bound"}


def test_a_window_of_ones_own_and_influence(own: Path):
    session = changed(
        own,
        "assess.exchange.windows=[{phase='olivine', pair='Fe-Mg', low=0.33, high=0.36, source='ours'}]",
        "assess.lattice_strain.without_each=true", "assess.trends.without_each=true",
        "assess.lattice_strain.charges=[3]",
    )  # fmt: skip
    exchange = result(session, "assess.exchange")
    assert set(exchange[exchange["alpha"] == "olivine"]["verdict"]) == {"differs"}
    elements = result(session, "assess.elements")
    assert set(elements["charge"]) == {3}
    assert elements[elements["role"] == "fitted"]["shift_E"].notna().all()
    assert result(session, "assess.trend_points")["slope_without"].notna().mean() > 0.8


def test_tables_without_rows():
    inputs = {
        "partition": empty(PARTITION), "partition_covariance": empty(PARTITION_COVARIANCE), "pair": empty(PAIR),
        "pair_correlations": empty(PAIR_CORRELATIONS), "calibrate": empty(CALIBRATE),
        "ingest_experiments": empty(INGEST_EXPERIMENTS),
    }  # fmt: skip
    found = assess(**inputs, settings=AssessSettings(), files={})
    assert tuple(found.tables) == tuple(spec.name for spec in EVIDENCE)
    assert all(table.num_rows == 0 for table in found.tables.values())


def test_problems_of_the_starting_composition_are_listed_together():
    text = "analyte,value,unit\nSiO2,50,wt%\nSiO2,51,wt%\nXy,1,wt%\nMgO,-3,wt%\nFeO,9,furlong\n"
    with pytest.raises(InputError) as caught:
        read_starting_composition({"start.csv": InputFile.from_bytes("start.csv", text.encode())})
    words = str(caught.value)
    for part in ("stands twice", "'Xy' is no analyte", "not a positive number", "'furlong' is no unit"):
        assert part in words


def test_an_experiment_with_its_own_starting_composition(own: Path):
    path = own.parent / "ember" / "starting_composition.csv"
    before = path.read_text(encoding="utf-8")
    header, *rows = before.strip().splitlines()
    lines = [f"{header},experiment", *(f"{row},EM-05" for row in rows)]
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    try:
        session = changed(own)
        assert set(result(session, "assess.proportions")["experiment"]) == {"EM-05"}
    finally:
        path.write_text(before, encoding="utf-8")
