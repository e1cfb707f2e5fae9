"""What the settings of `assess` refuse before anything is computed."""

import pytest
from pydantic import ValidationError

from tieline.settings.assess import AssessSettings


@pytest.mark.parametrize(
    ("section", "words"),
    [
        ({"mass_balance": {"losable": ["FeO"]}}, "Fe for FeO"),
        ({"exchange": {"pairs": [["FeO", "MgO"]]}}, "Mg for MgO"),
        (
            {"exchange": {"windows": [{"phase": "olivine", "pair": "FeMg", "low": 1, "high": 2}]}},
            "such as Fe-Mg",
        ),
        ({"lattice_strain": {"element_charges": {"Xx": 2}}}, "symbol of an element"),
        ({"lattice_strain": {"element_charges": {"La": 9}}}, "no ionic radius is known of La 9+"),
        ({"lattice_strain": {"known": [{"phase": "olivine", "charge": 3, "r0": [0, 0.1]}]}}, "above zero"),
        ({"lattice_strain": {"known": [{"phase": "olivine", "charge": 3, "E": [300, -1]}]}}, "not negative"),
        ({"modes": {"proportions": {"A": {"olivine": -0.2}}}}, "greater than or equal to 0"),
    ],
)
def test_what_would_be_ignored_or_break_later_is_refused(section, words):
    with pytest.raises(ValidationError, match=words):
        AssessSettings.model_validate(section)


def test_what_makes_sense_is_taken():
    given = AssessSettings.model_validate(
        {
            "exchange": {"windows": [{"phase": "olivine", "pair": "Fe-Mg", "low": 0.3, "high": 0.36}]},
            "lattice_strain": {
                "element_charges": {"Eu": 2},
                "known": [{"phase": "olivine", "charge": 3, "r0": [0.7, 0]}],
            },
        }
    )
    assert given.lattice_strain.known[0].r0 == (0.7, 0.0)
    assert given.exchange.windows[0].pair == "Fe-Mg"
