"""What is done to readings before they are counted."""

import numpy as np

TRANSFORMS = (None, "log", "reciprocal", "abs")


def transformed(x, low, transform, nonfinite):
    """Readings after a transform; outside its domain NaN, or what IEEE says where that propagates.

    Each value is computed apart from its neighbours, so that cuts cannot change a bit.
    """
    if x.dtype != np.float64:
        x = x.astype(np.float64)
    if transform == "abs":
        return np.abs(x), None if low is None else np.where(x < 0.0, -low, low)
    with np.errstate(all="ignore"):
        if transform == "reciprocal":
            result = 1.0 / x
            if low is not None:
                result = result - low * result / x
            if nonfinite != "propagate":
                result = np.where(np.isfinite(x), result, np.nan)
            return result, None
        return _logarithm(x, low), None


def _logarithm(x, low):
    from .lazy import transforms

    return transforms.logarithm(
        x.reshape(-1), _no_rest if low is None else low.reshape(-1)
    ).reshape(x.shape)


_no_rest = np.empty(0)
