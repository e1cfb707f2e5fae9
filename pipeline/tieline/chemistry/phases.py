"""Phases: names, spellings, formula, expected cation sum, total window, and the site trace elements sit in.

Sources. Ideal oxygens and cations are those of the end-member formulas. Tolerances and total windows are
common laboratory practice, recalled and not taken from one paper: defaults to be edited, never truths.
Abbreviations: Whitney & Evans (2010), Am. Mineral. 95:185, and Kretz (1983), Am. Mineral. 68:277; Ab, An, Pl,
Liq and Kretz's Bt were verified, the others are from memory. Coordination of the large site: as used with
Shannon's radii in the papers named beside each phase, from memory.
"""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Literal

PhaseKind = Literal["mineral", "glass", "metal", "sulfide", "fluid"]
Window = tuple[float, float]


@dataclass(frozen=True)
class PhaseFacts:
    """What is known of one phase; None where a number does not apply.

    ``spellings``: abbreviations and synonyms, matched without regard to case. ``oxygens``: basis of the
    formula. ``cation_sum`` and ``cation_tolerance``: cations expected on that basis (hydrogen and halogens
    not counted) and how far a sound analysis may be off. ``total_window``: wt%, with all iron as FeO unless
    ferric iron has been calculated. ``hydrous``: H2O, OH or halogens belong to the phase, or may (glass),
    so that a total falls short. ``ferric``: Droop's (1987) charge balance is meaningful: iron alone changes
    its charge and no site is vacant. The sum then equals ``cation_sum`` by construction; only a sum below
    it, before ferric iron, speaks against the analysis. ``large_site``: coordination of the site that takes
    large trace cations. ``sources``: where each number comes from, by field.
    """

    name: str
    spellings: tuple[str, ...] = ()
    kind: PhaseKind = "mineral"
    oxygens: float | None = None
    cation_sum: float | None = None
    cation_tolerance: float | None = None
    total_window: Window | None = None
    hydrous: bool = False
    ferric: bool = False
    large_site: int | None = None
    sources: Mapping[str, str] = field(default_factory=dict, hash=False)


_COMMON = "common practice, from memory"
_STRUCTURE = "crystal structure, from memory"
_PYROXENE = {"cation_sum": "fails for jadeitic and subcalcic clinopyroxene (Am. Mineral. 59:1203, 1974)"}
_AUGITE_M2 = (8, "M2 as VIII: Wood & Blundy (1997), Contrib. Mineral. Petrol. 129:166")
_FELDSPAR_M = (8, "VIII: Blundy & Wood (1991), Geochim. Cosmochim. Acta 55:193")
_ANHYDROUS: Window = (98.5, 101.5)
_HALOGENS_OR_OH: Window = (97.0, 101.5)


def _mineral(
    name: str,
    spellings: str,
    formula: tuple[float, float | None, float | None],
    large_site: tuple[int, str] | None = None,
    window: Window = _ANHYDROUS,
    hydrous: bool = False,
    ferric: bool = False,
    sources: Mapping[str, str] | None = None,
) -> PhaseFacts:
    """One line of the table; ``formula`` is (oxygens, cation sum, tolerance)."""
    cited = {"oxygens": "end-member formula", "total_window": _COMMON}
    if formula[1] is not None:
        cited |= {"cation_sum": "end-member formula", "cation_tolerance": _COMMON}
    if ferric:
        cited["ferric"] = "Droop (1987), Mineral. Mag. 51:431"
    if large_site is not None:
        cited["large_site"] = large_site[1]
    return PhaseFacts(
        name,
        tuple(spellings.split(", ")),
        "mineral",
        *formula,
        total_window=window,
        hydrous=hydrous,
        ferric=ferric,
        large_site=large_site[0] if large_site else None,
        sources=cited | dict(sources or {}),
    )


