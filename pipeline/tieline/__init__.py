"""tieline: partition coefficients with honest intervals, from raw spot tables."""

__version__ = "0.1.0"
