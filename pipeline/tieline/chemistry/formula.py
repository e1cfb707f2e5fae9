"""Formula units: cations per chosen oxygens with their uncertainty, ferric iron, and molar ratios.

Everything works on all spots at once. Hydrogen, carbon and halogens are reported per formula, but take no
oxygen and do not count as cations: the basis is the oxygen of the cation oxides, as usual for hydrous and
halogen-bearing minerals (23 O for an amphibole, 12.5 for apatite).
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from tieline.chemistry.elements import atomic_weight
from tieline.chemistry.oxides import (
    PPM_PER_WT_PERCENT,
    Oxide,
    cation_charges,
    parse_oxide,
    usual_oxide,
)

FloatArray = npt.NDArray[np.float64]

_VOLATILE = frozenset({"H", "C"})


@dataclass(frozen=True)
class FormulaUnits:
    """Atoms per formula of ``oxygens``.

    ``atoms`` and ``sigma``: shape (spots, columns), NaN where nothing was measured. ``cation_sum`` and
    ``cation_sum_sigma``: shape (spots,), NaN where the spot has no oxygen at all. Uncertainties are standard
    uncertainties, first order, from independent ones of the columns; they include that all columns are
    normalised to the same oxygen. Where a sigma that matters is unknown, they are NaN.
    """

    oxides: tuple[Oxide, ...]
    oxygens: float
    atoms: FloatArray
    sigma: FloatArray
    cation_sum: FloatArray
    cation_sum_sigma: FloatArray

    def of(self, element: str) -> FloatArray:
        """Atoms of one element per formula, shape (spots,), all its columns together; 0 if there is none."""
        columns = [i for i, oxide in enumerate(self.oxides) if oxide.element == element]
        return np.asarray(np.nansum(self.atoms[:, columns], axis=1))


@dataclass(frozen=True)
class FerricIron:
    """Ferric iron by charge balance, every field of shape (spots,) but ``atoms`` (spots, columns).

    ``fe3`` and ``fe2``: atoms per formula, ``fe3`` held between 0 and all the iron. ``balance``: what charge
    balance asks for before that, with ``balance_sigma`` from the cation sum; negative, or above the iron
    there is, it speaks against the analysis or the assumptions. ``atoms``: the formula with this ferric iron.
    """

    fe3: FloatArray
    fe2: FloatArray
    fraction: FloatArray
    balance: FloatArray
    balance_sigma: FloatArray
    atoms: FloatArray


def atoms_from_oxides(
    oxide_wt: FloatArray, oxides: Sequence[str], oxygens: float, sigma_wt: FloatArray | None = None
) -> FormulaUnits:
    """Formula units from oxide wt%, shape (spots, oxides); ``sigma_wt`` alike, as standard uncertainties.

    NaN is "not measured" and adds nothing; a NaN sigma beside a value makes the spot's uncertainties NaN.
    Halogens and sulfur may come as bare elements; another bare element is refused: it would be taken for a
    metal. Raises ValueError for that, for an unknown formula, shapes that do not fit and ``oxygens`` <= 0.
    """
    columns = tuple(parse_oxide(formula) for formula in oxides)
    for column in columns:
        if column.oxygens == 0 and column.element not in ("S", "O") and cation_charges(column.element):
            raise ValueError(f"{column.element!r} is no oxide: give its oxide, or element ppm")
    wt = _table(oxide_wt, len(columns), "oxide_wt")
    sigma = np.full_like(wt, np.nan) if sigma_wt is None else _table(sigma_wt, len(columns), "sigma_wt")
    if sigma.shape != wt.shape:
        raise ValueError(f"sigma_wt has shape {sigma.shape}, oxide_wt {wt.shape}")
    if not oxygens > 0:
        raise ValueError(f"oxygens per formula must be positive, not {oxygens}")
    return _normalise(wt, sigma, columns, float(oxygens))


def atoms_from_ppm(
    element_ppm: FloatArray,
    elements: Sequence[str],
    oxygens: float,
    sigma_ppm: FloatArray | None = None,
    overrides: Mapping[str, str] | None = None,
) -> FormulaUnits:
    """Formula units from element ppm, shape (spots, elements): each element as its usual oxide.

    Iron is all Fe2+ unless ``overrides`` says ``{"Fe": "Fe2O3"}`` (see ``usual_oxide``). Raises as
    ``atoms_from_oxides`` does.
    """
    oxides = [parse_oxide(usual_oxide(element, overrides)) for element in elements]
    per_ppm = np.array([1.0 / (oxide.element_fraction * PPM_PER_WT_PERCENT) for oxide in oxides])
    ppm = _table(element_ppm, len(oxides), "element_ppm")
    sigma = None if sigma_ppm is None else _table(sigma_ppm, len(oxides), "sigma_ppm") * per_ppm
    return atoms_from_oxides(ppm * per_ppm, [oxide.formula for oxide in oxides], oxygens, sigma)


def ferric_iron(units: FormulaUnits, ideal_cations: float) -> FerricIron:
    """Ferric iron from the cation sum, Droop (1987), Mineral. Mag. 51:431, eq. 2: Fe3+ = 2X(1 − T/S).

    ``units`` must have all iron as FeO; X is its oxygens, S its cation sum, T = ``ideal_cations``. Holds
    where iron is the only element of variable charge, oxygen the only anion and no site is vacant, and
    where Si and the rest are measured well: the error of S goes into Fe3+ multiplied by 2XT/S². Raises
    ValueError if an iron column is no FeO.
    """
    iron = [i for i, oxide in enumerate(units.oxides) if oxide.element == "Fe"]
    if any(units.oxides[i].formula != "FeO" for i in iron):
        raise ValueError("ferric iron by charge balance starts from all iron as FeO")
    total_iron = units.of("Fe")
    X, T, S = units.oxygens, ideal_cations, units.cation_sum
    balance = 2.0 * X * (1.0 - T / S)
    all_ferric = total_iron * X / (X + 0.5 * total_iron)
    fe3 = np.clip(balance, 0.0, all_ferric)
    # Each ferric iron brings half an oxygen; on the same oxygens the whole formula shrinks by that.
    shrink = (X - 0.5 * fe3) / X
    iron_after = total_iron * shrink
    with np.errstate(divide="ignore", invalid="ignore"):
        fraction = fe3 / iron_after
    return FerricIron(
        fe3=fe3,
        fe2=iron_after - fe3,
        fraction=fraction,
        balance=balance,
        balance_sigma=2.0 * X * T / S**2 * units.cation_sum_sigma,
        atoms=units.atoms * shrink[:, np.newaxis],
    )


def oxygen_of_ferric_iron(feo_wt: FloatArray, ferric_fraction: FloatArray) -> FloatArray:
    """What a total gains, in wt%, when this fraction of the iron given as FeO is Fe2O3."""
    oxygen_per_feo = 0.5 * atomic_weight("O") / parse_oxide("FeO").molar_mass
    return np.asarray(feo_wt * ferric_fraction * oxygen_per_feo)


def moles(ppm: FloatArray, element: str) -> FloatArray:
    """mol per 100 g of an element given in ppm by mass, for molar ratios. Raises KeyError."""
    return np.asarray(ppm / (PPM_PER_WT_PERCENT * atomic_weight(element)))


def mg_number(mg: FloatArray, fe: FloatArray) -> FloatArray:
    """Mg/(Mg + Fe), molar, between 0 and 1; with total iron, or with Fe2+, as given. In olivine this is Fo."""
    return _shares(mg, fe)[0]


def chromium_number(cr: FloatArray, al: FloatArray) -> FloatArray:
    """Cr/(Cr + Al), molar, between 0 and 1."""
    return _shares(cr, al)[0]


def feldspar_components(
    ca: FloatArray, na: FloatArray, k: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Mole fractions (An, Ab, Or) = Ca, Na, K over their sum."""
    an, ab, orthoclase = _shares(ca, na, k)
    return an, ab, orthoclase


