"""The ferric share of a melt as the settings ask for it, and what is said where the model lacks something."""

import pandas as pd
import pytest

from tieline.assess.ferric import kress_carmichael
from tieline.assess.frames import Conditions
from tieline.assess.melt_iron import ferric_shares
from tieline.chemistry.oxides import wt_percent_per_ppm
from tieline.settings.assess import AssessSettings

BASALT_WT = {"Si": 50.5, "Ti": 1.7, "Al": 15.0, "Fe": 10.0, "Mg": 7.6, "Ca": 11.3, "Na": 2.7, "K": 0.2}
MODEL = AssessSettings.model_validate({"exchange": {"ferric": {"model": "kress-carmichael-1991"}}})


def melt(oxides=BASALT_WT):
    factors = wt_percent_per_ppm(list(oxides))
    ppm = [wt / factor for wt, factor in zip(oxides.values(), factors, strict=True)]
    return pd.DataFrame(
        {"experiment": "A", "phase": "glass", "element": list(oxides), "mean_ppm": ppm, "se_ppm": 1.0}
    )


def conditions(**given):
    table = pd.DataFrame(
        {"temperature_C": 1200.0, "pressure_GPa": 1e-4, "log_fO2": -8.3} | given, index=["A"]
    )
    return Conditions(table, pd.DataFrame(index=["A"]), {"A": 1200.0})


def test_share_is_that_of_the_model():
    found, lacking = ferric_shares(melt(), conditions(), MODEL)
    oxides = dict(
        zip(
            ("SiO2", "TiO2", "Al2O3", "FeO", "MgO", "CaO", "Na2O", "K2O"),
            BASALT_WT.values(),
            strict=True,
        )
    )
    expected = kress_carmichael(oxides, 1473.15, 1e-4, -8.3, 0.2, 0.02)
    assert found["A", "glass"].value == pytest.approx(expected.value, rel=1e-9)
    assert 0.1 < expected.value < 0.25
    assert lacking == {}


@pytest.mark.parametrize(
    ("means", "given", "words"),
    [
        (melt(), conditions(log_fO2=float("nan")), "no log_fO2 is given"),
        (
            melt(),
            Conditions(pd.DataFrame(index=["B"]), pd.DataFrame(), {}),
            "no temperature_C and no pressure_GPa",
        ),
        (melt({"Fe": 10.0, "Mg": 7.6}), conditions(), "its oxides add up to 17.6 wt%"),
        (melt({"Si": 50.0, "Mg": 45.0}), conditions(), "it has no iron"),
        (melt(), conditions(pressure_GPa=-1.0), "finite numbers"),
    ],
)
def test_what_the_model_lacks_is_said(means, given, words):
    found, lacking = ferric_shares(means, given, MODEL)
    assert found == {}
    assert words in lacking["A", "glass"]
