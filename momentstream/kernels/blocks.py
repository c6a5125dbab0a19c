"""Readings in, moment vectors out: one stream of readings, in blocks of 8192.

A block's vector depends on the block's content alone, and so does the path its readings take
(plain, scaled, in two parts, with gaps); every path ends in ``sums.power_sums``.  That is why cuts,
containers and threads cannot change a bit.

Readings are doubles ``x``, or pairs ``x + low`` for integers that no double holds (``low`` is None
where there are none); ``w`` are weights or None.  Numba compiles each combination on its own.
``tally`` counts readings, and says what was refused and where.
"""

import math

import numpy as np
from numba.core import types
from numba.extending import overload

from .compiling import REORDER, compiled, copy_eight, internal, keep_apart
from .sums import (
    LEAST,
    LIGHTEST,
    MOST,
    PIVOT,
    POWERS,
    ROOM,
    STRETCH,
    power_sums,
    weighted_power_sums,
)
from .tiles import column_sums
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
    clear_row,
    exponent,
    insert_block,
    is_finite,
    moved_sum,
    to_plain_scale,
    two_sum,
)

BLOCK = 8192
GROUP_LEVEL = 6
GROUP = 1 << GROUP_LEVEL  # blocks a thread takes at a time
RAISE, OMIT, PROPAGATE = 0, 1, 2
COUNT, OMITTED, REFUSED, POSITION = 0, 1, 2, 3  # places in a tally
TALLY = 4
# What may be refused: a reading that is not finite; a weight that is negative or not finite; a
# frequency that is no whole number; a frequency beyond what a double counts exactly.
READING, WEIGHT, FRACTION, TOO_MANY = 1, 2, 3, 4

_AHEAD = 8  # blocks swept before they are finished
_HEAD, _HEAD_UPPER, HEAD_ROWS = 64, 256, 32  # readings the first pivot is taken from
_MOST_FREQUENT = 2.0**53
MOST_COUNTED = np.int64(2**63 - 1)
# NumPy values: Numba would compile a function anew for every plain constant it is called with.
ZERO = np.int64(0)
NO = np.bool_(False)


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
    return math.ldexp(1.0, half), math.ldexp(1.0, -scale - half)


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


@internal
def add_up_weighted_or_not(x, w, pivot, order, room, row):
    if w is None:
        power_sums(x, pivot, order, room, row)
    else:
        weighted_power_sums(x, w, pivot, order, room, row)


def add_up(x, w, pivot, order, room, row, by_rows):
    """Power sums into ``room[row]``: of a stream, or of one channel in the channels' order."""
    if by_rows is None:
        add_up_weighted_or_not(x, w, pivot, order, room, row)
    else:
        column_sums(x, w, pivot, order, room, row)


@overload(add_up)
def _add_up(x, w, pivot, order, room, row, by_rows):
    if isinstance(by_rows, types.NoneType):
        return lambda x, w, pivot, order, room, row, by_rows: add_up_weighted_or_not(
            x, w, pivot, order, room, row
        )
    return lambda x, w, pivot, order, room, row, by_rows: column_sums(
        x, w, pivot, order, room, row
    )


@internal
def find_pivot(x, low, scale, order, by_rows):
    """A first guess of the mean, from the first readings.

    Readings from all over the block would guess better where they drift, but fetching them ahead
    of the sweep doubled its time: the second sweep that drift costs runs from the cache instead.
    """
    head = x[: HEAD_ROWS if by_rows is not None else _HEAD_UPPER if order > 8 else _HEAD]
    if low is None and scale == 0:
        return x[0] + head_distance(head, x[0], by_rows), 0.0
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
    pivot, _ = find_pivot(x, None, ZERO, order, by_rows)
    room[row, PIVOT] = pivot
    add_up(x, w, pivot, order, room, row, by_rows)


