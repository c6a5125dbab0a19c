"""Moment vectors in nopython form: layout, change of centre, combination, scale.

A moment vector is one row of a float64 table:

====================  =========================================================================
``row[MEAN]``         mean, leading part (units of 2**scale)
``row[REST]``         what the leading part leaves: the mean is ``row[MEAN] + row[REST]``
``row[SCALE]``        scale: an integer kept as a double, 0 wherever that is safe
``row[SUMS + 0]``     W, the weight
``row[SUMS + 1]``     0, the first power sum about the mean
``row[SUMS + k]``     M_k for k = 2 .. order (units of 2**(k * scale))
====================  =========================================================================

and with weights, from ``row[SUMS + order + 1]`` on, the weights' own scale t and the sums of w**2,
w**3, w**4 (units of 2**(j * t); W and every M_k carry one more 2**t).  ``order`` is even.

Combination: Chan, Golub & LeVeque (1979); Pébay (2008), SAND2008-6212, any order.  The formulas
are those of ``momentstream.algebra.central``, which the tests hold them against.
"""

import math

import numpy as np

from .compiling import compiled, internal, keep_apart, ldexp

MEAN, REST, SCALE, SUMS = 0, 1, 2, 3
# Rows of a table: the levels of the block tree come last, as many as there are.  NumPy integers:
# Numba would compile a function anew for every plain constant it is called with.
BASE, NEW, LEFT, RIGHT, SPARE, LEVELS = (np.int64(i) for i in range(6))
EXTRA_WEIGHTED = 4

# Between these, sums, and products on the way to them, neither overflow nor lose bits.
SMALLEST, LARGEST = 2.0**-900, 2.0**900
SMALLEST_WEIGHT, LARGEST_WEIGHT = 2.0**-100, 2.0**100

_BINOMIAL = np.array([[float(math.comb(n, k)) for k in range(17)] for n in range(17)])


@internal
def two_sum(a, b):
    """The rounded sum of a and b, and what the rounding left (Knuth)."""
    total = a + b
    shadow = total - a
    return total, (a - (total - shadow)) + (b - shadow)


@internal
def exponent(value):
    """The e with 2**(e-1) <= abs(value) < 2**e; 0 for zero."""
    return np.int64(math.frexp(value)[1])


@internal
def is_finite(value):
    return value - value == 0.0


@internal
def moved_sum(table, row, k, offset):
    """The k-th power sum about a centre that lies ``offset`` below the present one.

    sum_j C(k, j) c_{k-j} offset**j by Horner's rule: change of centre, exact in real arithmetic.
    """
    total = table[row, SUMS]
    for j in range(k - 1, -1, -1):
        total = total * offset + _BINOMIAL[k, j] * table[row, SUMS + k - j]
    return total


@internal
def copy_row(table, source, target):
    for i in range(table.shape[1]):
        table[target, i] = table[source, i]


@compiled
def clear_row(table, row):
    for i in range(table.shape[1]):
        table[row, i] = 0.0


@internal
def _weight_scale(table, row, order, weighted):
    return table[row, SUMS + order + 1] if weighted else 0.0