_TABLE: tuple[PhaseFacts, ...] = (
    _mineral(
        "olivine", "Ol, olv, oliv, Fo, Fa, forsterite, fayalite", (4, 3.0, 0.02),
        (6, "M1 and M2 as VI: Beattie (1994), Chem. Geol. 117:57, from memory"),
    ),
    _mineral(
        "orthopyroxene", "Opx, orthopx, En, enstatite, hypersthene, bronzite", (6, 4.0, 0.02),
        (6, f"M2 as VI, the next oxygens being far off: {_STRUCTURE}"), ferric=True, sources=_PYROXENE,
    ),
    _mineral(
        "clinopyroxene",
        "Cpx, clinopx, Di, Hd, Aug, diopside, hedenbergite, augite, Jd, jadeite, Omp, omphacite",
        (6, 4.0, 0.02), _AUGITE_M2, ferric=True, sources=_PYROXENE,
    ),
    _mineral(
        "pigeonite", "Pgt, pig, pige", (6, 4.0, 0.02),
        (8, f"between VI and VIII, taken as VIII to compare with augite: {_STRUCTURE}"),
        ferric=True, sources=_PYROXENE,
    ),
    _mineral("pyroxene", "Px, pyx", (6, 4.0, 0.02), ferric=True, sources=_PYROXENE),
    _mineral(
        "plagioclase", "Pl, plag, plg, Ab, An, albite, anorthite, labradorite, bytownite", (8, 5.0, 0.05),
        _FELDSPAR_M,
    ),
    _mineral(
        "alkali feldspar",
        "Kfs, Afs, K-feldspar, Kspar, Sa, Or, Mc, sanidine, orthoclase, anorthoclase",
        (8, 5.0, 0.05), _FELDSPAR_M,
    ),
    _mineral("feldspar", "Fsp, fspar, feld", (8, 5.0, 0.05), _FELDSPAR_M),
    _mineral(
        "garnet", "Grt, gt, gar, gnt, Prp, Alm, Grs, Sps, Adr, pyrope, almandine, grossular, Maj, majorite",
        (12, 8.0, 0.05), (8, "X site as VIII: van Westrenen et al. (1999), Am. Mineral. 84:838"), ferric=True,
    ),
    _mineral(
        "spinel", "Spl, sp, spn, Chr, Cr-spinel, chromite, Hc, hercynite", (4, 3.0, 0.02),
        (6, f"octahedral site: {_STRUCTURE}"), (97.5, 101.5), ferric=True,
        sources={"total_window": "from memory; the low side leaves room for 10 wt% Fe2O3 counted as FeO"},
    ),
    _mineral(
        "magnetite", "Mag, Mt, magn, Ti-magnetite, titanomagnetite, Usp, ulvospinel", (4, 3.0, 0.02),
        (6, f"octahedral site: {_STRUCTURE}"), (91.5, 101.5), ferric=True,
        sources={"total_window": "computed: with all iron as FeO, Fe3O4 totals 93.1, Fe2TiO4 100; each ±1.5"},
    ),
    _mineral(
        "ilmenite", "Ilm, hemoilmenite", (3, 2.0, 0.02), (6, f"both sites VI: {_STRUCTURE}"), (96.0, 101.5),
        ferric=True,
        sources={"total_window": "computed: with all iron as FeO, 40 mol% hematite in it totals 95.9"},
    ),
    _mineral(
        "amphibole",
        "Amp, amph, Hbl, hb, hornblende, Prg, pargasite, Krs, kaersutite, Tr, tremolite, Act, actinolite",
        (23, None, None), (8, "M4 as VIII: Tiepolo et al. (2007), Rev. Mineral. 67:417, from memory"),
        (96.0, 98.5), hydrous=True, sources={"oxygens": "anhydrous basis of O22(OH)2"},
    ),
    _mineral(
        "mica", "Bt, bi, bio, Phl, phlog, Ms, biotite, phlogopite, muscovite", (11, None, None),
        (12, f"interlayer site as XII: {_STRUCTURE}"), (94.0, 97.0), hydrous=True,
        sources={"oxygens": "anhydrous basis of O10(OH)2"},
    ),
    _mineral(
        "apatite", "Ap, apat, fluorapatite", (12.5, 8.0, 0.1),
        (9, f"Ca1 as IX (Ca2 is VII): {_STRUCTURE}"), _HALOGENS_OR_OH, hydrous=True,
        sources={"oxygens": "12.5 oxygen equivalents of Ca5(PO4)3(F,Cl,OH)"},
    ),
    _mineral(
        "titanite", "Ttn, sphene", (5, 3.0, 0.03),
        (7, "Ca site as VII: Prowatke & Klemme (2005), Geochim. Cosmochim. Acta 69:695"), _HALOGENS_OR_OH,
        hydrous=True,
    ),
    _mineral("zircon", "Zrn, zr, zir, zirc", (4, 2.0, 0.02), (8, f"Zr site as VIII: {_STRUCTURE}")),
    _mineral("rutile", "Rt, rut", (2, 1.0, 0.01), (6, f"Ti site: {_STRUCTURE}")),
    _mineral("quartz", "Qz, qtz, Crs, Trd, Coe, cristobalite, tridymite, coesite", (2, 1.0, 0.01)),
    _mineral("nepheline", "Nph, Ne, neph", (4, 3.0, 0.05)),
    _mineral("leucite", "Lct, lc", (6, 4.0, 0.05), (12, f"K site as XII: {_STRUCTURE}")),
    _mineral("corundum", "Crn", (3, 2.0, 0.02), (6, f"Al site: {_STRUCTURE}")),
    _mineral("monazite", "Mnz, mon", (4, 2.0, 0.03), (9, f"Ce site as IX: {_STRUCTURE}")),
    PhaseFacts(
        "glass", ("Gl", "gls", "Liq", "liquid", "melt", "quenched melt", "quench melt", "matrix glass"),
        "glass",
        total_window=(95.0, 101.5), hydrous=True,
        sources={
            "total_window": "from memory 97-101 for dry glass; widened because sound analyses of seven"
            " reference glasses totalled 97.2 ± 2.4 (2 s.d., n = 241; Barker et al. 2017, data set); a"
            " hydrous glass falls short by its water and needs its own window",
        },
    ),
    PhaseFacts("metal", ("met", "alloy", "Fe metal", "iron", "iron metal"), "metal"),
    PhaseFacts(
        "sulfide", ("sulf", "sulphide", "sulfide melt", "sulphide melt", "Po", "pyrrhotite", "mss"), "sulfide"
    ),
    PhaseFacts("fluid", ("fl", "aqueous fluid", "vapour", "vapor"), "fluid", hydrous=True),
)  # fmt: skip

