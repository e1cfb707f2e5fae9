"""What most needs a person's attention, most pressing first; shown on the page and after a run."""

from __future__ import annotations

from collections import Counter, defaultdict
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import pyarrow as pa

from tieline.report.conventions import percent

# How pressing a kind is, per D that it touches; own choice. A doubt about the calibration moves every D of a batch,
# an unresolved class only says that the interval holds a boundary.
_PER_D = {"reference": 3.0, "technique": 3.0, "overlap": 2.0, "evidence": 2.0, "few": 1.5, "left-out": 1.0,
          "spread": 0.5, "unresolved": 0.5, "pair": 0.25}  # fmt: skip
FEW_SPOTS = 2
LARGE_SHARE_LEFT_OUT = 0.25
MOST_NAMES = 4


@dataclass(frozen=True)
class Attention:
    """One thing to look at: `kind`, the text, how many D it touches, and its weight for the order."""

    kind: str
    text: str
    n_affected: int

    @property
    def weight(self) -> float:
        return _PER_D[self.kind] * self.n_affected


def attention(tables: Mapping[str, pa.Table]) -> list[Attention]:
    """At most one remark per kind, the heaviest first. Reads calibrate, pair, pair.pairs, pair.techniques,
    classify and assess."""
    d_rows = tables["classify"].to_pylist()
    found = [
        _reference(tables["calibrate"].to_pylist(), d_rows),
        _techniques(tables["pair.techniques"].to_pylist(), d_rows),
        _overlap(d_rows),
        _few(d_rows),
        _left_out(tables["pair"].to_pylist(), d_rows),
        _spread(tables["pair"].to_pylist(), d_rows),
        _unresolved(d_rows),
        _pairs(tables["pair.pairs"].to_pylist(), d_rows),
        _evidence(tables["assess"].to_pylist()),
    ]
    return sorted((one for one in found if one is not None and one.n_affected), key=lambda one: -one.weight)


def listed(names: Iterable[str]) -> str:
    """`a, b, c and 4 more`."""
    every = list(dict.fromkeys(names))
    if len(every) <= MOST_NAMES:
        return ", ".join(every)
    return f"{', '.join(every[:MOST_NAMES])} and {len(every) - MOST_NAMES} more"


def _reference(calibrate: list[dict[str, Any]], d_rows: list[dict[str, Any]]) -> Attention | None:
    failed = {(row["batch"], row["element"]): row["bias"] for row in calibrate if row["passed"] is False}
    worst = max(failed, key=lambda key: abs((failed[key] or 1.0) - 1.0), default=None)
    if worst is None:
        return None
    touched = [
        row
        for row in d_rows
        if (row["batch_alpha"], row["element"]) in failed or (row["batch_beta"], row["element"]) in failed
    ]
    across = sum(row["batch_alpha"] != row["batch_beta"] for row in touched)
    cancels = "cancels within a batch" if not across else f"does not cancel in {across} D across batches"
    text = (
        f"Reference materials outside the laboratory's limit: {listed(element for _, element in failed)}; "
        f"worst {worst[1]} in {worst[0]}, {100 * abs(failed[worst] - 1):.2g} % off. The bias {cancels}."
    )
    return Attention("reference", text, len(touched))


def _techniques(rows: list[dict[str, Any]], d_rows: list[dict[str, Any]]) -> Attention | None:
    differ = [row for row in rows if row["differ"]]
    if not differ:
        return None
    worst = max(differ, key=lambda row: abs(row["deviation"] or 0.0))
    keys = {(row["experiment"], row["phase"], row["element"]) for row in differ}
    touched = sum(
        bool({(row["experiment"], row[side], row["element"]) for side in ("alpha", "beta")} & keys)
        for row in d_rows
    )
    text = (
        f"Two measurements of one phase mean disagree in {len(differ)} of {len(rows)} cases: "
        f"{listed(row['element'] for row in differ)}; "
        f"worst {worst['element']} in {worst['phase']} of {worst['experiment']}, a factor {worst['ratio']:.3g}."
    )
    return Attention("technique", text, touched)


def _overlap(d_rows: list[dict[str, Any]]) -> Attention | None:
    doubtful = [row for row in d_rows if row["kind"] == "value" and row["D_overlap_lo"] == 0 and row["D_lo"]]
    if not doubtful:
        return None
    groups = Counter((row["experiment"], row["alpha"], row["beta"]) for row in doubtful)
    bounds = {(row["experiment"], row["alpha"], row["beta"]): row["overlap_bound"] for row in doubtful}
    worst = max(groups, key=lambda key: (bounds[key] or 0.0, groups[key]))
    text = (
        f"{len(doubtful)} D could be nothing but leftover {worst[2]} in the crystals. Most room for it: {worst[0]} "
        f"{worst[1]}, up to {100 * (bounds[worst] or 0.0):.2g} % {worst[2]} ({groups[worst]} D)."
    )
    return Attention("overlap", text, len(doubtful))