@internal
def settled_by_sweep(w, order, room, row):
    """Whether the first sweep is the last: sums in range, pivot near the mean, no constant.

    Every reading is then finite, and every weight good and positive.
    """
    weight = room[row, 0]
    if w is not None:
        if not (room[row, LIGHTEST] > 0.0 and SMALLEST_WEIGHT < weight < LARGEST_WEIGHT):
            return False
    error = room[row, 1] / weight
    return (
        SMALLEST < room[row, order] < LARGEST
        and weight * error * error <= room[row, 2] * _tolerance(order)
        and room[row, LEAST] != room[row, MOST]
    )


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
    pivot_rest, scale, weight_scale = 0.0, ZERO, ZERO
    if low is not None or not settled_by_sweep(w, order, room, row):
        if not is_finite(room[row, order]) or low is not None:
            if not all_finite(x):
                return False
            if w is not None:
                if not all_finite(w):
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
    tolerance = _tolerance(order)
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
                weights[i] = math.ldexp(w[i], -weight_scale)
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
    deviations = x
    closer = 0
    while True:
        if not swept:
            source = x
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
        if room[row, 0] * error * error > room[row, 2] * tolerance and closer < 4:
            closer += 1
            if low is not None:
                pivot, pivot_rest = two_sum(pivot, pivot_rest + error)
                continue
            if pivot + error != pivot:
                pivot += error
                continue
        break
    room[row, LEAST] = least
    room[row, MOST] = most
    room[row, PIVOT] = pivot
    return pivot_rest, scale, weight_scale


@internal
def poison_block(x, w, order, table):
    """Row NEW for readings with a NaN or an infinity among them, by IEEE addition."""
    keep_apart()
    clear_row(table, NEW)
    total = 0.0
    for i in range(x.size):
        if w is not None:
            if w[i] == 0.0:
                continue
        if not is_finite(x[i]):
            total += x[i]
    for k in range(2, order + 1):
        table[NEW, SUMS + k] = math.nan
    table[NEW, MEAN] = total
    if w is None:
        table[NEW, SUMS] = x.size
        return
    heaviest = 0.0
    for i in range(x.size):
        heaviest = max(heaviest, w[i])
    weight_scale = exponent(heaviest)
    place = SUMS + order + 1
    table[NEW, place] = weight_scale
    for i in range(x.size):
        part = math.ldexp(w[i], -weight_scale)
        table[NEW, SUMS] += part
        power = part
        for j in range(1, 4):
            power *= part
            table[NEW, place + j] += power
    to_plain_scale(table, NEW, order, True)


@internal
def extend(extremes, least, most):
    """Take a least and a greatest value in; a NaN stays."""
    if least < extremes[0] or least != least:
        extremes[0] = least + 0.0
    if most > extremes[1] or most != most:
        extremes[1] = most + 0.0


@internal
def check_weights(w, whole, tally):
    """Refuse a weight that cannot be one; whether all are good."""
    for i in range(w.size):
        if not 0.0 <= w[i] < np.inf:
            tally[REFUSED] = WEIGHT
        elif whole and w[i] != math.floor(w[i]):
            tally[REFUSED] = FRACTION
        elif whole and w[i] > _MOST_FREQUENT:
            tally[REFUSED] = TOO_MANY
        else:
            continue
        tally[POSITION] = i
        return False
    return True


@internal
def count_readings(w, n, whole):
    """How many readings: their number, or for frequencies (``whole``) the sum of the weights."""
    if w is None:
        return n
    total = ZERO
    for i in range(n):
        if w[i] > 0.0:
            total += np.int64(w[i]) if whole else np.int64(1)
            if total < 0:
                return MOST_COUNTED
    return total


@internal
def add_count(tally, place, count):
    """Count, and stop at the largest integer: whoever reads that knows it is too many."""
    total = tally[place] + count
    tally[place] = total if total >= tally[place] else MOST_COUNTED


@internal
def squeeze(x, low, w, kept, kept_low, kept_w):
    """Copy the readings that are finite and of weight; returns how many."""
    keep_apart()
    n = i = ZERO
    if w is None and low is None:
        while i + 8 <= x.size:
            if copy_eight(x, i, kept, n):
                n += 8
            else:
                for j in range(8):
                    kept[n] = x[i + j]
                    n += is_finite(x[i + j])
            i += 8
    while i < x.size:
        keep = is_finite(x[i])
        kept[n] = x[i]
        if low is not None:
            kept_low[n] = low[i]
        if w is not None:
            kept_w[n] = w[i]
            keep = keep and w[i] > 0.0
        n += keep
        i += 1
    return n


