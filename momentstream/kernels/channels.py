"""Many streams side by side: one channel a column, rows in blocks.

All channels are swept together (``tiles``); each then has a table of its own, and from there on
is one stream like any other (``blocks``, ``vector``).  A channel whose block needs more than one
sweep, or has gaps, is gathered and reduced alone, by sums in the same order.
"""

import numpy as np
from numba.core import types
from numba.extending import overload

from .blocks import (
    COUNT,
    NO,
    POSITION,
    add_count,
    check_weights,
    count_readings,
    extend,
    take_part,
)
from .compiling import compiled, internal
from .reduction import HEAD_ROWS, ZERO, part_of, settled_by_sweep, write_vector
from .sums import LEAST, MOST, PIVOT, ROOM, copy_sums, new_channel_sums, row_sums, weight_sums
from .vector import NEW, clear_row, combine_pair, fold_levels, insert_block

_BY_ROWS = np.bool_(True)
_FIRST, _SECOND = np.int64(0), np.int64(1)


def gather(array, channel):
    """One column of a (rows, channels) array, None for None."""
    return None if array is None else array[:, channel].copy()


@overload(gather)
def _gather(array, channel):
    if isinstance(array, types.NoneType):
        return lambda array, channel: None
    return lambda array, channel: array[:, channel].copy()


@internal
def _find_pivots(x, pivots):
    head = min(HEAD_ROWS, x.shape[0])
    for j in range(pivots.size):
        pivots[j] = 0.0
    for i in range(head):
        for j in range(pivots.size):
            pivots[j] += x[i, j] - x[0, j]
    for j in range(pivots.size):
        pivots[j] = x[0, j] + pivots[j] / head


@internal
def _take_rows(
    x, low, w, policy, whole, order, tables, blocks, tally, extremes, room, pivots, sums, rests
):
    """Row NEW of every channel's table becomes the channel's vector of one block of rows.

    Returns the block count after it, or -1 if something was refused.
    """
    rows, channels = x.shape
    count = np.int64(rows)
    if w is not None:
        if not check_weights(w, whole, tally[0]):
            return np.int64(-1)
        count = count_readings(w, rows, whole)
        weight_sums(w, room, _FIRST)
    if low is None:
        _find_pivots(x, pivots)
        row_sums(x, w, pivots, sums, rests)
    for channel in range(channels):
        table = tables[channel]
        settled = False
        if low is None:
            copy_sums(sums, channel, order, room, _FIRST)
            room[_FIRST, PIVOT] = pivots[channel]
            if w is None:
                room[_FIRST, 0] = rows
            settled = settled_by_sweep(w, order, room, _FIRST)
        if settled:
            write_vector(w, order, table, room, _FIRST, 0.0, ZERO, ZERO)
            add_count(tally[channel], COUNT, count)
            extend(extremes[channel], room[_FIRST, LEAST], room[_FIRST, MOST])
        elif not take_part(
            x[:, channel].copy(),
            gather(low, channel),
            w,
            NO,
            policy,
            whole,
            order,
            table,
            tally[channel],
            extremes[channel],
            room,
            _SECOND,
            _BY_ROWS,
        ):
            return np.int64(-1)
    return blocks


@compiled
def take_row_block(x, low, w, policy, whole, order, tables, tally, extremes):
    """Row NEW of every table becomes the channel's vector; False where something was refused."""
    channels = x.shape[1]
    if x.shape[0] == 0:
        for channel in range(channels):
            clear_row(tables[channel], NEW)
        return True
    room, pivots, sums, rests = _rooms(channels, order)
    blocks = _take_rows(
        x, low, w, policy, whole, order, tables, ZERO, tally, extremes, room, pivots, sums, rests
    )
    return blocks == 0


@compiled
def take_row_blocks(x, low, w, block_rows, policy, whole, order, tables, blocks, tally, extremes):
    """Take whole blocks of rows in; returns the block count, -1 if something was refused."""
    channels = x.shape[1]
    room, pivots, sums, rests = _rooms(channels, order)
    for start in range(0, x.shape[0], block_rows):
        stop = start + block_rows
        taken = _take_rows(
            x[start:stop],
            part_of(low, start, stop),
            part_of(w, start, stop),
            policy,
            whole,
            order,
            tables,
            blocks,
            tally,
            extremes,
            room,
            pivots,
            sums,
            rests,
        )
        if taken < 0:
            for channel in range(channels):
                tally[channel, POSITION] += start
            return taken
        for channel in range(channels):
            insert_block(tables[channel], blocks, ZERO, order, w is not None)
        blocks += 1
    return blocks


@compiled
def fold_row_levels(tables, blocks, order, weighted):
    """``fold_levels`` of every channel."""
    for channel in range(tables.shape[0]):
        fold_levels(tables[channel], blocks, order, weighted)


@compiled
def insert_row_blocks(tables, blocks, level, order, weighted):
    """``insert_block`` of every channel; returns the block count after it."""
    after = blocks
    for channel in range(tables.shape[0]):
        after = insert_block(tables[channel], blocks, level, order, weighted)
    return after


@compiled
def combine_channel_pairs(a, b, order, weighted):
    """``combine_pair`` of every channel; both are (channels, fields)."""
    for channel in range(a.shape[0]):
        combine_pair(a[channel], b[channel], order, weighted)


@internal
def _rooms(channels, order):
    sums, rests = new_channel_sums(order, channels)
    return np.empty((2, ROOM)), np.empty(channels), sums, rests
