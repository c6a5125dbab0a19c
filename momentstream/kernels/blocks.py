"""Readings in, moment vectors out: one stream of readings, in blocks of 8192.

Here blocks are taken in: readings are refused, left out or let through by the policy, counted in
``tally`` and ``extremes``, and their vectors carried into the tree.  ``reduction`` makes the vector
of a block, and says what ``x``, ``low``, ``w`` and ``by_rows`` are.
"""

import math

import numpy as np

from .compiling import REORDER, compiled, copy_eight, internal, keep_apart, ldexp
from .reduction import (
    ZERO,
    all_finite,
    any_rest,
    find_pivot,
    finish_block,
    part_of,
    room_for,
    settled_by_sweep,
    sweep,
    write_vector,
)
from .sums import LEAST, MOST, PIVOT, ROOM, STRETCH, add_readings, begin_sums, fold_sums
from .vector import (
    MEAN,
    NEW,
    SUMS,
    clear_row,
    exponent,
    insert_block,
    is_finite,
    to_plain_scale,
)

BLOCK = 8192
GROUP_LEVEL = 6
GROUP = 1 << GROUP_LEVEL  # blocks a thread takes at a time
RAISE, OMIT, PROPAGATE = 0, 1, 2  # policies; None: refuse, for streams without weights
COUNT, OMITTED, REFUSED, POSITION = 0, 1, 2, 3  # places in a tally
TALLY = 4
# What may be refused: a reading that is not finite; a weight that is negative or not finite; a
# frequency that is no whole number; a frequency beyond what a double counts exactly.
READING, WEIGHT, FRACTION, TOO_MANY = 1, 2, 3, 4
MOST_COUNTED = np.int64(2**63 - 1)

_AHEAD = 8  # blocks swept before they are finished
_MOST_FREQUENT = 2.0**53
NO = np.bool_(False)


@internal
def poison_block(x, w, order, table):
    """Row NEW for readings with a NaN or an infinity among them, by IEEE addition."""
    keep_apart()
    clear_row(table, NEW)
    total = 0.0
    for i in range(x.size):
        if w is not None and w[i] == 0.0:
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
        part = ldexp(w[i], int(-weight_scale))
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


@internal(fastmath=REORDER)
def _fractions(w):
    """What whole numbers would leave: zero, if all weights are whole and finite."""
    total = 0.0
    for i in range(w.size):
        total += abs(w[i] - math.floor(w[i]))
    return total


@internal
def check_weights(w, whole, tally):
    """Refuse a weight that cannot be one; whether all are good."""
    keep_apart()
    if whole and _fractions(w) == 0.0:
        least, most = w[0], w[0]
        for i in range(w.size):
            least, most = min(least, w[i]), max(most, w[i])
        if least >= 0.0 and most <= _MOST_FREQUENT:
            return True
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
    keep_apart()
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
def sweep_gapped(x, order, room, row):
    """``sweep`` of the finite readings alone, a stretch of them at a time; returns how many.

    The bits are those of ``squeeze`` and ``sweep``, which would pass the block through the second
    cache level once more.
    """
    keep_apart()
    kept = np.empty(STRETCH + 8)
    sums, rests, pivots = begin_sums(order, 0.0)
    held = n = i = ZERO
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
            for j in range(pivots.size):
                pivots[j] = pivot
        add_readings(part, order, pivots, sums, rests)
        n += part.size
        for j in range(part.size, held):
            kept[j - part.size] = kept[j]
        held -= part.size
    fold_sums(sums, rests, order, room, row)
    room[row, 0] = n
    room[row, PIVOT] = pivots[0]
    return n


@internal
def _take_clean(x, low, w, swept, whole, order, table, tally, extremes, room, row, by_rows):
    """Reduce and count a block; False, and nothing done, where it has gaps or bad weights."""
    keep_apart()
    if w is not None and whole and not check_weights(w, whole, tally):
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
        count = np.int64(x.size)
        if w is not None and whole:
            # Sums of whole numbers below 2**53 are exact.
            exact = room[row, 0] < _MOST_FREQUENT
            count = np.int64(room[row, 0]) if exact else count_readings(w, x.size, whole)
        add_count(tally, COUNT, count)
        extend(extremes, room[row, LEAST], room[row, MOST])
    return clean


@internal
def _take_gapped(x, low, w, policy, whole, order, table, tally, extremes, room, row, by_rows):
    """``take_block`` where a reading is not finite or a weight is not positive."""
    keep_apart()
    if w is not None and not check_weights(w, whole, tally):
        return False
    if w is None and low is None and by_rows is None and policy == OMIT:
        n = sweep_gapped(x, order, room, row)
        if n > 0 and settled_by_sweep(None, order, room, row):
            write_vector(None, order, table, room, row, 0.0, ZERO, ZERO)
            add_count(tally, COUNT, n)
            add_count(tally, OMITTED, x.size - n)
            extend(extremes, room[row, LEAST], room[row, MOST])
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
            if w is not None and w[i] == 0.0:
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
def _refuse_reading(x, tally):
    tally[REFUSED] = READING
    for i in range(x.size):
        if not is_finite(x[i]):
            tally[POSITION] = i
            break
    return False


@internal
def _take_rest(x, low, w, policy, whole, order, table, tally, extremes, room, row, by_rows):
    """What ``_take_clean`` left: refused where the policy is None, so that kernels for streams
    without gaps, the most common ones, compile without all that gaps need."""
    if policy is None:
        return _refuse_reading(x, tally)
    return _take_gapped(x, low, w, policy, whole, order, table, tally, extremes, room, row, by_rows)


@internal
def take_part(x, low, w, swept, policy, whole, order, table, tally, extremes, room, row, by_rows):
    """Row NEW becomes the vector of one block; ``swept``: ``room[row]`` holds its first sweep."""
    if _take_clean(x, low, w, swept, whole, order, table, tally, extremes, room, row, by_rows):
        return True
    if tally[REFUSED] != 0:
        return False
    return _take_rest(x, low, w, policy, whole, order, table, tally, extremes, room, row, by_rows)


@compiled
def first_refused(x, w, finite, whole, tally):
    """Look for what would be refused, and note it in ``tally``; whether there is none.

    ``finite``: readings of weight must be.
    """
    if w is None:
        return not finite or all_finite(x) or _refuse_reading(x, tally)
    if not check_weights(w, whole, tally):
        return False
    if finite and not all_finite(x):
        for i in range(x.size):
            if w[i] > 0.0 and not is_finite(x[i]):
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
    """Take whole blocks in, in their order.

    Returns the block count after them, or -1 if something was refused.
    """
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
                    part,
                    low_part,
                    w_part,
                    ahead,
                    whole,
                    order,
                    table,
                    tally,
                    extremes,
                    room,
                    row,
                    None,
                )
            if not taken and tally[REFUSED] == 0:
                taken = _take_rest(
                    part,
                    low_part,
                    w_part,
                    policy,
                    whole,
                    order,
                    table,
                    tally,
                    extremes,
                    room,
                    row,
                    None,
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
