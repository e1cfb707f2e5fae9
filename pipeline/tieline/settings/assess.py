"""Settings of `assess`: what each line of evidence takes for granted."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import AfterValidator, Field, model_validator

from tieline.settings.base import Element, Settings, as_element


def _element_pair(text: str) -> str:
    parts = text.split("-")
    if len(parts) != 2:
        raise ValueError(f"{text!r} is not a pair of elements such as Fe-Mg")
    return "-".join(as_element(part) for part in parts)


def _known(given: tuple[float, float]) -> tuple[float, float]:
    if not given[0] > 0 or not given[1] >= 0:
        raise ValueError("the value must be above zero and its sd not negative")
    return given


Known = Annotated[tuple[float, float], AfterValidator(_known)]


class ExchangeWindow(Settings):
    """The exchange coefficient expected of one phase over a melt, or over another phase."""

    phase: str = Field(description="numerator phase")
    beta: str | None = Field(None, description="denominator phase; none: silicate melts")
    pair: Annotated[str, AfterValidator(_element_pair)] = Field(description="the two elements, such as Fe-Mg")
    low: float = Field(ge=0, description="lower end of the window")
    high: float = Field(gt=0, description="upper end of the window")
    source: str = Field("the settings", description="where the window comes from")

    @model_validator(mode="after")
    def _ordered(self) -> ExchangeWindow:
        if self.low >= self.high:
            raise ValueError("low must be smaller than high")
        return self


class FerricSettings(Settings):
    """The ferric share of the iron in the melt, Fe3+ over all Fe; crystals count as free of ferric iron."""

    model: Literal["none", "stated", "kress-carmichael-1991"] = Field(
        "none",
        description="none: all iron counts as Fe2+, so K_D is a lower bound; stated: `share` holds for every experiment; "
        "kress-carmichael-1991: from fO2, temperature, pressure and the melt's composition (coefficients from memory)",
    )
    share: float = Field(0.0, ge=0, lt=1, description="stated share")
    sd: float = Field(0.0, ge=0, description="its standard uncertainty")
    source: str = Field("stated in the settings", description="where the share comes from")
    log_fO2: str = Field(  # noqa: N815 - a quantity
        "log_fO2", description="for the model: the condition that holds log10 of the oxygen fugacity in bar"
    )
    log_fO2_sd: float = Field(0.2, ge=0, description="for the model: its standard uncertainty")  # noqa: N815
    model_sd: float = Field(
        0.02, ge=0, description="for the model: its own scatter, as an absolute share; common practice"
    )


class ExchangeSettings(Settings):
    """Exchange coefficients K_D."""

    pairs: tuple[tuple[Element, Element], ...] = Field(
        (("Fe", "Mg"),), description="element pairs, first over second"
    )
    windows: tuple[ExchangeWindow, ...] = Field(
        (), description="expected windows, in the place of the published ones"
    )
    ferric: FerricSettings = FerricSettings()


class KnownParameter(Settings):
    """What is known of a lattice-strain curve beforehand; used only where the values do not suffice."""

    phase: str = Field(description="crystal")
    charge: int = Field(gt=0, description="charge of the ions")
    r0: Known | None = Field(
        None,
        description="radius of the site, Å: [value, sd]; used where the values do not suffice, and then fixed if sd is 0",
    )
    E: Known | None = Field(
        None,
        description="Young's modulus, GPa: [value, sd]; used where the values do not suffice, and then fixed if sd is 0",
    )


class LatticeStrainSettings(Settings):
    """Lattice-strain curves, one per experiment, pair and charge."""

    enabled: bool = Field(True, description="fit curves")
    charges: tuple[int, ...] = Field((1, 2, 3, 4), description="charges that get a curve")
    least_values: int = Field(
        4,
        ge=1,
        description="fewer values than this make no curve: three parameters need a fourth value to test them; own choice",
    )
    element_charges: dict[Element, int] = Field(
        default_factory=dict,
        description="element -> charge where the usual one does not hold, such as Eu = 2; an element named here shapes "
        "the curve even where it is kept off by default",
    )
    coordination: dict[str, int] = Field(
        default_factory=dict, description="phase -> coordination of its large site, beside the phase table's"
    )
    leave_out: dict[str, tuple[Element, ...]] = Field(
        {
            "clinopyroxene": ("Li", "Mg", "Mn", "Sc", "Zn", "Zr", "Hf", "Ge"),
            "plagioclase": ("Li", "Mg", "Mn", "Sc", "Zn", "Zr", "Hf", "Ge"),
            "olivine": ("Mg", "Zn"),
        },
        description="phase -> elements that are compared with the curve but do not shape it, because much of them sits on "
        "another site, prefers tetrahedra or makes up the crystal itself (Mg in olivine); common practice, from memory",
    )
    known: tuple[KnownParameter, ...] = Field((), description="what is known of r0 and E beforehand")
    without_each: bool = Field(
        False, description="fit again without each element and tell how far the curve moves; twice the time"
    )

    @model_validator(mode="after")
    def _charges_have_radii(self) -> LatticeStrainSettings:
        from tieline.chemistry.radii import known_radii

        known = {(element, charge) for element, charge, _coordination in known_radii()}
        unknown = [f"{e} {c}+" for e, c in self.element_charges.items() if (e, c) not in known]
        if unknown:
            raise ValueError(f"element_charges: no ionic radius is known of {', '.join(unknown)}")
        return self


class MassBalanceSettings(Settings):
    """Proportions of the phases from a starting composition."""

    starting_composition: str | None = Field(
        None,
        description="table with the columns analyte, value, unit, and if wanted sd and experiment (blank: all experiments); "
        "without it there is no mass balance",
    )
    starting_relative_sd: float = Field(
        0.01,
        ge=0,
        description="relative standard uncertainty of the starting composition where no sd is given; common practice",
    )
    phases_relative_sd: float = Field(
        0.01,
        ge=0,
        description="relative uncertainty of a calibration of which `calibrate` knows none; common practice. Phases measured "
        "in one session share it",
    )
    losable: tuple[Element, ...] = Field(
        ("Fe", "Na", "K"),
        description="elements lost to the capsule or under the beam: not fitted, but judged by what the others leave for them",
    )
    sum_to_one: bool = Field(False, description="hold the sum of the proportions at one")
    largest_squares: float = Field(
        1.0,
        gt=0,
        description="sum of squared residuals still called acceptable, wt%²; common practice, no test",
    )


class ModeSettings(Settings):
    """Proportions known from elsewhere, for bulk D where there is no mass balance."""

    proportions: dict[str, dict[str, Annotated[float, Field(ge=0)]]] = Field(
        default_factory=dict,
        description="experiment -> phase -> mass fraction; used instead of the mass balance's",
    )
    relative_sd: float = Field(0.1, ge=0, description="their relative standard uncertainty; common practice")


class TrendSettings(Settings):
    """ln D against conditions, across experiments."""

    conditions: tuple[str, ...] = Field(
        ("10^4/T",),
        description="conditions of the experiments' table; 10^4/T is made from the temperature, and `MgO in glass` (wt%) or "
        "`Ni in glass` (ppm) from the phase means. The column <condition>_sd, where there is one, holds its standard uncertainty",
    )
    predict: dict[str, tuple[float, ...]] = Field(
        default_factory=dict, description="condition -> values of it at which D is to be predicted"
    )
    without_each: bool = Field(
        False, description="draw every line again without each experiment and predict it; four times the time"
    )


class AssessSettings(Settings):
    """Section [assess]."""

    confidence: float = Field(0.95, gt=0.5, lt=1, description="confidence level of the intervals")
    melts: tuple[str, ...] = Field(("glass", "melt", "liquid"), description="names of silicate melts")
    temperature: str = Field("temperature_C", description="condition that holds the temperature in °C")
    pressure: str = Field("pressure_GPa", description="condition that holds the pressure in GPa")
    duration: str = Field("duration_h", description="condition that holds the length of the run")
    same_conditions: tuple[str, ...] = Field(
        (),
        description="conditions that two runs must have in common for their durations to be compared; none named: all that the "
        "experiments' table holds, texts included, but the duration",
    )
    exchange: ExchangeSettings = ExchangeSettings()
    lattice_strain: LatticeStrainSettings = LatticeStrainSettings()
    mass_balance: MassBalanceSettings = MassBalanceSettings()
    modes: ModeSettings = ModeSettings()
    trends: TrendSettings = TrendSettings()
    consistency: bool = Field(True, description="compare D by way of a third phase, and rim against core")
