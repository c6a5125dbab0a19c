"""Moments computed elsewhere, checked before an accumulator is made of them."""

import numpy as np

from ..statistics.feasibility import violated
from ..statistics.readout import checked_degree
from .moments_payload import MOST_COUNTED
from .settings import extreme_array, finite_array


def checked_moments(mean, central, count, minimum, maximum):
    """Mean, central moments and extremes as arrays of one shape.

    Raises
    ------
    ValueError, TypeError
        They are not finite, or the moments and extremes of nothing.
    """
    count = checked_degree(count, least=1, name="count")
    if count >= MOST_COUNTED:
        raise ValueError(f"count must be below 2**63 - 1, got {count}")
    level = finite_array("mean", mean)
    if not hasattr(central, "__iter__"):
        raise TypeError(f"central must be a sequence of moments, got {central!r}")
    moments = [finite_array(f"central[{i}]", m, level.shape) for i, m in enumerate(central)]
    for i, values in enumerate(moments):
        if i % 2 == 0 and np.any(values < 0.0):
            raise ValueError(f"central moment {i + 2} must not be negative, got {values}")
        if count == 1 and np.any(values != 0.0):
            raise ValueError(f"one reading has no spread, but central moment {i + 2} is {values}")
    if len(moments) > 15:
        raise ValueError(f"central must hold at most 15 moments, got {len(moments)}")
    for place in np.ndindex(*level.shape):
        broken = violated([1.0, 0.0, *(float(values[place]) for values in moments)])
        if broken:
            raise ValueError(f"central must be moments of something: they break {broken}")
    ends = [
        extreme_array(name, end, level.shape)
        for name, end in (("minimum", minimum), ("maximum", maximum))
    ]
    if np.any((ends[0] > level) | (ends[1] < level)):
        raise ValueError(f"minimum and maximum must enclose the mean, got {ends}")
    return level, moments, ends


def guard(moments, like):
    """An even moment above an odd order: it only guards the scale, and is never read."""
    if not moments:
        return np.zeros_like(like)
    return moments[0] ** ((len(moments) + 2) / 2)
