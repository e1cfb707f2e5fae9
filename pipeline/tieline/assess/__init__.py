"""Is this an equilibrium partition coefficient? One module per line of evidence."""

from tieline.assess.stage import assess

__all__ = ["assess"]
