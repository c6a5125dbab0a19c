"""The nopython functions a user may call from compiled code of their own."""

import math

import numpy as np

from .blocks import (
    BLOCK,
    RAISE,
    TALLY,
    first_refused,
    take_block,
    take_blocks,
    take_blocks_32,
)
from .compiling import compiled, ldexp
from .vector import (
    BASE,
    LEVELS,
    MEAN,
    NEW,
    REST,
    SCALE,
    SUMS,
    combine_pair,
    combine_rows,
    fold_levels,
    rows_for,
)


@compiled
def new_vector(order):
    """An empty moment vector.

    Parameters
    ----------
    order : int
        2, 4, 6 .. 16: the highest moment kept.

    Returns
    -------
    ndarray of float64, shape (order + 4,)
    """
    if order < 2 or order > 16 or order % 2:
        raise ValueError("order must be even, from 2 to 16")
    return np.zeros(order + 4)


@compiled
def add_block(vector, readings):
    """Take finite readings in, exactly as one ``Moments`` block after another would.

    Parameters
    ----------
    vector : ndarray from ``new_vector``
        Modified in place.
    readings : contiguous ndarray of float64, shape (n,)
        A NaN or an infinity is a ValueError, and the vector stays as it was.
    """
    order = vector.size - 4
    table = np.zeros((LEVELS, vector.size))
    for i in range(vector.size):
        table[BASE, i] = vector[i]
    tally = np.zeros(TALLY, np.int64)
    extremes = np.zeros(2)
    for start in range(0, readings.size, BLOCK):
        part = readings[start : start + BLOCK]
        if not take_block(part, None, None, None, False, order, table, tally, extremes):
            raise ValueError("readings must be finite")
        combine_rows(table, BASE, NEW, order, False)
    for i in range(vector.size):
        vector[i] = table[BASE, i]


@compiled
def combine_vectors(a, b):
    """``a`` becomes the vector of both; ``b`` stays.  Both of one order."""
    if a.size != b.size:
        raise ValueError("vectors must be of one order")
    combine_pair(a, b, a.size - 4, False)


@compiled
def mean(vector):
    """The mean; nan when empty."""
    if vector[SUMS] == 0.0:
        return math.nan
    return ldexp(vector[MEAN] + vector[REST], int(vector[SCALE]))


@compiled
def variance(vector):
    """The population variance, M2 / W; nan when empty."""
    return ldexp(vector[SUMS + 2] / vector[SUMS], int(2 * vector[SCALE]))


@compiled
def skewness(vector):
    """M3 / W over the 1.5th power of M2 / W; nan without spread."""
    if vector[SUMS + 2] == 0.0:
        return math.nan
    second = vector[SUMS + 2] / vector[SUMS]
    return vector[SUMS + 3] / vector[SUMS] / (second * math.sqrt(second))


@compiled
def kurtosis(vector):
    """M4 / W over the square of M2 / W, less 3; nan without spread.  Order 4 at least."""
    if vector.size < 8:
        raise ValueError("kurtosis needs a vector of order 4")
    if vector[SUMS + 2] == 0.0:
        return math.nan
    second = vector[SUMS + 2] / vector[SUMS]
    return vector[SUMS + 4] / vector[SUMS] / (second * second) - 3.0


def warm_up():
    """Compile what most uses need, and store it where a cache folder is writable.

    Some seconds on a new machine, less than one afterwards; without it the first ``update`` takes
    that time.

    Examples
    --------
    >>> import momentstream as ms
    >>> ms.kernels.warm_up()
    """
    x = np.arange(2.0 * BLOCK)
    tally, extremes = np.zeros(TALLY, np.int64), np.zeros(2)
    for w, policy in ((None, None), (x + 1.0, RAISE)):
        table = np.zeros((rows_for(2), 8 if w is None else 12))
        blocks = take_blocks(x, None, w, policy, False, 4, table, 0, tally, extremes)
        part_w = None if w is None else w[:9]
        take_block(x[:9], None, part_w, policy, False, 4, table, tally, extremes)
        first_refused(x, w, True, False, tally)
        fold_levels(table, blocks, 4, w is not None)
        combine_pair(table[BASE], table[NEW], 4, w is not None)
    narrow = x.astype(np.float32)
    take_blocks_32(narrow, None, 4, table[:, :8].copy(), 0, tally, extremes)
