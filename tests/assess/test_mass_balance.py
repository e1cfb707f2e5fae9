"""Mass balance of experiments from tables, and bulk partition coefficients."""

import numpy as np
import pandas as pd
import pytest

from assess.frames import partition
from tieline.assess.bulk import Modes, bulk_partition, modes_of_mixture
from tieline.assess.mass_balance import mass_balance_tables
from tieline.statistics.mass_balance import mix
from tieline.statistics.means import phase_means
from tieline.statistics.ratios import ratio_interval

# invented element contents, ppm
CONTENTS = {
    "olivine": {"Si": 187_000, "Mg": 290_000, "Fe": 80_000, "Ca": 1_500, "Al": 300, "Ti": 60, "Na": 50},
    "clinopyroxene": {"Si": 240_000, "Mg": 100_000, "Fe": 45_000, "Ca": 150_000, "Al": 20_000, "Ti": 3_000, "Na": 2_000},
    "glass": {"Si": 233_000, "Mg": 45_000, "Fe": 75_000, "Ca": 85_000, "Al": 80_000, "Ti": 9_000, "Na": 20_000},
}  # fmt: skip
TRUTH = {"olivine": 0.15, "clinopyroxene": 0.25, "glass": 0.60}


def means(loss: float = 0.0, error: float = 0.005, seed: int = 1, phases=tuple(CONTENTS)) -> pd.DataFrame:
    rng = np.random.default_rng(seed)
    rows = []
    for phase in phases:
        for element, ppm in CONTENTS[phase].items():
            true = ppm * (1 - loss if element == "Fe" else 1)
            value = true * (1 + error * rng.standard_normal())
            rows.append(
                {
                    "experiment": "A",
                    "phase": phase,
                    "element": element,
                    "mean_ppm": value,
                    "se_ppm": error * true,
                }
            )
    return pd.DataFrame(rows).assign(calibration_sd=np.nan, calibration_key=1, own_sd=0.0)


def start(**change) -> pd.DataFrame:
    rows = []
    for element in CONTENTS["glass"]:
        value = sum(part * CONTENTS[phase][element] for phase, part in TRUTH.items())
        rows.append({"experiment": "A", "element": element, "value_ppm": value, "sd_ppm": 0.005 * value})
    table = pd.DataFrame(rows)
    for element, factor in change.items():
        table.loc[table["element"] == element, "value_ppm"] *= factor
    return table


def test_proportions_hold_the_truth():
    found = mass_balance_tables(means(), start())
    rows = found.proportions.set_index("phase")
    for phase, truth in TRUTH.items():
        assert rows.loc[phase, "proportion_lo"] < truth < rows.loc[phase, "proportion_hi"]
        assert rows.loc[phase, "unweighted"] == pytest.approx(truth, abs=0.03)
    checks = found.checks.set_index("subject")
    assert checks.loc["chi-square over degrees of freedom", "verdict"] == "consistent"
    assert checks.loc["squared residuals, sum in wt%²", "verdict"] == "consistent"
    assert checks.loc["Fe loss", "verdict"] == "consistent"


def test_sum_of_squares_is_that_of_oxides():
    found = mass_balance_tables(means(error=1e-6), start(Si=1.02), losable=())
    silica = 0.02 * start().set_index("element").loc["Si", "value_ppm"] / 0.46744 / 1e4  # 0.46744 Si in SiO2
    assert 0 < found.checks.set_index("subject").loc["squared residuals, sum in wt%²", "value"] < silica**2


def test_lost_iron_is_found_and_does_not_move_the_proportions():
    found = mass_balance_tables(means(loss=0.2), start())
    loss = found.residuals.set_index("element").loc["Fe"]
    assert loss["loss_lo"] < 0.2 < loss["loss_hi"]
    assert not loss["use"]
    check = found.checks.set_index("subject").loc["Fe loss"]
    assert check["verdict"] == "differs"
    assert "lost" in check["detail"]
    kept = mass_balance_tables(means(), start()).proportions["proportion"]
    np.testing.assert_allclose(found.proportions["proportion"], kept, rtol=1e-6)


