"""Is this an equilibrium partition coefficient? One module per line of evidence."""

from tieline.assess.stage import assess
from tieline.assess.starting_composition import read_starting_composition

__all__ = ["assess", "read_starting_composition"]