PHASES: Mapping[str, PhaseFacts] = MappingProxyType({phase.name: phase for phase in _TABLE})
"""The built-in phases by name."""


def all_phases(extra: Mapping[str, PhaseFacts] | None = None) -> dict[str, PhaseFacts]:
    """The built-in phases with a user's added; a user's facts replace built-in ones of the same name."""
    return {**PHASES, **(extra or {})}


def phase_name(
    label: str,
    spellings: Mapping[str, Iterable[str]] | None = None,
    extra: Mapping[str, PhaseFacts] | None = None,
) -> str | None:
    """The phase a label means, or None; exact but for case, blanks, ``_`` and ``-``, never a near match.

    ``spellings``: phase name → further spellings; they go before the built-in ones, and may name a phase
    that has no facts. ``extra``: phases of the user's own. Raises ValueError if one spelling is given to
    two phases.
    """
    wanted = _folded(label)
    given = _given_spellings(spellings or {})
    if wanted in given:
        return given[wanted]
    return _known_spellings(all_phases(extra)).get(wanted) if extra else _BUILT_IN_SPELLINGS.get(wanted)


def _given_spellings(spellings: Mapping[str, Iterable[str]]) -> dict[str, str]:
    found: dict[str, str] = {}
    for name, given in spellings.items():
        for spelling in (name, *given):
            other = found.setdefault(_folded(spelling), name)
            if other != name:
                raise ValueError(f"the spelling {spelling!r} is given to both {other!r} and {name!r}")
    return found


def _known_spellings(phases: Mapping[str, PhaseFacts]) -> dict[str, str]:
    """All spellings of a table; a name goes before a spelling, and a later phase before an earlier one."""
    found = {_folded(spelling): phase.name for phase in phases.values() for spelling in phase.spellings}
    return found | {_folded(name): name for name in phases}


def _folded(label: str) -> str:
    return " ".join(label.replace("_", " ").replace("-", " ").casefold().split())


_BUILT_IN_SPELLINGS = _known_spellings(PHASES)
