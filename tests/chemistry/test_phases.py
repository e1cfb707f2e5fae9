"""Phases: spellings, and facts that agree with the formulas they come from."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from tieline.chemistry.phases import PHASES, PhaseFacts, all_phases, phase_name


@pytest.mark.parametrize(
    ("label", "name"),
    [("ol", "olivine"), ("Ol", "olivine"), ("OLV", "olivine"), ("olivine", "olivine"), ("cpx", "clinopyroxene"),
     ("Cpx", "clinopyroxene"), ("opx", "orthopyroxene"), ("gl", "glass"), ("liq", "glass"),
     ("Quenched_melt", "glass"), (" glass ", "glass"), ("pl", "plagioclase"), ("Grt", "garnet"), ("Spl", "spinel"),
     ("Mag", "magnetite"), ("Mt", "magnetite"), ("Ilm", "ilmenite"), ("Amp", "amphibole"), ("Bt", "mica"),
     ("Phl", "mica"), ("Ap", "apatite"), ("Ttn", "titanite"), ("Zrn", "zircon"), ("Qz", "quartz"), ("Qtz", "quartz"),
     ("Kfs", "alkali feldspar"), ("K feldspar", "alkali feldspar"), ("Rt", "rutile"), ("Pgt", "pigeonite"),
     ("sulphide", "sulfide"), ("alloy", "metal")],
)  # fmt: skip
def test_spellings(label: str, name: str) -> None:
    assert phase_name(label) == name


@pytest.mark.parametrize("label", ["", "oll", "olivin", "ol3", "ol rim", "unknown", "x"])
def test_no_near_match_is_taken(label: str) -> None:
    assert phase_name(label) is None


def test_no_spelling_belongs_to_two_phases() -> None:
    spellings = [s.casefold() for phase in PHASES.values() for s in (phase.name, *phase.spellings)]
    assert len(spellings) == len(set(spellings))


def test_given_spellings_go_first_and_may_name_new_phases() -> None:
    spellings = {"groundmass": ["gl"], "olivine": ["green one"]}
    assert phase_name("GL", spellings) == "groundmass"
    assert phase_name("Green One", spellings) == "olivine"
    assert phase_name("Groundmass", spellings) == "groundmass"
    assert phase_name("cpx", spellings) == "clinopyroxene"


def test_one_spelling_for_two_phases_is_an_error() -> None:
    with pytest.raises(ValueError, match="both"):
        phase_name("m", {"mica": ["M"], "metal": ["m"]})


def test_a_user_adds_and_replaces_phases() -> None:
    extra = {
        "melilite": PhaseFacts("melilite", ("Mll",), oxygens=7, cation_sum=5.0, cation_tolerance=0.05),
        "olivine": PhaseFacts("olivine", ("Olvn",), oxygens=4, cation_sum=3.0, cation_tolerance=0.01),
    }
    assert phase_name("mll", extra=extra) == "melilite"
    assert phase_name("olvn", extra=extra) == "olivine"
    assert phase_name("ol", extra=extra) is None  # replaced facts bring their own spellings
    assert all_phases(extra)["olivine"].cation_tolerance == 0.01
    assert PHASES["olivine"].cation_tolerance == 0.02


@given(st.text(max_size=30))
def test_any_label_gives_a_known_phase_or_none(label: str) -> None:
    assert phase_name(label) in (None, *PHASES)


@pytest.mark.parametrize("phase", PHASES.values(), ids=lambda phase: phase.name)
def test_every_number_has_a_source(phase: PhaseFacts) -> None:
    for field in ("oxygens", "cation_sum", "cation_tolerance", "total_window", "large_site"):
        assert (getattr(phase, field) is not None) == bool(phase.sources.get(field)), field
    assert phase.ferric == ("ferric" in phase.sources)


@pytest.mark.parametrize("phase", PHASES.values(), ids=lambda phase: phase.name)
def test_facts_belong_together(phase: PhaseFacts) -> None:
    assert (phase.cation_sum is None) == (phase.cation_tolerance is None)
    assert phase.total_window is None or phase.total_window[0] < phase.total_window[1]
    assert not phase.ferric or phase.cation_sum is not None
