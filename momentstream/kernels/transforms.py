"""The logarithm, one reading at a time.

NumPy's own takes another path for the ends of an array than for its middle; here a reading's
logarithm is the same wherever it stands.
"""

import math

import numpy as np

from .compiling import compiled


@compiled
def logarithm(x, low):
    """Natural logarithms of ``x + low``; NaN below zero, minus infinity at zero."""
    result = np.empty(x.size)
    for i in range(x.size):
        value = x[i]
        if value > 0.0:
            result[i] = math.log(value) if value < np.inf else value
            if low.size > 0:
                result[i] += math.log1p(low[i] / value)
        elif value == 0.0:
            result[i] = -np.inf
        else:
            result[i] = np.nan
    return result
