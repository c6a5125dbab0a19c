"""Power sums of one block about a pivot, in stretches: the only loops that add readings up.

A stream's readings are dealt out to 8, 16 or 32 lanes, a channel's stay in one; ``tiles`` adds them
up, a stretch at a time.  Everything found goes into row ``row`` of the float64 table ``room``:

==================  ===========================================================================
``room[row, k]``    the sum of ``(x - pivot)**k``, k = 1 .. order (even); k = 0: the weight
``POWERS + j``      with weights, the sum of ``w**j`` for j = 2 .. 4
``LEAST, MOST``     the extremes of the readings; meaningless unless all sums are finite
``LIGHTEST``        with weights, the least weight; likewise
``PIVOT``           free for the caller, who may keep the pivot there
==================  ===========================================================================

The extremes are found in the same sweep, which keeps arithmetic and memory busy at once.  A NaN or
an infinity among the readings shows in the even sums.  The order of all additions is written out:
what a compiler may reorder it orders one way where it compiles, and another way where it finds the
code on disk.
"""

import numpy as np

from .compiling import REORDER, internal, internal_as, keep_apart
from .tiles import BESIDE, BY_ROW, make_begin, make_fold, make_tile

POWERS, PIVOT, LEAST, MOST, LIGHTEST = 17, 22, 23, 24, 25
ROOM = 26
STRETCH_ROWS = 32  # readings of a lane that are added up before they go to the totals
_WIDTH = 8
_FOURTH, _ONLY = np.int64(4), np.int64(0)


def lanes_for(order, weighted):
    """As many lanes as leave the sums in registers."""
    if order > 8:
        return 8
    return 16 if weighted or order > 4 else 32


STRETCH = STRETCH_ROWS * lanes_for(2, False)  # the longest