def pyroxene_components(
    ca: FloatArray, mg: FloatArray, fe: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Mole fractions (Wo, En, Fs) = Ca, Mg, Fe over their sum (Morimoto 1988, Mineral. Mag. 52:535).

    That nomenclature puts Fe2+ + Fe3+ + Mn in ``fe``; the caller adds them up.
    """
    wo, en, fs = _shares(ca, mg, fe)
    return wo, en, fs


def _normalise(
    wt: FloatArray, sigma_wt: FloatArray, columns: tuple[Oxide, ...], oxygens: float
) -> FormulaUnits:
    per_gram = 1.0 / np.array([column.molar_mass for column in columns])
    atoms_per_wt = per_gram * [column.cations for column in columns]
    is_cation = np.array([column.oxygens > 0 and column.element not in _VOLATILE for column in columns])
    oxygen_per_wt = np.where(is_cation, per_gram * [column.oxygens for column in columns], 0.0)

    moles_of = np.nan_to_num(wt, nan=0.0) * atoms_per_wt
    total_oxygen = np.nan_to_num(wt, nan=0.0) @ oxygen_per_wt
    scale = oxygens / np.where(total_oxygen > 0.0, total_oxygen, np.nan)
    atoms = moles_of * scale[:, np.newaxis]
    cation_sum = atoms @ is_cation.astype(np.float64)

    # atoms_i = X m_i / O: its derivative by w_k is (X/O)(a_i δ_ik − atoms_i b_k / X); the cation sum alike.
    missing = np.isnan(wt)
    sigma = np.where(missing, 0.0, sigma_wt)
    through_oxygen = oxygen_per_wt / oxygens
    oxygen_variance = np.sum(_product(through_oxygen, sigma) ** 2, axis=1)[:, np.newaxis]
    own = (atoms_per_wt * sigma) ** 2 - 2.0 * atoms * atoms_per_wt * _product(through_oxygen, sigma) * sigma
    atom_sigma = scale[:, np.newaxis] * np.sqrt(np.maximum(own + atoms**2 * oxygen_variance, 0.0))
    sum_slopes = atoms_per_wt * is_cation - cation_sum[:, np.newaxis] * through_oxygen
    sum_sigma = scale * np.sqrt(np.sum(_product(sum_slopes, sigma) ** 2, axis=1))
    return FormulaUnits(
        oxides=columns,
        oxygens=oxygens,
        atoms=np.where(missing, np.nan, atoms),
        sigma=np.where(missing, np.nan, atom_sigma),
        cation_sum=cation_sum,
        cation_sum_sigma=sum_sigma,
    )


def _product(slopes: FloatArray, sigma: FloatArray) -> FloatArray:
    """Slope times sigma; 0 where the slope is 0, even if the sigma is unknown (NaN)."""
    return np.where(slopes == 0.0, 0.0, slopes * sigma)


def _table(values: FloatArray, columns: int, name: str) -> FloatArray:
    table = np.asarray(values, dtype=np.float64)
    if table.ndim != 2 or table.shape[1] != columns:
        raise ValueError(f"{name} has shape {table.shape}, expected (spots, {columns})")
    return table


def _shares(*amounts: FloatArray) -> tuple[FloatArray, ...]:
    """Each amount over the sum of all; NaN where the sum is not positive."""
    total = np.sum(np.broadcast_arrays(*amounts), axis=0)
    divisor = np.where(total > 0.0, total, np.nan)
    return tuple(np.asarray(amount / divisor) for amount in amounts)