def test_losses_of_one_experiment_are_judged_together():
    """Four elements that nothing happened to: one by one, one in five experiments would lose some."""
    losable = ("Fe", "Na", "Ti", "Ca")
    alarms = 0
    for seed in range(40):
        given = start()
        off = 0.005 * np.random.default_rng(100 + seed).standard_normal(len(given))
        given = given.assign(value_ppm=given["value_ppm"] * (1 + off))
        checks = mass_balance_tables(means(seed=seed), given, losable=losable).checks
        losses = checks[checks["subject"].str.endswith("loss")]
        assert len(losses) == 4
        assert losses["detail"].str.contains("judged over 4 elements together").all()
        alarms += (losses["verdict"] == "differs").any()
    assert alarms <= 7  # 2 are expected at 5 %


def test_iron_kept_in_the_fit_spoils_it():
    found = mass_balance_tables(means(loss=0.2), start(), losable=("Na",))
    assert found.checks.set_index("subject").loc["chi-square over degrees of freedom", "verdict"] == "differs"


def test_parts_of_a_phase_stand_for_it_as_their_mean():
    whole = means(error=0.002)
    cores, rims = (
        whole[whole["phase"] == "olivine"].assign(
            phase=f"olivine ({part})", mean_ppm=lambda table, factor=factor: factor * table["mean_ppm"]
        )
        for part, factor in (("core", 1.02), ("rim", 0.98))
    )
    split = pd.concat([whole[whole["phase"] != "olivine"], cores, rims])
    found = mass_balance_tables(split, start()).proportions.set_index("phase")
    assert found.index.tolist() == ["clinopyroxene", "glass", "olivine"]
    sure = mass_balance_tables(whole, start()).proportions.set_index("phase")
    assert found.loc["olivine", "proportion"] == pytest.approx(sure.loc["olivine", "proportion"], abs=0.005)
    assert found.loc["olivine", "proportion_sd"] > sure.loc["olivine", "proportion_sd"]
    beside = mass_balance_tables(pd.concat([whole, rims]), start()).proportions
    pd.testing.assert_frame_equal(beside, sure.reset_index()[beside.columns])


def test_a_missing_phase_is_hinted_at():
    found = mass_balance_tables(means(phases=("olivine", "glass")), start())
    words = found.checks.set_index("subject").loc["chi-square over degrees of freedom", "detail"]
    assert "Phases rich in Ca" in words
    assert "may be missing" in words


def test_unusable_elements_are_named():
    table = means()
    table.loc[(table["phase"] == "olivine") & (table["element"] == "Ti"), "mean_ppm"] = np.nan
    table.loc[(table["phase"] == "glass") & (table["element"] == "Al"), "se_ppm"] = np.nan
    found = mass_balance_tables(table, start())
    words = found.checks["detail"][0]
    assert "Ti not used: not measured in olivine" in words
    assert "Al not used: a mean has no standard error" in words
    with_floor = mass_balance_tables(table, start(), relative_sd=0.01)
    assert "Al" in set(with_floor.residuals["element"])


def test_missing_mass_shows_in_the_sum():
    whole = mass_balance_tables(means(), start()).checks.set_index("subject")
    assert whole.loc["sum of proportions", "verdict"] == "consistent"
    diluted = start().assign(value_ppm=lambda table: 0.9 * table["value_ppm"])
    found = mass_balance_tables(means(), diluted).checks.set_index("subject")
    assert found.loc["sum of proportions", "verdict"] == "differs"
    assert "Mass is missing" in found.loc["sum of proportions", "detail"]
    held = mass_balance_tables(means(), start(), sum_to_one=True).checks
    assert "sum of proportions" not in set(held["subject"])


def test_a_contradiction_is_said():
    found = mass_balance_tables(means(), start(Si=0.5, Ca=2.0)).checks.set_index("subject")
    row = found.loc["chi-square over degrees of freedom"]
    assert row["verdict"] == "differs"
    assert "do not add up" in row["detail"]


def test_too_few_elements_say_so():
    found = mass_balance_tables(means(), start()[lambda table: table["element"].isin(["Si", "Mg"])])
    assert found.checks["verdict"].tolist() == ["cannot tell"]
    assert "cannot determine" in found.checks["detail"][0]
    assert found.proportions["proportion"].isna().all()


