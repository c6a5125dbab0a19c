"""Moment vectors: change of centre, combination, removal, affine maps.

A moment vector is W, the mean and the sums M_k of w (x - mean)**k for k = 2 .. p.  Everything here
works elementwise on arrays of channels.  Sources: Chan, Golub & LeVeque (1979), "Updating formulae
and a pairwise algorithm for computing sample variances"; Pébay (2008), SAND2008-6212.
"""

from math import comb
from typing import Any, NamedTuple

import numpy as np


class MomentVector(NamedTuple):
    """One moment vector, or one for every channel.

    The mean is ``mean + rest``, unevaluated: a mean rounded to one double spoils the third power
    sum of readings far from zero.  Powers of two are kept apart so that no scale overflows.
    """

    weight: Any  # W, in units of 2**weight_scale
    mean: Any  # leading part, in units of 2**scale
    rest: Any  # what it leaves
    scale: Any  # integers, kept as doubles
    sums: Any  # M2 .. Mp, shape (p - 1, ...), in units of 2**(weight_scale + k * scale)
    weight_scale: Any = 0.0
    powers: Any = (
        None  # reliability weights: sums of w**2, w**3, w**4 in units of 2**(j * weight_scale)
    )


def shift(values, by):
    """``values * 2**by``, exact but where it leaves the range of doubles."""
    return np.ldexp(values, np.asarray(by).astype(np.int64))


def moved(sums, offset):
    """Power sums about another centre.

    Parameters
    ----------
    sums : sequence
        Sums of order 0, 1, 2 .. p about the present centre.
    offset : float or array
        Present centre minus new centre.

    Returns
    -------
    list
        ``sum_j C(k, j) sums[k - j] offset**j`` for k = 0 .. p.
    """
    result = []
    for k in range(len(sums)):
        total = sums[0]
        for j in range(k - 1, -1, -1):
            total = total * offset + comb(k, j) * sums[k - j]
        result.append(total)
    return result


def two_sum(a, b):
    """The rounded sum, and what the rounding left (Knuth)."""
    total = a + b
    shadow = total - a
    return total, (a - (total - shadow)) + (b - shadow)


def in_units(vector, scale, weight_scale):
    """The same vector in other units."""
    by = vector.scale - scale
    by_weight = vector.weight_scale - weight_scale
    order = np.arange(2, len(vector.sums) + 2).reshape((-1,) + (1,) * np.ndim(vector.mean))
    powers = vector.powers
    if powers is not None:
        degree = np.arange(2, 5).reshape((-1,) + (1,) * np.ndim(vector.mean))
        powers = shift(powers, degree * by_weight)
    return MomentVector(
        shift(vector.weight, by_weight),
        shift(vector.mean, by),
        shift(vector.rest, by),
        scale,
        shift(vector.sums, order * by + by_weight),
        weight_scale,
        powers,
    )


def _extent(vector):
    """Exponent of the larger of the mean's size and the standard deviation."""
    size = np.abs(vector.mean)
    if len(vector.sums):
        size = np.maximum(size, np.sqrt(np.maximum(vector.sums[0], 0.0) / vector.weight))
    return vector.scale + np.frexp(size)[1]


def _common_units(a, b):
    scale = np.maximum(_extent(a), _extent(b))
    weight_scale = np.maximum(
        a.weight_scale + np.frexp(a.weight)[1], b.weight_scale + np.frexp(b.weight)[1]
    )
    return in_units(a, scale, weight_scale), in_units(b, scale, weight_scale)


def combine(a, b):
    """The vector of both parts together; both weights positive.

    With delta the distance of the means and f the share of each part's weight, both parts are
    moved to the common mean and added.  The mean starts from the heavier part.
    """
    a, b = _common_units(a, b)
    heavy = a.weight >= b.weight
    weight = a.weight + b.weight
    delta = (b.mean - a.mean) + (b.rest - a.rest)
    share_a, share_b = a.weight / weight, b.weight / weight
    mean, rest = two_sum(
        np.where(heavy, a.mean, b.mean),
        np.where(heavy, a.rest + share_b * delta, b.rest - share_a * delta),
    )
    zero = np.zeros_like(a.mean)
    from_a = moved([a.weight, zero, *a.sums], -share_b * delta)
    from_b = moved([b.weight, zero, *b.sums], share_a * delta)
    sums = np.array([x + y for x, y in zip(from_a[2:], from_b[2:], strict=True)])
    powers = None if a.powers is None else a.powers + b.powers
    return MomentVector(weight, mean, rest, a.scale, sums, a.weight_scale, powers)


def remove(total, part):
    """What ``total`` was before ``part`` went in; the rest must have weight.

    Differences of power sums: the error is relative to the sums of ``total``.  Even sums below
    zero become zero.
    """
    total, part = _common_units(total, part)
    weight = total.weight - part.weight
    distance = (part.mean - total.mean) + (part.rest - total.rest)
    offset = -(part.weight * distance) / weight
    zero = np.zeros_like(total.mean)
    about_total = moved([part.weight, zero, *part.sums], distance)
    left = [a - b for a, b in zip([total.weight, zero, *total.sums], about_total, strict=True)]
    sums = np.array(moved(left, -offset)[2:])
    sums[::2] = np.maximum(sums[::2], 0.0)
    mean, rest = two_sum(total.mean, total.rest + offset)
    powers = None if total.powers is None else np.maximum(total.powers - part.powers, 0.0)
    return MomentVector(weight, mean, rest, total.scale, sums, total.weight_scale, powers)


def affine(vector, scale, offset):
    """The vector of ``scale * x + offset``: mean likewise, M_k times ``scale**k``."""
    fraction, exponent = np.frexp(scale)
    units = vector.scale + exponent
    product, error = _two_product(vector.mean, fraction)
    mean, rest = two_sum(product, error + vector.rest * fraction)
    # Units of the spread, as long as mean and offset have room in them.
    top = np.maximum(
        np.where(mean == 0.0, units, units + np.frexp(mean)[1]),
        np.where(offset == 0.0, units, np.frexp(offset)[1]),
    )
    common = np.maximum(units, top - 1020)
    mean, rest = shift(mean, units - common), shift(rest, units - common)
    mean, error = two_sum(mean, shift(np.asarray(offset, float), -common))
    mean, rest = two_sum(mean, error + rest)
    order = np.arange(2, len(vector.sums) + 2).reshape((-1,) + (1,) * np.ndim(vector.mean))
    # Adding zero: a constant mirrored is a constant, without negative zeros.
    sums = shift(vector.sums * fraction**order, order * (units - common)) + 0.0
    return vector._replace(mean=mean, rest=rest, scale=common + 0.0, sums=sums)


def _two_product(a, b):
    """The rounded product, and what the rounding left (Dekker); no extreme exponents."""

    def split(x):
        large = x * 134217729.0
        high = large - (large - x)
        return high, x - high

    product = a * b
    (a_high, a_low), (b_high, b_low) = split(a), split(b)
    error = a_low * b_low - (((product - a_high * b_high) - a_low * b_high) - a_high * b_low)
    return product, np.where(np.isfinite(error), error, 0.0)