@internal
def _join(table, a, b, order, weighted, target):
    """``target`` becomes a and b together; both in the same units.  Returns whether it is safe."""
    # The heavier part goes first: starting from the lighter mean loses digits.  The full
    # order makes the result the same whichever way round the parts come.
    if table[a, SUMS] < table[b, SUMS] or (
        table[a, SUMS] == table[b, SUMS]
        and (
            table[a, MEAN] < table[b, MEAN]
            or (table[a, MEAN] == table[b, MEAN] and table[a, REST] < table[b, REST])
        )
    ):
        a, b = b, a
    weight = table[a, SUMS] + table[b, SUMS]
    share_a = table[a, SUMS] / weight
    share_b = table[b, SUMS] / weight
    delta = (table[b, MEAN] - table[a, MEAN]) + (table[b, REST] - table[a, REST])
    mean, rest = two_sum(table[a, MEAN], table[a, REST] + share_b * delta)
    offset_a = -share_b * delta
    offset_b = share_a * delta
    for k in range(2, order + 1):
        total = moved_sum(table, a, k, offset_a) + moved_sum(table, b, k, offset_b)
        # What a removal left may be no moments of anything: even sums stay at zero at least.
        table[target, SUMS + k] = 0.0 if k % 2 == 0 and total < 0.0 else total
    table[target, MEAN] = mean
    table[target, REST] = rest
    table[target, SCALE] = table[a, SCALE]
    table[target, SUMS] = weight
    table[target, SUMS + 1] = 0.0
    if weighted:
        first = SUMS + order + 1
        table[target, first] = table[a, first]
        for j in range(1, 4):
            table[target, first + j] = table[a, first + j] + table[b, first + j]
    top = table[target, SUMS + order]
    return (SMALLEST < top < LARGEST) or (top == 0.0 and delta == 0.0)


@internal
def rescale(table, row, order, weighted, scale, weight_scale):
    """Express a row in other units; exact but where a value leaves the range of doubles."""
    keep_apart()
    by = np.int64(table[row, SCALE] - scale)
    table[row, MEAN] = ldexp(table[row, MEAN], int(by))
    table[row, REST] = ldexp(table[row, REST], int(by))
    table[row, SCALE] = scale
    by_weight = np.int64(0)
    if weighted:
        first = SUMS + order + 1
        by_weight = np.int64(table[row, first] - weight_scale)
        table[row, first] = weight_scale
        for j in range(1, 4):
            table[row, first + j] = ldexp(table[row, first + j], int((j + 1) * by_weight))
    for k in range(order + 1):
        table[row, SUMS + k] = ldexp(table[row, SUMS + k], int(k * by + by_weight))


@internal
def _extent(table, row):
    """The exponent of the larger of the mean's size and the standard deviation."""
    deviation = math.sqrt(max(table[row, SUMS + 2], 0.0) / table[row, SUMS])
    size = max(abs(table[row, MEAN]), deviation)
    if size == 0.0:
        return -1e9
    return table[row, SCALE] + exponent(size)


@internal
def to_plain_scale(table, row, order, weighted):
    """Go back to scale 0 (each of the two) where that is safe: units depend on content alone."""
    keep_apart()
    scale = table[row, SCALE]
    weight_scale = _weight_scale(table, row, order, weighted)
    if weight_scale != 0.0:
        plain = ldexp(table[row, SUMS], int(weight_scale))
        if SMALLEST_WEIGHT < plain < LARGEST_WEIGHT:
            rescale(table, row, order, weighted, scale, 0.0)
            weight_scale = 0.0
    if scale != 0.0:
        top = ldexp(table[row, SUMS + order], int(order * scale))
        constant = table[row, SUMS + 2] == 0.0 and table[row, SUMS + order] == 0.0
        safe = constant or SMALLEST < top < LARGEST
        if safe and is_finite(ldexp(table[row, MEAN], int(scale))):
            rescale(table, row, order, weighted, 0.0, weight_scale)


@internal
def _combine_in_common_units(table, a, b, order, weighted):
    keep_apart()
    copy_row(table, a, LEFT)
    copy_row(table, b, RIGHT)
    scale = max(_extent(table, LEFT), _extent(table, RIGHT))
    if scale == -1e9:
        scale = 0.0
    weight_scale = 0.0
    if weighted:
        first = SUMS + order + 1
        weight_scale = max(
            table[LEFT, first] + exponent(table[LEFT, SUMS]),
            table[RIGHT, first] + exponent(table[RIGHT, SUMS]),
        )
    rescale(table, LEFT, order, weighted, scale, weight_scale)
    rescale(table, RIGHT, order, weighted, scale, weight_scale)
    _join(table, LEFT, RIGHT, order, weighted, a)
    to_plain_scale(table, a, order, weighted)


