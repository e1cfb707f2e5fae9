"""Memory that is not used any more goes back to the system once a process has been large."""

from __future__ import annotations

import sys

import numpy as np
import pytest

from tieline import memory


@pytest.mark.skipif(sys.platform == "win32", reason="Windows does not tell")
def test_peak_grows_with_what_is_held():
    before = memory.peak_bytes()
    held = np.ones(int(before) // 8 + 4_000_000)
    assert memory.peak_bytes() >= before + 16_000_000
    assert held[-1] == 1.0


@pytest.mark.parametrize("least", [0, float("inf")])
def test_memory_is_returned_only_by_a_process_that_was_large(monkeypatch, least):
    calls = []

    class Pool:
        def release_unused(self) -> None:
            calls.append("released")

    monkeypatch.setattr(memory.pa, "default_memory_pool", Pool)
    monkeypatch.setattr(memory, "LEAST_PEAK_BYTES", least)
    memory.return_unused_memory()
    assert calls == (["released"] if least == 0 else [])
