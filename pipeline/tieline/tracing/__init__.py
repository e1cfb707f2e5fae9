"""One D back to its cells: pure functions from stage tables to a tree of plain data that a hand can recompute."""