@internal
def _combine_not_finite(table, a, b, order, weighted):
    """Propagation: a NaN or an infinity among the readings, by the rules of IEEE addition."""
    keep_apart()
    mean = ldexp(table[a, MEAN], int(table[a, SCALE])) * 1.0
    other = ldexp(table[b, MEAN], int(table[b, SCALE])) * 1.0
    # Only what is not finite decides; two large finite means must not make an infinity.
    if is_finite(mean):
        mean = other
    elif not is_finite(other):
        mean = mean + other
    weight_scale = 0.0
    if weighted:
        first = SUMS + order + 1
        weight_scale = max(table[a, first], table[b, first])
    copy_row(table, b, RIGHT)
    rescale(table, RIGHT, order, weighted, 0.0, weight_scale)
    rescale(table, a, order, weighted, 0.0, weight_scale)
    table[a, MEAN] = mean
    table[a, REST] = 0.0
    table[a, SUMS] += table[RIGHT, SUMS]
    for k in range(2, order + 1):
        table[a, SUMS + k] = math.nan
    if weighted:
        for j in range(1, 4):
            table[a, first + j] += table[RIGHT, first + j]
        to_plain_scale(table, a, order, weighted)


@internal
def combine_rows(table, a, b, order, weighted):
    """Row a takes row b in; row b stays.  Rows LEFT, RIGHT and SPARE are used on the way."""
    keep_apart()
    if table[b, SUMS] == 0.0:
        return
    if table[a, SUMS] == 0.0:
        copy_row(table, b, a)
        return
    if not (is_finite(table[a, MEAN]) and is_finite(table[b, MEAN])):
        _combine_not_finite(table, a, b, order, weighted)
        return
    plain = table[a, SCALE] == 0.0 and table[b, SCALE] == 0.0
    if weighted:
        first = SUMS + order + 1
        plain = plain and table[a, first] == 0.0 and table[b, first] == 0.0
        plain = plain and table[a, SUMS] + table[b, SUMS] < LARGEST_WEIGHT
    if plain and _join(table, a, b, order, weighted, SPARE):
        copy_row(table, SPARE, a)
    else:
        _combine_in_common_units(table, a, b, order, weighted)


@internal
def insert_block(table, blocks, level, order, weighted):
    """Carry row NEW, a block of 2**level blocks, into the binary counter of block vectors.

    ``blocks`` counts the blocks before it.  Returns the count after it.
    """
    keep_apart()
    after = blocks + (1 << level)
    while (blocks >> level) & 1:
        combine_rows(table, NEW, LEVELS + level, order, weighted)
        level += 1
    copy_row(table, NEW, LEVELS + level)
    return after


def rows_for(blocks):
    """How many rows a table needs for so many blocks."""
    return int(LEVELS) + max(1, int(blocks).bit_length())


@compiled
def fold_levels(table, blocks, order, weighted):
    """Row NEW (the unfinished block) takes in the levels from the lowest up, then the base."""
    level = 0
    while blocks >> level:
        if (blocks >> level) & 1:
            combine_rows(table, NEW, LEVELS + level, order, weighted)
        level += 1
    combine_rows(table, NEW, BASE, order, weighted)


@compiled
def insert_group(table, blocks, level, order, weighted):
    """``insert_block`` from Python."""
    return insert_block(table, np.int64(blocks), np.int64(level), order, weighted)


@compiled
def settle_units(row, order, weighted):
    """``to_plain_scale`` of a vector that stands alone."""
    table = np.empty((1, row.size))
    for i in range(row.size):
        table[0, i] = row[i]
    to_plain_scale(table, np.int64(0), order, weighted)
    for i in range(row.size):
        row[i] = table[0, i]


@compiled
def combine_pair(a, b, order, weighted):
    """Row 0 of ``a`` takes row 0 of ``b`` in: two accumulators' settled vectors."""
    table = np.empty((LEVELS, a.shape[0]))
    for i in range(a.size):
        table[BASE, i] = a[i]
        table[NEW, i] = b[i]
    combine_rows(table, BASE, NEW, order, weighted)
    for i in range(a.size):
        a[i] = table[BASE, i]
