"""Tests `glass-overlap` and `crystal-overlap`: spots that contain some of a neighbouring phase.

Every technique by itself, for its spots are its own. The contaminant is the robust mean of the other phase in the same
experiment and technique; the statistics are in `tieline.statistics.overlap`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from tieline.arrays import BoolArray, FloatArray, IntArray
from tieline.screen.composition import (
    Compositions,
    TestValues,
    compositions,
    trace_elements,
    values_for_tests,
)
from tieline.screen.padding import Block, blocks
from tieline.screen.session import Measured, Session
from tieline.settings.screen import OverlapSettings
from tieline.statistics.overlap import OverlapScores, overlap_scores

GLASS_OVERLAP, CRYSTAL_OVERLAP = "glass-overlap", "crystal-overlap"


@dataclass(frozen=True)
class Scored:
    """One block of groups with the scores of its spots against one contaminant each.

    tested: what was scored, made again where it is needed, for all of it together is as large as the session.
    contaminant (G,): numbers of the contaminant's groups; contaminant_mean (G, p).
    """

    code: str
    measured: Measured
    block: Block
    tested: TestValues
    is_trace: BoolArray
    contaminant: IntArray
    contaminant_mean: FloatArray
    contaminant_variance: FloatArray
    scores: OverlapScores


def majors_decide(part: Scored) -> BoolArray:
    """Groups (G,) in which the majors carry most of the information on the overlap."""
    shares = np.where(part.is_trace, np.nan_to_num(part.scores.weight_share), 0.0)
    return np.asarray(shares.sum(axis=1) < 0.5)


def provisional_groups(session: Session, part: Scored, zoned: frozenset[tuple[str | None, ...]]) -> BoolArray:
    """Groups (G,) of zoned crystals seen by majors, which cannot tell zoning from overlap."""
    keys = session.spots.groups.keys
    is_zoned = np.array([keys[group][:2] in zoned for group in part.block.groups], dtype=np.bool_)
    return np.asarray(is_zoned & majors_decide(part))


@dataclass(frozen=True)
class Overlap:
    """All that was scored of one technique, and the groups that could not be: group -> why."""

    measured: Measured
    scored: tuple[Scored, ...]
    unscored: dict[int, tuple[str, str]]


def score_overlap(
    session: Session, measured: Measured, whole: bool, dropped: BoolArray, settings: OverlapSettings
) -> Overlap:
    """Scores crystals against the melt of their experiment, and the melt against every crystal of its experiment.

    whole: the technique's analyses are whole ones. dropped (spots,): spots already left out, which shape nothing.
    """
    values = values_for_tests(measured).without(dropped[measured.spots])
    is_trace = trace_elements(measured, session.spots.phase.codes[measured.spots], whole)
    groups = np.unique(measured.group)
    keys = [session.spots.group_key(int(group)) for group in groups]
    is_melt = np.array([key[1] == settings.melt_phase for key in keys], dtype=np.bool_)
    melt_of = {key[0]: int(group) for key, group, melt in zip(keys, groups, is_melt, strict=True) if melt}
    made_of = compositions(measured, values, groups)
    unscored: dict[int, tuple[str, str]] = {}
    in_crystals: list[tuple[int, int]] = []
    in_melt: list[tuple[int, int]] = []
    for group, key, melt in zip(groups.tolist(), keys, is_melt.tolist(), strict=True):
        partner = melt_of.get(key[0])
        if melt:
            continue
        if partner is None:
            unscored[group] = (
                GLASS_OVERLAP,
                f"no {settings.melt_phase} of this experiment by {measured.technique}",
            )
        else:
            in_crystals.append((group, partner))
            in_melt.append((partner, group))
    for group in set(melt_of.values()) - {melt for melt, _ in in_melt}:
        unscored[group] = (CRYSTAL_OVERLAP, f"no crystals of this experiment by {measured.technique}")
    scored = [
        *_score(measured, values, is_trace, made_of, in_crystals, GLASS_OVERLAP, settings),
        *_score(measured, values, is_trace, made_of, in_melt, CRYSTAL_OVERLAP, settings),
    ]
    return Overlap(measured, tuple(scored), unscored)


def _score(
    measured: Measured,
    values: TestValues,
    is_trace: BoolArray,
    made_of: Compositions,
    pairs: Sequence[tuple[int, int]],
    code: str,
    settings: OverlapSettings,
) -> list[Scored]:
    """Scores of pairs (group, contaminant's group); a group may stand in several pairs."""
    scored = []
    for layer in _layers(pairs):
        hosts, contaminants = layer
        for block in blocks(measured, hosts):
            contaminant = contaminants[np.searchsorted(hosts, block.groups)]
            place = made_of.place(contaminant)
            mean, variance = made_of.mean[place], made_of.variance[place]
            value, sigma = block.of(values.value), block.of(values.sigma)
            scores = overlap_scores(
                value,
                sigma,
                mean,
                variance,
                is_trace,
                nuisance="yield-and-growth" if code == GLASS_OVERLAP else "yield",
                z_limit=settings.z,
                p_limit=settings.something_else_p,
            )
            scored.append(
                Scored(code, measured, block, values, is_trace, contaminant, mean, variance, scores)
            )
    return scored


def _layers(pairs: Sequence[tuple[int, int]]) -> list[tuple[IntArray, IntArray]]:
    """Pairs in layers in which every group stands once: the first contaminant of every group, then the second, ..."""
    layers: list[list[tuple[int, int]]] = []
    seen: dict[int, int] = {}
    for host, contaminant in sorted(pairs):
        depth = seen.get(host, 0)
        seen[host] = depth + 1
        if depth == len(layers):
            layers.append([])
        layers[depth].append((host, contaminant))
    return [(np.array([a for a, _ in layer]), np.array([b for _, b in layer])) for layer in layers]