def _make_stream_sums(order, weighted):
    """Begin with nothing, add readings, fold the lanes: of a stream."""
    lanes = lanes_for(order, weighted)
    rows = order + (7 if weighted else 2)
    least, most = (0, order + 2) if weighted else (0,), (order + 1,)
    wide = make_tile(order, _WIDTH, lanes // _WIDTH, BESIDE)
    single = make_tile(order, 1, 1, BESIDE)
    begin, fold = make_begin(rows, least, most, lanes), make_fold(rows, least, most, lanes)
    name = f"{'weighted_' if weighted else ''}sums_{order}"

    @internal_as(f"begin_{name}")
    def begin_sums(pivot):
        room = np.empty((rows + 2, lanes))
        sums, rests, pivots = room[:rows], room[rows], room[rows + 1]
        begin(sums, rests, pivots, pivot)
        return sums, rests, pivots

    @internal_as(f"add_to_{name}")
    def add_readings(x, w, pivots, sums, rests):
        keep_apart()
        rows = x.size // lanes
        for first in range(0, rows, STRETCH_ROWS):
            last = min(first + STRETCH_ROWS, rows)
            wide(x, lanes, w, first, last, 0, pivots, sums, rests)
        for lane in range(x.size - rows * lanes):
            single(x, lanes, w, rows, rows + 1, lane, pivots, sums, rests)

    @internal_as(f"fold_{name}")
    def fold_sums(sums, rests, kept, room, row):
        keep_apart()
        fold(sums, rests)
        for k in range(1, kept + 1):
            room[row, k] = sums[k, 0]
        room[row, LEAST], room[row, MOST] = sums[0, 0], sums[order + 1, 0]
        if weighted:
            room[row, LIGHTEST], room[row, 0] = sums[order + 2, 0], sums[order + 3, 0]
            for j in range(2, 5):
                room[row, POWERS + j] = sums[order + 2 + j, 0]

    @internal_as(f"all_{name}")
    def all_sums(x, w, pivot, kept, room, row):
        keep_apart()
        sums, rests, pivots = begin_sums(pivot)
        add_readings(x, w, pivots, sums, rests)
        fold_sums(sums, rests, kept, room, row)

    return begin_sums, add_readings, fold_sums, all_sums


def _make_add_rows(order):
    """Add rows of all channels to their sums: tiles of eight as far as they go, then single."""
    wide, single = make_tile(order, _WIDTH, 1, BY_ROW), make_tile(order, 1, 1, BY_ROW)

    @internal_as(f"add_rows_{order}")
    def add_rows(x, w, first, last, pivots, sums, rests):
        keep_apart()
        channel = 0
        while channel + _WIDTH <= pivots.size:
            wide(x, pivots.size, w, first, last, channel, pivots, sums, rests)
            channel += _WIDTH
        while channel < pivots.size:
            single(x, pivots.size, w, first, last, channel, pivots, sums, rests)
            channel += 1

    return add_rows


_begin_2, _add_2, _fold_2, _all_2 = _make_stream_sums(2, False)
_begin_4, _add_4, _fold_4, _all_4 = _make_stream_sums(4, False)
_begin_8, _add_8, _fold_8, _all_8 = _make_stream_sums(8, False)
_begin_16, _add_16, _fold_16, _all_16 = _make_stream_sums(16, False)
_weighted_2, _weighted_4, _weighted_8, _weighted_16 = (
    _make_stream_sums(order, True)[3] for order in (2, 4, 8, 16)
)
_add_rows_2, _add_rows_4 = _make_add_rows(2), _make_add_rows(4)
_add_rows_8, _add_rows_16 = _make_add_rows(8), _make_add_rows(16)


@internal
def begin_sums(order, pivot):
    """Sums, rests and pivots of a stream's lanes, for readings that come in stretches."""
    if order <= 2:
        return _begin_2(pivot)
    if order <= 4:
        return _begin_4(pivot)
    return _begin_8(pivot) if order <= 8 else _begin_16(pivot)


@internal
def add_readings(x, order, pivots, sums, rests):
    """Add readings; but for the last time, a multiple of ``STRETCH``."""
    if order <= 2:
        _add_2(x, None, pivots, sums, rests)
    elif order <= 4:
        _add_4(x, None, pivots, sums, rests)
    elif order <= 8:
        _add_8(x, None, pivots, sums, rests)
    else:
        _add_16(x, None, pivots, sums, rests)


@internal
def fold_sums(sums, rests, order, room, row):
    """The lanes become one, in ``room[row]``."""
    if order <= 2:
        _fold_2(sums, rests, order, room, row)
    elif order <= 4:
        _fold_4(sums, rests, order, room, row)
    elif order <= 8:
        _fold_8(sums, rests, order, room, row)
    else:
        _fold_16(sums, rests, order, room, row)


@internal
def _add_rows(x, w, first, last, pivots, sums, rests):
    if sums.shape[0] == 4:
        _add_rows_2(x, w, first, last, pivots, sums, rests)
    elif sums.shape[0] == 6:
        _add_rows_4(x, w, first, last, pivots, sums, rests)
    elif sums.shape[0] == 10:
        _add_rows_8(x, w, first, last, pivots, sums, rests)
    else:
        _add_rows_16(x, w, first, last, pivots, sums, rests)


@internal
def sums_kept(order):
    """How many sums are kept for an order: 2, 4, 8 or 16."""
    size = 2
    while size < order:
        size *= 2
    return size


@internal
def new_channel_sums(order, channels):
    """Sums and rests of nothing, for channels."""
    sums, rests = np.empty((sums_kept(order) + 2, channels)), np.empty(channels)
    clear_sums(sums, rests)
    return sums, rests


@internal
def clear_sums(sums, rests):
    """The sums and rests of channels, of nothing again."""
    last = sums.shape[0] - 1
    for j in range(rests.size):
        sums[0, j] = np.inf
        for k in range(1, last):
            sums[k, j] = 0.0
        sums[last, j] = -np.inf
        rests[j] = 0.0


@internal
def power_sums(x, w, pivot, order, room, row):
    """Sums, extremes and weight of a stream's readings."""
    keep_apart()
    if w is None:
        room[row, 0] = x.size
        if order <= 2:
            _all_2(x, None, pivot, order, room, row)
        elif order <= 4:
            _all_4(x, None, pivot, order, room, row)
        elif order <= 8:
            _all_8(x, None, pivot, order, room, row)
        else:
            _all_16(x, None, pivot, order, room, row)
    elif order <= 2:
        _weighted_2(x, w, pivot, order, room, row)
    elif order <= 4:
        _weighted_4(x, w, pivot, order, room, row)
    elif order <= 8:
        _weighted_8(x, w, pivot, order, room, row)
    else:
        _weighted_16(x, w, pivot, order, room, row)


@internal
def weight_sums(w, room, row):
    """The sums of w, w**2, w**3, w**4 and the least weight."""
    found = np.empty((1, ROOM))
    _all_4(w, None, 0.0, _FOURTH, found, _ONLY)
    room[row, 0] = found[0, 1]
    for j in range(2, 5):
        room[row, POWERS + j] = found[0, j]
    room[row, LIGHTEST] = found[0, LEAST]


@internal(fastmath=REORDER)
def _fetch(readings):
    """Read in the order of memory, which streams; tile by tile it would not."""
    total = 0.0
    for i in range(readings.size):
        total += readings[i]
    return total


@internal
def row_sums(x, w, pivots, sums, rests):
    """Sums and extremes of every channel over all rows of ``x``, shape (rows, channels)."""
    channels = x.shape[1]
    flat = x.reshape(x.size)
    clear_sums(sums, rests)
    fetched = np.empty(1)
    for first in range(0, x.shape[0], STRETCH_ROWS):
        last = min(first + STRETCH_ROWS, x.shape[0])
        fetched[0] = _fetch(flat[first * channels : last * channels])
        _add_rows(flat, w, first, last, pivots, sums, rests)
    for j in range(channels):
        sums[1, j] += rests[j]


@internal
def column_sums(x, w, pivot, order, room, row):
    """``row_sums`` of one channel, its readings in a row, into ``room[row]``."""
    sums, rests = new_channel_sums(order, 1)
    row_sums(x.reshape((x.size, 1)), w, np.full(1, pivot), sums, rests)
    copy_sums(sums, 0, order, room, row)
    if w is None:
        room[row, 0] = x.size
    else:
        weight_sums(w, room, row)


@internal
def copy_sums(sums, channel, order, room, row):
    room[row, LEAST] = sums[0, channel]
    room[row, MOST] = sums[sums.shape[0] - 1, channel]
    for k in range(1, order + 1):
        room[row, k] = sums[k, channel]