@internal
def sweep_gapped(x, order, room, row, whole_row):
    """``sweep`` of the finite readings alone, a stretch of them at a time; returns how many.

    The bits are those of ``squeeze`` and ``sweep``, which would pass the block through the second
    cache level once more.  ``whole_row`` of ``room`` receives the sums.
    """
    keep_apart()
    kept = np.empty(STRETCH + 8)
    held = n = i = ZERO
    pivot = 0.0
    for k in range(order + 1):
        room[whole_row, k] = 0.0
    room[whole_row, LEAST], room[whole_row, MOST] = np.inf, -np.inf
    while i < x.size or held > 0:
        while held < STRETCH and i + 8 <= x.size:
            if copy_eight(x, i, kept, held):
                held += 8
            else:
                for j in range(8):
                    kept[held] = x[i + j]
                    held += is_finite(x[i + j])
            i += 8
        while held < STRETCH and i < x.size:
            kept[held] = x[i]
            held += is_finite(x[i])
            i += 1
        part = kept[: min(held, STRETCH)]
        if part.size == 0:
            break
        if n == 0:
            pivot, _ = find_pivot(part, None, ZERO, order, None)
        power_sums(part, pivot, order, room, row)
        for k in range(order + 1):
            room[whole_row, k] += room[row, k]
        room[whole_row, LEAST] = min(room[whole_row, LEAST], room[row, LEAST])
        room[whole_row, MOST] = max(room[whole_row, MOST], room[row, MOST])
        n += part.size
        for j in range(part.size, held):
            kept[j - part.size] = kept[j]
        held -= part.size
    room[whole_row, PIVOT] = pivot
    return n


@internal
def _take_clean(x, low, w, swept, whole, order, table, tally, extremes, room, row, by_rows):
    """Reduce and count a block; False, and nothing done, where it has gaps or bad weights."""
    if w is not None:
        if whole and not check_weights(w, whole, tally):
            return False
    if low is None:
        if not swept:
            sweep(x, w, order, room, row, by_rows)
        clean = finish_block(x, None, w, order, table, room, row, by_rows)
    elif any_rest(low):
        clean = finish_block(x, low, w, order, table, room, row, by_rows)
    else:
        sweep(x, w, order, room, row, by_rows)
        clean = finish_block(x, None, w, order, table, room, row, by_rows)
    if clean:
        add_count(tally, COUNT, count_readings(w, x.size, whole) if whole else x.size)
        extend(extremes, room[row, LEAST], room[row, MOST])
    return clean


@internal
def _take_gapped(x, low, w, policy, whole, order, table, tally, extremes, room, row, by_rows):
    """``take_block`` where a reading is not finite or a weight is not positive."""
    keep_apart()
    if w is not None:
        if not check_weights(w, whole, tally):
            return False
    if w is None and low is None and by_rows is None and policy == OMIT:
        found = np.empty((2, ROOM))
        n = sweep_gapped(x, order, found, ZERO, ZERO + 1)
        if n > 0 and settled_by_sweep(None, order, found, ZERO + 1):
            write_vector(None, order, table, found, ZERO + 1, 0.0, ZERO, ZERO)
            add_count(tally, COUNT, n)
            add_count(tally, OMITTED, x.size - n)
            extend(extremes, found[1, LEAST], found[1, MOST])
            return True
    kept = np.empty(x.size)
    kept_low = room_for(low, x.size)
    kept_w = room_for(w, x.size)
    n = squeeze(x, low, w, kept, kept_low, kept_w)
    missing = x.size - n
    if (missing > 0 and policy == RAISE) or w is not None:
        missing = ZERO
        for i in range(x.size):
            if not is_finite(x[i]):
                weight = 1.0
                if w is not None:
                    weight = w[i]
                if weight > 0.0:
                    if policy == RAISE:
                        tally[REFUSED] = READING
                        tally[POSITION] = i
                        return False
                    missing += np.int64(weight) if whole else np.int64(1)
    if missing > 0 and policy == PROPAGATE:
        poison_block(x, w, order, table)
        add_count(tally, COUNT, count_readings(w, x.size, whole))
        for i in range(x.size):
            if w is not None:
                if w[i] == 0.0:
                    continue
            extend(extremes, x[i], x[i])
        return True
    add_count(tally, OMITTED, missing)
    if n == 0:
        clear_row(table, NEW)
        return True
    kept_low = part_of(kept_low, 0, n)
    kept_w = part_of(kept_w, 0, n)
    return _take_clean(
        kept[:n], kept_low, kept_w, NO, whole, order, table, tally, extremes, room, row, by_rows
    )


