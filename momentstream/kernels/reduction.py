"""One block of readings becomes one moment vector.

A block's vector depends on the block's content alone, and so does the path its readings take
(plain, scaled, in two parts); every path ends in ``sums.power_sums``, for one channel of many in
``tiles.column_sums``.

Readings are doubles ``x``, or pairs ``x + low`` for integers that no double holds (``low`` is None
where there are none); ``w`` are weights or None.  Numba compiles each combination on its own.
``by_rows`` is None for a stream, anything else for one channel of many.
"""

import numpy as np
from numba.core import types
from numba.extending import overload

from .compiling import REORDER, internal, keep_apart, ldexp
from .sums import (
    LEAST,
    LIGHTEST,
    MOST,
    PIVOT,
    POWERS,
    column_sums,
    power_sums,
)
from .vector import (
    LARGEST,
    LARGEST_WEIGHT,
    MEAN,
    NEW,
    REST,
    SCALE,
    SMALLEST,
    SMALLEST_WEIGHT,
    SPARE,
    SUMS,
    exponent,
    is_finite,
    moved_sum,
    two_sum,
)

_HEAD, _HEAD_UPPER, HEAD_ROWS = 64, 256, 32  # readings the first pivot is taken from
# NumPy values: Numba would compile a function anew for every plain constant it is called with.
ZERO = np.int64(0)


def part_of(array, start, stop):
    """``array[start:stop]``, None for None."""
    return None if array is None else array[start:stop]


def room_for(array, size):
    """An empty array of doubles where there is an array, None for None."""
    return None if array is None else np.empty(size)


@overload(part_of)
def _part_of(array, start, stop):
    if isinstance(array, types.NoneType):
        return lambda array, start, stop: None
    return lambda array, start, stop: array[start:stop]


@overload(room_for)
def _room_for(array, size):
    if isinstance(array, types.NoneType):
        return lambda array, size: None
    return lambda array, size: np.empty(size)


@internal(fastmath=REORDER)
def all_finite(x):
    total = 0.0
    for i in range(x.size):
        total += x[i] * 0.0
    return total == 0.0


@internal
def any_rest(low):
    """Whether any second part is not zero."""
    for i in range(low.size):
        if low[i] != 0.0:
            return True
    return False


@internal
def all_equal(low):
    """Whether every second part is the first one."""
    for i in range(1, low.size):
        if low[i] != low[0]:
            return False
    return True


@internal
def factors_of(scale):
    """Two factors that together are 2**-scale: one alone could overflow."""
    half = -scale // 2
    return ldexp(1.0, int(half)), ldexp(1.0, int(-scale - half))


@internal
def write_deviations(x, low, scale, pivot, pivot_rest, out):
    first, second = factors_of(scale)
    if low is None:
        for i in range(x.size):
            out[i] = x[i] * first * second - pivot
    else:
        for i in range(x.size):
            out[i] = (x[i] * first * second - pivot) + (low[i] * first * second - pivot_rest)


@internal
def _mean_distance(head, origin):
    # Eight sums side by side, in an order the compiler may not change: it would take the origin
    # out of the sum, and a pivot found from scaled readings would differ in its last bit.
    keep_apart()
    t0 = t1 = t2 = t3 = t4 = t5 = t6 = t7 = 0.0
    i = 0
    while i + 8 <= head.size:
        t0 += head[i] - origin
        t1 += head[i + 1] - origin
        t2 += head[i + 2] - origin
        t3 += head[i + 3] - origin
        t4 += head[i + 4] - origin
        t5 += head[i + 5] - origin
        t6 += head[i + 6] - origin
        t7 += head[i + 7] - origin
        i += 8
    total = ((t0 + t1) + (t2 + t3)) + ((t4 + t5) + (t6 + t7))
    while i < head.size:
        total += head[i] - origin
        i += 1
    return total / head.size


@internal
def _mean_distance_by_rows(head, origin):
    total = 0.0
    for i in range(head.size):
        total += head[i] - origin
    return total / head.size


def head_distance(x, origin, by_rows):
    """The mean distance of the first readings from ``origin``."""
    return (_mean_distance if by_rows is None else _mean_distance_by_rows)(x, origin)


@overload(head_distance)
def _head_distance(x, origin, by_rows):
    if isinstance(by_rows, types.NoneType):
        return lambda x, origin, by_rows: _mean_distance(x, origin)
    return lambda x, origin, by_rows: _mean_distance_by_rows(x, origin)


def add_up(x, w, pivot, order, room, row, by_rows):
    """Power sums into ``room[row]``: of a stream, or of one channel in the channels' order."""
    (power_sums if by_rows is None else column_sums)(x, w, pivot, order, room, row)


