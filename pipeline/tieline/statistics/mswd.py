"""Does the scatter agree with the counting? Acceptance interval of the mean square of weighted deviates.

- `mswd_interval(dof, confidence=0.95) -> low, high`
"""

import numpy as np
from scipy import special

from tieline.statistics.groups import FloatArray


def mswd_interval(dof: FloatArray, confidence: float = 0.95) -> tuple[FloatArray, FloatArray]:
    """Interval that holds the mswd with probability `confidence` when nothing but the stated sigmas scatters.

    dof: any shape, number of values less one; returns two arrays of that shape, NaN where dof < 1. The mswd
    times its dof follows chi-square (Wendt & Carl 1991, Chem. Geol. 86:275, who approximate its sd by
    sqrt(2/dof)). Above: real spread or understated sigmas; below: overstated sigmas.
    """
    dof = np.asarray(dof, dtype=np.float64)
    defined = dof >= 1
    safe = np.where(defined, dof, 1.0)
    tail = 0.5 * (1.0 - confidence)
    low = np.where(defined, special.chdtri(safe, 1.0 - tail) / safe, np.nan)
    high = np.where(defined, special.chdtri(safe, tail) / safe, np.nan)
    return low, high