@internal
def take_part(x, low, w, swept, policy, whole, order, table, tally, extremes, room, row, by_rows):
    """Row NEW becomes the vector of one block; ``swept``: ``room[row]`` holds its first sweep."""
    if _take_clean(x, low, w, swept, whole, order, table, tally, extremes, room, row, by_rows):
        return True
    if tally[REFUSED] != 0:
        return False
    return _take_gapped(x, low, w, policy, whole, order, table, tally, extremes, room, row, by_rows)


@compiled
def first_refused(x, w, policy, whole, tally):
    """Look for what would be refused, and note it in ``tally``; whether there is none."""
    if w is not None:
        if not check_weights(w, whole, tally):
            return False
    if policy == RAISE and not all_finite(x):
        for i in range(x.size):
            if not is_finite(x[i]):
                if w is not None:
                    if w[i] == 0.0:
                        continue
                tally[REFUSED] = READING
                tally[POSITION] = i
                return False
    return True


@compiled
def take_block(x, low, w, policy, whole, order, table, tally, extremes):
    """Row NEW becomes the vector of the readings; False where something was refused."""
    if x.size == 0:
        clear_row(table, NEW)
        return True
    room = np.empty((1, ROOM))
    return take_part(x, low, w, NO, policy, whole, order, table, tally, extremes, room, ZERO, None)


@compiled
def take_blocks(x, low, w, policy, whole, order, table, blocks, tally, extremes):
    """Take whole blocks in, in their order; returns the block count, -1 if something was refused."""
    room = np.empty((_AHEAD, ROOM))
    gapped = False
    for first in range(0, x.size, _AHEAD * BLOCK):
        last = min(first + _AHEAD * BLOCK, x.size)
        # Where there were gaps, more are likely: their blocks are swept once, when squeezed.
        ahead = low is None and not gapped
        if ahead:
            for start in range(first, last, BLOCK):
                stop = start + BLOCK
                row = (start - first) // BLOCK
                sweep(x[start:stop], part_of(w, start, stop), order, room, row, None)
        omitted = tally[OMITTED]
        for start in range(first, last, BLOCK):
            row = (start - first) // BLOCK
            part = x[start : start + BLOCK]
            low_part = part_of(low, start, start + BLOCK)
            w_part = part_of(w, start, start + BLOCK)
            taken = False
            if not gapped:
                taken = _take_clean(
                    part, low_part, w_part, ahead, whole, order, table, tally, extremes, room, row, None
                )
            if not taken and tally[REFUSED] == 0:
                taken = _take_gapped(
                    part, low_part, w_part, policy, whole, order, table, tally, extremes, room, row, None
                )
            if not taken:
                tally[POSITION] += start
                return -1
            blocks = insert_block(table, blocks, ZERO, order, w is not None)
        gapped = tally[OMITTED] != omitted
    return blocks


@compiled
def take_blocks_32(x, policy, order, table, blocks, tally, extremes):
    """``take_blocks`` from single precision, summed as it is read."""
    room = np.empty((_AHEAD, ROOM))
    for first in range(0, x.size, _AHEAD * BLOCK):
        last = min(first + _AHEAD * BLOCK, x.size)
        for start in range(first, last, BLOCK):
            sweep(x[start : start + BLOCK], None, order, room, (start - first) // BLOCK, None)
        for start in range(first, last, BLOCK):
            row = (start - first) // BLOCK
            if settled_by_sweep(None, order, room, row):
                write_vector(None, order, table, room, row, 0.0, ZERO, ZERO)
                add_count(tally, COUNT, BLOCK)
                extend(extremes, room[row, LEAST], room[row, MOST])
            else:
                part = x[start : start + BLOCK].astype(np.float64)
                if not take_part(
                    part, None, None, NO, policy, NO, order, table, tally, extremes, room, row, None
                ):
                    tally[POSITION] += start
                    return -1
            blocks = insert_block(table, blocks, ZERO, order, NO)
    return blocks


@compiled
def single_sums_agree(x, narrow, order):
    """Whether sums read from single precision have the bits of those read from doubles.

    The same code over another type: a compiler is free to order the additions otherwise, and then
    single precision must be widened first.
    """
    room = np.zeros((2, ROOM))
    for n in (x.size, x.size - 13, 70, 5):
        sweep(x[:n], None, order, room, ZERO, None)
        sweep(narrow[:n], None, order, room, ZERO + 1, None)
        for k in range(ROOM):
            if room[0, k] != room[1, k]:
                return False
    return True
