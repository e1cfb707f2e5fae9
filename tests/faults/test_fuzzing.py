"""Every input of the corpus, the seeds, and random damage done to them: no promise of `targets.py` is broken.

`make fuzz MINUTES=10` searches further, guided by the branches it reaches; what it finds is added to the corpus.
"""

from __future__ import annotations

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from faults.targets import CORPUS, PARTS, TARGETS, seeds

FILES = sorted(path for path in CORPUS.rglob("*") if path.is_file())
SEEDS = seeds()


def test_every_corpus_file_belongs_to_a_target_and_every_target_has_seeds():
    assert {path.parent.name for path in FILES} <= set(TARGETS)
    assert set(SEEDS) == set(TARGETS)


@pytest.mark.parametrize("target", TARGETS)
def test_the_corpus(target: str):
    for data in SEEDS[target]:
        TARGETS[target](data)
    for path in FILES:
        if path.parent.name == target:
            TARGETS[target](path.read_bytes())


@st.composite
def damaged(draw: st.DrawFn, seed: bytes) -> bytes:
    """A seed with pieces removed, doubled, replaced by others of its own or by odd characters."""
    data = seed
    for _ in range(draw(st.integers(1, 4))):
        start = draw(st.integers(0, max(len(data) - 1, 0)))
        stop = min(len(data), start + draw(st.integers(0, 40)))
        other = draw(st.integers(0, max(len(data) - 1, 0)))
        piece = draw(
            st.sampled_from((b"", data[start:stop] * 2, data[other : other + 20], *ODD))
            | st.binary(max_size=8)
        )
        data = data[:start] + piece + data[stop:]
    return data


ODD = (
    b"\0", b"\x1b[31m", "\u202e".encode(), b"\r", b"\n\n", b'"', b"'", b",", b";", b"1e308", b"inf", b"-", b"<",
    b"9" * 70, "\ufeff".encode(), "\u00e9".encode(), b"[", b"=",
)  # fmt: skip


@pytest.mark.parametrize("target", TARGETS)
def test_damaged_seeds(target: str):
    @settings(max_examples=15, deadline=None, suppress_health_check=list(HealthCheck))
    @given(st.sampled_from(SEEDS[target]).flatmap(damaged))
    def check(data: bytes) -> None:
        TARGETS[target](data)

    check()


def test_the_parts_of_a_workbook_are_all_reached():
    """The first byte chooses the part; a seed of each must be read or refused, not be skipped."""
    for kind in range(len(PARTS) + 2):
        TARGETS["spreadsheet"](bytes([kind]) + SEEDS["spreadsheet"][0][1:])
