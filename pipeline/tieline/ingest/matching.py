"""Reference materials and phases among the spot labels."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace

import numpy as np
import numpy.typing as npt
import pyarrow as pa
import pyarrow.compute as pc

from tieline.chemistry.phases import PHASES, phase_name
from tieline.errors import InputError, Problem
from tieline.ingest.asides import shown
from tieline.ingest.spots import Spots
from tieline.ingest.texts import UNCLEAN, Texts
from tieline.reading.cell_text import fold
from tieline.results import Remark

MOST_REMARKS = 20
Spellings = Mapping[str, tuple[str, ...]]


def with_materials(spots: Spots, names: Spellings) -> Spots:
    """Spots whose phase, experiment or spot label is a reference material's name or spelling become its spots.

    Compared without regard to case; a spelling may end in `*` for numbered labels. Their experiment is
    emptied and their phase is the material's name.
    """
    if not names or not len(spots):
        return spots
    material_of, may_be = _material_lookup(names)
    material = spots.spot.renamed(material_of, may_be(spots.spot))
    for labels in (spots.experiment, spots.phase):
        material = labels.renamed(material_of, may_be(labels)).filled(material)
    is_material = ~material.is_missing()
    nothing = Texts.constant(None, len(spots))
    return replace(
        spots,
        material=material,
        experiment=spots.experiment.replaced(is_material, nothing),
        phase=spots.phase.replaced(is_material, material),
    )


def _material_lookup(
    names: Spellings,
) -> tuple[Callable[[str], str | None], Callable[[Texts], npt.NDArray[np.bool_]]]:
    """Tells the reference material a label means, or None; and of which known texts it has to be asked.

    Nearly every spot has a label of its own, so that those which cannot mean a material are passed over together.
    """
    whole = {fold(spelling): name for name, given in names.items() for spelling in (name, *given)}
    starts = [(spelling[:-1], name) for spelling, name in whole.items() if spelling.endswith("*")]

    def material_of(text: str) -> str | None:
        folded = fold(text)
        return whole.get(folded) or next((name for start, name in starts if folded.startswith(start)), None)

    def may_be(labels: Texts) -> npt.NDArray[np.bool_]:
        texts = labels.dictionary()
        lower = pc.ascii_lower(texts)
        # What `fold` does beyond lower case is left to it.
        possible = pc.match_substring_regex(texts, UNCLEAN)
        possible = pc.or_(possible, pc.is_in(lower, value_set=pa.array(whole, pa.string())))
        for start, _ in starts:
            possible = pc.or_(possible, pc.starts_with(lower, start))
        return np.asarray(possible.to_numpy(zero_copy_only=False), dtype=np.bool_)

    return material_of, may_be


def with_phases(spots: Spots, spellings: Spellings) -> Spots:
    """Phase labels of the unknowns as phase names; a label that matches none stays as it is."""
    unknown = spots.material.is_missing()
    matched = spots.phase.renamed(lambda text: phase_name(text, spellings) or text)
    return replace(spots, phase=spots.phase.replaced(unknown, matched))


def check_spellings(phases: Spellings, materials: Spellings) -> bool:
    """True; raises InputError when one spelling is given to two phases or to two materials."""
    problems = []
    try:
        phase_name("", phases)
    except ValueError as error:
        problems.append(Problem(f"{error}.", column="ingest.phases"))
    owner: dict[str, str] = {}
    for name, spellings in materials.items():
        for spelling in (name, *spellings):
            other = owner.setdefault(fold(spelling), name)
            if other != name:
                message = f'the spelling "{spelling}" is given to both "{other}" and "{name}".'
                problems.append(Problem(message, column="ingest.reference_materials.names"))
    if problems:
        raise InputError(problems)
    return True


def phase_remarks(spots: Spots, configured: Spellings, materials: Spellings) -> list[Remark]:
    """Phase labels that are neither configured nor known, with the nearest names and how many spots."""
    from tieline.chemistry.names import nearest_names

    known = set(PHASES) | set(configured)
    unknown = spots.phase.kept(spots.material.is_missing())
    candidates = sorted({*known, *materials, *(s for given in configured.values() for s in given)})
    counts = unknown.counts()
    strange = sorted(
        (label for label in counts if label not in known), key=lambda label: (-counts[label], label)
    )
    remarks = []
    for label in strange[:MOST_REMARKS]:
        near = nearest_names(label, candidates)
        guess = f"Nearest: {', '.join(near)}." if near else "Nothing known comes near."
        remarks.append(
            Remark(f'phase "{shown(label)}" ({counts[label]} spots) is not known and kept as it is. {guess}')
        )
    if len(strange) > MOST_REMARKS:
        remarks.append(
            Remark(f"{len(strange) - MOST_REMARKS} more phase labels are not known and kept as they are.")
        )
    return remarks


def similar_experiments(spots: Spots) -> list[Remark]:
    """Experiment labels that differ only in case, blanks or dashes."""
    groups: dict[str, list[str]] = {}
    for label in spots.experiment.counts():
        key = "".join(character for character in fold(label) if character.isalnum())
        groups.setdefault(key, []).append(label)
    alike = [sorted(labels) for labels in groups.values() if len(labels) > 1]
    return [
        Remark(
            f"experiments {shown(', '.join(labels))} differ only in case or punctuation and are kept apart."
        )
        for labels in alike[:MOST_REMARKS]
    ]


def sequence_numbers(
    batch: npt.NDArray[np.int32], batches: int, table: npt.NDArray[np.int64], order: npt.NDArray[np.float64]
) -> npt.NDArray[np.int32]:
    """Place of every spot within its batch, from 1: by `order` where all of the batch have it, else by table and row.

    batch, table, order: one entry per spot, in the order of tables and rows; `order` is NaN where not given.
    """
    incomplete = np.bincount(batch[np.isnan(order)], minlength=batches) > 0
    key = np.where(incomplete[batch], table.astype(float), order)
    ranked = np.lexsort((np.arange(len(order)), key, batch))
    sizes = np.bincount(batch, minlength=batches)
    sequence = np.empty(len(ranked), dtype=np.int32)
    sequence[ranked] = np.arange(len(ranked)) - np.repeat(np.cumsum(sizes) - sizes, sizes) + 1
    return sequence