def _few(d_rows: list[dict[str, Any]]) -> Attention | None:
    few = [row for row in d_rows if min(row["n_alpha"], row["n_beta"]) <= FEW_SPOTS]
    if not few:
        return None
    groups = listed(f"{row['experiment']} {row['alpha']}/{row['beta']}" for row in few)
    return Attention(
        "few", f"{len(few)} D rest on {FEW_SPOTS} spots or fewer in a phase: {groups}.", len(few)
    )


def _left_out(means: list[dict[str, Any]], d_rows: list[dict[str, Any]]) -> Attention | None:
    worst: dict[tuple[str, str, str], tuple[int, int]] = {}
    for row in means:
        key = row["experiment"], row["phase"], row["technique"]
        worst[key] = max(worst.get(key, (0, 1)), (row["n_left_out"], row["n_left_out"] + row["n_used"]))
    large = {
        key: part for key, part in worst.items() if part[0] >= LARGE_SHARE_LEFT_OUT * part[1] and part[0]
    }
    if not large:
        return None
    touched = sum(
        any((row["experiment"], row[side], row[f"technique_{side}"]) in large for side in ("alpha", "beta"))
        for row in d_rows
    )
    names = listed(f"{a} {b} {c} ({out} of {n})" for (a, b, c), (out, n) in sorted(large.items()))
    share = percent(LARGE_SHARE_LEFT_OUT)
    return Attention("left-out", f"{share} or more of the spots left out: {names}.", touched)


def _spread(means: list[dict[str, Any]], d_rows: list[dict[str, Any]]) -> Attention | None:
    wide = [row for row in means if row["mswd"] is not None and row["mswd"] > row["mswd_hi"]]
    if not wide:
        return None
    groups: dict[tuple[str, str], set[str]] = defaultdict(set)
    for row in wide:
        groups[row["experiment"], row["phase"]].add(row["element"])
    worst = max(groups, key=lambda key: len(groups[key]))
    touched = sum(
        any(row["element"] in groups.get((row["experiment"], row[side]), ()) for side in ("alpha", "beta"))
        for row in d_rows
    )
    text = (
        f"Spots differ by more than counting explains in {len(wide)} of {len(means)} phase means, most in {worst[1]} of "
        f"{worst[0]} ({len(groups[worst])} elements): zoning, mixed analyses or understated counting errors."
    )
    return Attention("spread", text, touched)


def _unresolved(d_rows: list[dict[str, Any]]) -> Attention | None:
    open_rows = [row for row in d_rows if row["class"] == "unresolved"]
    if not open_rows:
        return None
    often = Counter(f"{row['experiment']} {row['alpha']}/{row['beta']}" for row in open_rows).most_common(3)
    names = ", ".join(f"{name} ({number})" for name, number in often)
    return Attention(
        "unresolved",
        f"The class of {len(open_rows)} of {len(d_rows)} D is open, most in {names}.",
        len(open_rows),
    )


def _pairs(pairs: list[dict[str, Any]], d_rows: list[dict[str, Any]]) -> Attention | None:
    missing = [row for row in pairs if not row["formed"]]
    # A phase that an experiment does not have is no loss; one whose spots were all left out is.
    lost = [row for row in missing if "left out" in (row["reason"] or "")]
    if not lost:
        return None
    names = listed(f"{row['experiment']} {row['alpha']}/{row['beta']} ({row['reason']})" for row in lost)
    per_pair = max(1, len(d_rows) // max(1, len(pairs) - len(missing)))
    return Attention("pair", f"Pairs not formed: {names}.", len(lost) * per_pair)


def _evidence(checks: list[dict[str, Any]]) -> Attention | None:
    # D that leave a line against one condition follow others too: no evidence against equilibrium.
    differ = [row for row in checks if row["verdict"] == "differs" and row["check"] != "trend"]
    if not differ:
        return None
    names = listed(
        f"{row['check']} {row['experiment'] or ''} {row['alpha'] or ''}".rstrip() for row in differ
    )
    return Attention("evidence", f"Evidence against equilibrium to look at: {names}.", len(differ))
