"""Power sums of many channels at once: vector instructions written out.

``sum_tile(x, w, first, last, channel, pivots, sums)`` adds the powers of ``x - pivot``, row by row
from ``first`` to ``last``, of channels ``channel`` onwards (eight or one) to ``sums``.  A channel's
readings are added in their order with fused multiply-add: its bits depend neither on how many
channels there are, nor on its place among them, nor on whether its block was scaled first.
LLVM's own vectoriser gave up on the overlap checks between the rows here (three times slower).

``sums`` has ``order + 2`` rows: the least reading, the sums of order 1 to ``order``, the greatest.
"""

import numpy as np
from llvmlite import ir
from numba.core import cgutils, types
from numba.extending import intrinsic

from .compiling import PLAIN_PYTHON, REORDER, internal, internal_as, keep_apart
from .sums import LEAST, LIGHTEST, MOST, POWERS
from .vector import two_sum

TILE = 8
STRETCH_ROWS = 32  # rows added up before they go to the totals


def _powers(order):
    """For each power its two factors, ``d**k = d**a * d**b``."""
    return [(k // 2, k - k // 2) for k in range(2, order + 1)]


def _tile_intrinsic(order, width):
    double = ir.DoubleType()
    kind = ir.VectorType(double, width) if width > 1 else double
    fused_name = f"llvm.fma.v{width}f64" if width > 1 else "llvm.fma.f64"

    @intrinsic
    def sum_tile(typing_context, x, w, first, last, channel, pivots, sums):
        weighted = not isinstance(w, types.NoneType)

        def generate(context, builder, signature, arguments):
            def data(position):
                array = context.make_array(signature.args[position])
                return array(context, builder, arguments[position]).data

            def load(base, index):
                pointer = builder.gep(base, [index])
                pointer = builder.bitcast(pointer, kind.as_pointer())
                return builder.load(pointer, align=8)

            def store(value, base, index):
                pointer = builder.gep(base, [index])
                pointer = builder.bitcast(pointer, kind.as_pointer())
                builder.store(value, pointer, align=8)

            def broadcast(value):
                if width == 1:
                    return value
                spread = ir.Constant(kind, ir.Undefined)
                for lane in range(width):
                    spread = builder.insert_element(spread, value, ir.IntType(32)(lane))
                return spread

            def extreme(comparison, a, b):
                flags = ("nnan", "nsz")
                return builder.select(builder.fcmp_ordered(comparison, a, b, flags), a, b, flags)

            fused = cgutils.get_or_insert_function(
                builder.module, ir.FunctionType(kind, [kind] * 3), fused_name
            )
            _, _, start, stop, place, _, _ = arguments
            rows = context.make_array(signature.args[0])(context, builder, arguments[0])
            row_length = builder.extract_value(rows.shape, 1)
            readings, weights, totals = data(0), data(1) if weighted else None, data(6)
            pivot = load(data(5), place)
            cells = [cgutils.alloca_once(builder, kind) for _ in range(order + 2)]
            positions = [
                builder.add(place, builder.mul(row_length, ir.Constant(place.type, k)))
                for k in range(order + 2)
            ]
            for k in range(order + 2):
                builder.store(load(totals, positions[k]), cells[k])
            count = builder.sub(stop, start)
            with cgutils.for_range(builder, count) as loop:
                row = builder.add(loop.index, start)
                value = load(readings, builder.add(builder.mul(row, row_length), place))
                power = {1: builder.fsub(value, pivot)}
                lifted = dict(power)
                if weighted:
                    weight = broadcast(builder.load(builder.gep(weights, [row])))
                    lifted[1] = builder.fmul(weight, power[1])
                total = builder.load(cells[1])
                builder.store(builder.fadd(total, lifted[1]), cells[1])
                pairs = _powers(order)
                for k, (a, b) in enumerate(pairs, start=2):
                    total = builder.load(cells[k])
                    builder.store(builder.call(fused, (lifted[a], power[b], total)), cells[k])
                    if any(k in pair for pair in pairs[k - 1 :]):
                        power[k] = builder.fmul(power[a], power[b])
                        lifted[k] = builder.fmul(lifted[a], power[b]) if weighted else power[k]
                for cell, comparison in ((cells[0], "<"), (cells[order + 1], ">")):
                    builder.store(extreme(comparison, value, builder.load(cell)), cell)
            for k in range(order + 2):
                store(builder.load(cells[k]), totals, positions[k])
            return context.get_dummy_value()

        return types.void(x, w, first, last, channel, pivots, sums), generate

    return sum_tile


def _tile_plain(order, width):
    """The same in plain Python (without fused multiply-add)."""

    def sum_tile(x, w, first, last, channel, pivots, sums):
        for j in range(channel, channel + width):
            for i in range(first, last):
                value = x[i, j]
                power = [1.0, value - pivots[j]]
                weight = 1.0 if w is None else w[i]
                sums[1, j] += weight * power[1]
                for k, (a, b) in enumerate(_powers(order), start=2):
                    power.append(power[a] * power[b])
                    sums[k, j] += weight * power[a] * power[b]
                sums[0, j] = min(sums[0, j], value)
                sums[order + 1, j] = max(sums[order + 1, j], value)

    return sum_tile


_make_tile = _tile_plain if PLAIN_PYTHON else _tile_intrinsic


def _make_add_rows(order):
    """Tiles of eight channels as far as they go, then single channels."""
    wide, single = _make_tile(order, TILE), _make_tile(order, 1)

    @internal_as(f"add_rows_{order}")
    def add_rows(x, w, first, last, pivots, sums):
        keep_apart()
        channel = 0
        while channel + TILE <= pivots.size:
            wide(x, w, first, last, channel, pivots, sums)
            channel += TILE
        while channel < pivots.size:
            single(x, w, first, last, channel, pivots, sums)
            channel += 1

    return add_rows


_add_rows_2, _add_rows_4 = _make_add_rows(2), _make_add_rows(4)
_add_rows_8, _add_rows_16 = _make_add_rows(8), _make_add_rows(16)


@internal
def _add_rows(x, w, first, last, pivots, sums):
    if sums.shape[0] == 4:
        _add_rows_2(x, w, first, last, pivots, sums)
    elif sums.shape[0] == 6:
        _add_rows_4(x, w, first, last, pivots, sums)
    elif sums.shape[0] == 10:
        _add_rows_8(x, w, first, last, pivots, sums)
    else:
        _add_rows_16(x, w, first, last, pivots, sums)


@internal(fastmath=REORDER)
def _fetch(readings):
    """Read in the order of memory, which streams; tile by tile it would not."""
    total = 0.0
    for i in range(readings.size):
        total += readings[i]
    return total


@internal
def row_sums(x, w, pivots, sums, part):
    """Sums and extremes of every channel over all rows of ``x``, shape (rows, channels).

    ``part`` is room of the shape of ``sums``.
    """
    channels = x.shape[1]
    most = sums.shape[0] - 1
    flat = x.reshape(x.size)
    rests = np.zeros(channels)
    # A part of the block that stays in the cache between fetching and adding.
    rows = STRETCH_ROWS if channels <= 256 else STRETCH_ROWS // 4
    for j in range(channels):
        for k in range(1, most):
            sums[k, j] = part[k, j] = 0.0
        part[0, j] = np.inf
        part[most, j] = -np.inf
    for first in range(0, x.shape[0], rows):
        last = min(first + rows, x.shape[0])
        sums[0, 0] = _fetch(flat[first * channels : last * channels])
        _add_rows(x, w, first, last, pivots, part)
        if last % STRETCH_ROWS == 0 or last == x.shape[0]:
            for j in range(channels):
                sums[1, j], left = two_sum(sums[1, j], part[1, j])
                rests[j] += left
            for k in range(1, most):
                for j in range(channels):
                    if k > 1:
                        sums[k, j] += part[k, j]
                    part[k, j] = 0.0
    for j in range(channels):
        sums[1, j] += rests[j]
        sums[0, j] = part[0, j]
        sums[most, j] = part[most, j]


@internal
def weight_sums(w, room, row):
    """The sums of w, w**2, w**3, w**4 and the least weight, in ``sums.power_sums``' places."""
    lightest = np.inf
    # The weight divides every channel's sum: it is added up with what each rounding leaves.
    s1 = rest = s2 = s3 = s4 = 0.0
    for i in range(w.size):
        square = w[i] * w[i]
        s1, left = two_sum(s1, w[i])
        rest += left
        s2 += square
        s3 += square * w[i]
        s4 += square * square
        lightest = min(lightest, w[i])
    s1 += rest
    room[row, 0] = s1
    room[row, POWERS + 2] = s2
    room[row, POWERS + 3] = s3
    room[row, POWERS + 4] = s4
    room[row, LIGHTEST] = lightest


@internal
def column_sums(x, w, pivot, order, room, row):
    """``row_sums`` of one channel, its readings in a row, into ``room[row]``."""
    size = 2
    while size < order:
        size *= 2
    sums = np.empty((size + 2, 1))
    row_sums(x.reshape((x.size, 1)), w, np.full(1, pivot), sums, np.empty((size + 2, 1)))
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