@overload(add_up)
def _add_up(x, w, pivot, order, room, row, by_rows):
    if isinstance(by_rows, types.NoneType):
        return lambda x, w, pivot, order, room, row, by_rows: power_sums(
            x, w, pivot, order, room, row
        )
    return lambda x, w, pivot, order, room, row, by_rows: column_sums(x, w, pivot, order, room, row)


@internal
def find_pivot(x, low, scale, order, by_rows):
    """A first guess of the mean, from the first readings.

    Readings from all over the block would guess better where they drift, but fetching them ahead
    of the sweep doubled its time: the second sweep that drift costs runs from the cache instead.
    """
    keep_apart()
    head = x[: HEAD_ROWS if by_rows is not None else _HEAD_UPPER if order > 8 else _HEAD]
    if low is None and scale == 0:
        origin = np.float64(x[0])
        return origin + head_distance(head, origin, by_rows), 0.0
    distances = np.empty(head.size)
    first, second = factors_of(scale)
    origin = x[0] * first * second
    if low is None:
        for i in range(head.size):
            distances[i] = head[i] * first * second - origin
        return origin + head_distance(distances, 0.0, by_rows), 0.0
    origin_rest = low[0] * first * second
    for i in range(head.size):
        distances[i] = (head[i] * first * second - origin) + (low[i] * first * second - origin_rest)
    return two_sum(origin, origin_rest + head_distance(distances, 0.0, by_rows))


@internal
def sweep(x, w, order, room, row, by_rows):
    """The first sweep over plain readings: pivot, power sums and extremes.

    Apart from ``finish_block`` so that several blocks can be swept before any is finished: the
    memory then keeps streaming.
    """
    keep_apart()
    pivot, _ = find_pivot(x, None, ZERO, order, by_rows)
    room[row, PIVOT] = pivot
    add_up(x, w, pivot, order, room, row, by_rows)


@internal
def settled_by_sweep(w, order, room, row):
    """Whether the first sweep is the last: sums in range, pivot near the mean, no constant.

    Every reading is then finite, and every weight good and positive.
    """
    weight = room[row, 0]
    if w is not None and not (
        room[row, LIGHTEST] > 0.0 and SMALLEST_WEIGHT < weight < LARGEST_WEIGHT
    ):
        return False
    span = room[row, MOST] - room[row, LEAST]
    return (
        SMALLEST < room[row, order] < LARGEST
        and _pivot_is_near(room, row, span, order)
        and not _one_may_rule(w, room, row, span)
        and room[row, LEAST] != room[row, MOST]
    )


@internal
def _pivot_is_near(room, row, span, order):
    """Whether sums about the pivot are as good as sums about the mean would be.

    For the sums the distance counts in standard deviations; for the mean in mean absolute
    deviations, which are at least the variance over the span of the readings.
    """
    error = room[row, 1] / room[row, 0]
    variance = room[row, 2] / room[row, 0]
    return error * error <= variance * _tolerance(order) and abs(error) * span <= 4.0 * variance


@internal
def _one_may_rule(w, room, row, span):
    """Whether few readings may be so far out that all others are rounded to their size.

    The sum of first order then needs ``_careful_sum``: the mean absolute deviation is small.
    """
    weight = 1.0  # of a typical reading
    if w is not None:
        weight = room[row, POWERS + 2] / room[row, 0]
    return 16.0 * weight * span * span > room[row, 2]


@internal
def _careful_sum(x, w, pivot):
    """The sum of w (x - pivot) with at most six roundings to the size of any one reading."""
    keep_apart()
    total = rest = 0.0
    parts = np.empty(8)
    for start in range(0, x.size, 32):
        for j in range(8):
            parts[j] = 0.0
        for i in range(start, min(start + 32, x.size)):
            term = x[i] - pivot
            if w is not None:
                term *= w[i]
            parts[i & 7] += term
        part = ((parts[0] + parts[1]) + (parts[2] + parts[3])) + (
            (parts[4] + parts[5]) + (parts[6] + parts[7])
        )
        total, left = two_sum(total, part)
        rest += left
    return total + rest


@internal
def _tolerance(order):
    # How far off the pivot may be, squared, in units of the variance: rounding errors of M_p grow
    # as (1 + 2 d)**p with the distance d in standard deviations.
    if order <= 4:
        return 0.25
    return 0.0625 if order <= 8 else 0.015625


