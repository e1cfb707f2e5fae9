"""Killed, or met by failing writes, at points spread over a run: whole results before, after, and after the next run.

A few points each; `make faults` strikes at all of them.
"""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

pytestmark = pytest.mark.skipif(not hasattr(os, "fork"), reason="the strikes need fork and SIGKILL")


def test_struck_at_points_spread_over_a_run():
    kinds = ("kill", "timed", "fail", "full")
    command = [sys.executable, Path(__file__).with_name("strikes.py"), *kinds, "--points", "3"]
    done = subprocess.run(command, capture_output=True, text=True, check=False, timeout=600)
    assert done.returncode == 0, done.stdout + done.stderr
    accounts = [json.loads(line) for line in done.stdout.splitlines()]
    assert [account["kind"] for account in accounts] == [*kinds]
    assert all(account["strikes"] == 3 and account["failed"] == 0 for account in accounts)
    assert accounts[0]["ends"] == {"-9": 3}
