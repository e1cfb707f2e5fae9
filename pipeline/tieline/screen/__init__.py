"""Stage `screen`: one module per test, and one that combines findings and rulings into `use` and `why`."""

from tieline.rulings import read_rulings
from tieline.screen.counting import TestCount, counts_by_test
from tieline.screen.stage import screen

__all__ = ["TestCount", "counts_by_test", "read_rulings", "screen"]