def test_no_phases_measured():
    found = mass_balance_tables(means().iloc[:0], start())
    assert found.checks["verdict"].tolist() == ["cannot tell"]


def modes(**changes):
    given = {
        "phases": ("clinopyroxene", "glass", "olivine"), "proportions": np.array([0.25, 0.6, 0.15]),
        "covariance": np.diag([1e-4, 1e-4, 1e-4]), "quantile": 1.96,
    }  # fmt: skip
    return {"A": Modes(**(given | changes))}


def bulk_table(shared=0.0, **olivine):
    """Invented D of two crystals over glass, with intervals of two standard uncertainties."""
    rows = [
        {"alpha": "olivine", "element": "La", "D": 0.001} | olivine,
        {"alpha": "clinopyroxene", "element": "La", "D": 0.08},
    ]
    return partition(rows, common_sd=shared)


def test_bulk_coefficient_weights_by_mode():
    found = bulk_partition(bulk_table(), modes()).iloc[0]
    assert found["kind"] == "value"
    assert found["bulk_D"] == pytest.approx((0.15 * 0.001 + 0.25 * 0.08) / 0.4)
    share = 0.25 / 0.4
    slope = np.array([0.08, 0.001]) - found["bulk_D"]
    by_hand = np.sqrt(
        (share * 0.05 * 0.08) ** 2 + (0.15 / 0.4 * 0.05 * 0.001) ** 2 + np.sum(slope**2) * 1e-4 / 0.4**2
    )
    assert found["bulk_D_sd"] == pytest.approx(by_hand)


def test_a_shared_melt_adds_up():
    alone = bulk_partition(bulk_table(D=0.08, D_sd=0.004), modes()).iloc[0]
    shared = bulk_partition(bulk_table(0.05, D=0.08, D_sd=0.004), modes()).iloc[0]
    assert alone["bulk_D_sd"] < shared["bulk_D_sd"]
    assert shared["bulk_D_sd"] == pytest.approx(0.004)
    assert shared["bulk_D_hi"] == pytest.approx(0.08 * 1.1)
    assert alone["bulk_D_hi"] < shared["bulk_D_hi"]


def test_one_crystal_has_its_own_interval():
    table = bulk_table(D_lo=0.0005, D_hi=0.0030)
    only = modes(
        phases=("olivine", "glass"), proportions=np.array([0.2, 0.8]), covariance=np.diag([0.01, 0.01])
    )
    found = bulk_partition(table, only).iloc[0]
    assert (found["bulk_D"], found["bulk_D_lo"], found["bulk_D_hi"]) == pytest.approx((0.001, 0.0005, 0.0030))


def test_limits_and_gaps_do_not_become_numbers():
    limit = bulk_partition(bulk_table(kind="upper-limit", D=np.nan, D_sd=np.nan, D_hi=0.01), modes()).iloc[0]
    assert limit["kind"] == "bounds"
    assert np.isnan(limit["bulk_D"])
    assert np.isnan(limit["bulk_D_sd"])
    assert limit["bulk_D_lo"] < 0.25 / 0.4 * 0.08 < limit["bulk_D_hi"]
    gap = bulk_partition(bulk_table().iloc[1:], modes()).iloc[0]
    assert gap["kind"] == "undetermined"
    assert "no D for olivine" in gap["reason"]
    unsure = bulk_partition(bulk_table(kind="undetermined"), modes()).iloc[0]
    assert unsure["reason"] == "D of olivine is undetermined"
    melt_only = modes(phases=("glass",), proportions=np.ones(1), covariance=np.zeros((1, 1)))
    assert bulk_partition(bulk_table(), melt_only).iloc[0]["reason"] == "no crystals"