@internal
def write_vector(w, order, table, room, row, pivot_rest, scale, weight_scale):
    """Row NEW becomes the moment vector of the sums in ``room[row]``."""
    keep_apart()
    error = room[row, 1] / room[row, 0]
    mean, rest = two_sum(room[row, PIVOT], pivot_rest + error)
    for k in range(order + 1):
        table[SPARE, SUMS + k] = room[row, k]
    for k in range(2, order + 1):
        table[NEW, SUMS + k] = moved_sum(table, SPARE, k, -error)
    table[NEW, MEAN] = mean
    table[NEW, REST] = rest
    table[NEW, SCALE] = scale
    table[NEW, SUMS] = room[row, 0]
    table[NEW, SUMS + 1] = 0.0
    if w is not None:
        place = SUMS + order + 1
        table[NEW, place] = weight_scale
        for j in range(2, 5):
            table[NEW, place + j - 1] = room[row, POWERS + j]


@internal
def finish_block(x, low, w, order, table, room, row, by_rows):
    """Row NEW becomes the vector of readings that are finite and of positive weight.

    ``room[row]`` holds what ``sweep`` found (readings in two parts take their first sweep here).
    Returns False, with row NEW untouched, where a reading is not finite or a weight not positive.
    """
    keep_apart()
    pivot_rest, scale, weight_scale = 0.0, ZERO, ZERO
    if low is not None or not settled_by_sweep(w, order, room, row):
        if not is_finite(room[row, order]) or low is not None:
            if not all_finite(x):
                return False
            if w is not None and not all_finite(w):
                return False
        pivot_rest, scale, weight_scale = _sweep_again(x, low, w, order, room, row, by_rows)
        if room[row, 0] == 0.0:
            return False
    write_vector(w, order, table, room, row, pivot_rest, scale, weight_scale)
    return True


@internal
def _sweep_again(x, low, w, order, room, row, by_rows):
    """What the first sweep could not settle: constants, extreme scales, a pivot too far off,
    readings in two parts.  Returns the pivot's rest, scale and weight scale.
    """
    keep_apart()
    n = x.size
    swept = low is None
    if low is not None:
        room[row, LEAST] = room[row, MOST] = x[0]
        for i in range(n):
            room[row, LEAST] = min(room[row, LEAST], x[i])
            room[row, MOST] = max(room[row, MOST], x[i])
        room[row, 0] = n
        if w is not None:
            room[row, LIGHTEST] = w[0]
            room[row, 0] = 0.0
            for i in range(n):
                room[row, 0] += w[i]
                room[row, LIGHTEST] = min(room[row, LIGHTEST], w[i])
    least, most = room[row, LEAST], room[row, MOST]
    weights = w
    weight_scale = ZERO
    if w is not None:
        if not room[row, LIGHTEST] > 0.0:
            room[row, 0] = 0.0
            return 0.0, ZERO, ZERO
        if not SMALLEST_WEIGHT < room[row, 0] < LARGEST_WEIGHT:
            heaviest = 0.0
            for i in range(n):
                heaviest = max(heaviest, w[i])
            weight_scale = exponent(heaviest)
            weights = np.empty(n)
            for i in range(n):
                weights[i] = ldexp(w[i], int(-weight_scale))
            swept = False
    constant = least == most
    if low is not None:
        constant = constant and all_equal(low)
    scale = ZERO
    scaled = False
    pivot, pivot_rest = room[row, PIVOT], 0.0
    if constant:
        pivot = x[0] + 0.0
        if low is not None:
            pivot_rest = low[0]
    elif low is not None:
        pivot, pivot_rest = find_pivot(x, low, scale, order, by_rows)
    deviations = source = x
    about = pivot
    closer = 0
    while True:
        if not swept:
            about = pivot
            if low is not None or scaled:
                if deviations is x:
                    deviations = np.empty(n)
                write_deviations(x, low, scale, pivot, pivot_rest, deviations)
                source = deviations
                about = 0.0
            add_up(source, weights, about, order, room, row, by_rows)
        swept = False
        if constant:
            for k in range(1, order + 1):
                room[row, k] = 0.0
            break
        if not scaled and not (SMALLEST < room[row, order] < LARGEST):
            scaled = True
            scale = exponent(max(abs(least), abs(most)))
            pivot, pivot_rest = find_pivot(x, low, scale, order, by_rows)
            continue
        error = room[row, 1] / room[row, 0]
        first, second = factors_of(scale)
        span = most * first * second - least * first * second
        if closer < 4 and not _pivot_is_near(room, row, span, order):
            closer += 1
            if low is not None:
                pivot, pivot_rest = two_sum(pivot, pivot_rest + error)
                continue
            if pivot + error != pivot:
                pivot += error
                continue
        if _one_may_rule(w, room, row, span):
            room[row, 1] = _careful_sum(source, weights, about)
        break
    room[row, LEAST] = least
    room[row, MOST] = most
    room[row, PIVOT] = pivot
    return pivot_rest, scale, weight_scale