def test_a_phase_that_may_be_there_counts_in_the_uncertainty():
    spinel = modes(
        phases=("clinopyroxene", "olivine"),
        proportions=np.array([0.25, 0.0]),
        covariance=np.diag([1e-4, 1e-4]),
    )
    sure = modes(
        phases=("clinopyroxene", "olivine"),
        proportions=np.array([0.25, 0.0]),
        covariance=np.diag([1e-4, 0.0]),
    )
    table = bulk_table(D=40.0)
    wide, narrow = (bulk_partition(table, given).iloc[0] for given in (spinel, sure))
    assert wide["bulk_D"] == narrow["bulk_D"] == pytest.approx(0.08)
    assert wide["bulk_D_hi"] - 0.08 > 3 * 0.01 / 0.25 * 40 / 2


def test_every_experiment_and_denominator_has_its_own():
    table = pd.concat(
        [bulk_table(), bulk_table().assign(beta="fluid", D=2.0), bulk_table().assign(experiment="B")]
    )
    found = bulk_partition(table, modes())
    assert list(zip(found["experiment"], found["beta"], strict=True)) == [("A", "fluid"), ("A", "glass")]


def test_bulk_coefficients_cover():
    """Six spots per phase, 3 % apart; proportions from a mass balance with errors as stated; glass common to both crystals."""
    rng = np.random.default_rng(3)
    phases, names = ("clinopyroxene", "glass", "olivine"), ["Si", "Mg", "Ca", "Al", "Ti"]
    contents = np.array([[CONTENTS[phase][element] for phase in phases] for element in names])
    truth = np.array([TRUTH[phase] for phase in phases])
    D = {"La": (0.06, 0.001), "Cr": (5.0, 0.7)}
    sizes = np.array([[d1 * 30, 30, d2 * 30] for d1, d2 in D.values()])
    hits, cases = np.zeros(2), 150
    for _ in range(cases):
        errors = 0.006 * contents
        mixture = mix(
            contents @ truth * (1 + 0.01 * rng.standard_normal(5)), 0.01 * contents @ truth,
            contents + errors * rng.standard_normal(contents.shape), errors,
        )  # fmt: skip
        spots = sizes[:, :, None] * (1 + 0.03 * rng.standard_normal((2, 3, 6)))
        found = phase_means(spots.ravel(), np.full(36, np.nan), np.repeat(np.arange(6), 6), 6)
        alpha, beta = found.estimate(np.array([0, 2, 3, 5])), found.estimate(np.array([1, 1, 4, 4]))
        made = ratio_interval(alpha, beta)
        table = pd.DataFrame(
            {
                "experiment": "A", "alpha": ["clinopyroxene", "olivine"] * 2, "beta": "glass", "kind": made.kind,
                "element": ["La", "La", "Cr", "Cr"], "D": made.value, "D_sd": made.sd, "D_lo": made.low, "D_hi": made.high,
                "common_sd": np.sqrt(beta.variance) / beta.mean,
            }
        )  # fmt: skip
        bulk = bulk_partition(table, {"A": modes_of_mixture(phases, mixture)}).set_index("element")
        for place, (element, (d1, d2)) in enumerate(D.items()):
            true = (truth[0] * d1 + truth[2] * d2) / (truth[0] + truth[2])
            hits[place] += bulk.loc[element, "bulk_D_lo"] <= true <= bulk.loc[element, "bulk_D_hi"]
    assert np.all(hits / cases > 0.95 - 3.5 * np.sqrt(0.95 * 0.05 / cases))


def test_elements_are_grouped_by_the_reason_for_which_they_are_not_used():
    table = means()
    table.loc[(table["phase"] == "olivine") & table["element"].isin(["Al", "Ti"]), "mean_ppm"] = np.nan
    words = mass_balance_tables(table, start()).checks["detail"][0]
    assert "Al, Ti not used: not measured in olivine." in words


def test_elements_kept_apart_are_named_where_too_few_are_left():
    few = mass_balance_tables(means(), start(), losable=tuple(start()["element"])).checks
    assert few["verdict"].tolist() == ["cannot tell"]
    assert "Kept apart as losable: " in few["detail"][0]


def test_a_phase_that_has_a_d_only_for_its_parts_is_named_as_such():
    table = bulk_table()
    table["alpha"] = table["alpha"].replace("olivine", "olivine (rim)")
    found = bulk_partition(table, modes()).iloc[0]
    assert found["kind"] == "undetermined"
    assert found["reason"] == "no D for olivine as a whole, only for its parts"
