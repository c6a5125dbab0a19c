"""Power sums of several runs of readings side by side: vector instructions written out.

``sum_tile(x, length, w, first, last, place, pivots, sums, rests)`` takes rows ``first`` to
``last`` of ``length`` readings each from the flat array ``x``, and of each row the readings from
``place`` on, as many as the tile is wide: one lane each.  A lane's powers of ``x - pivot`` are
added up row by row with fused multiply-add, and the totals then to the lane's ``sums``.  A lane's
bits depend neither on how wide the tile is, nor on its place, nor on the kind of vector unit.
(LLVM's own vectoriser orders additions as it likes, which no two types of readings need share; and
it gave up on the overlap checks between rows, three times slower.)

``sums`` has ``order + 2`` rows of ``length`` lanes: the least reading, the sums of order 1 to
``order``, the greatest.  The sum of first order, which the mean rests on, is carried with what each
addition to the totals leaves, in ``rests``: readings far out on both sides would cost it digits.
Where weights lie beside the readings, five rows follow: the least weight, the sums of w .. w**4.
"""

import numpy as np
from llvmlite import ir
from numba.core import cgutils, types
from numba.extending import intrinsic

from .compiling import PLAIN_PYTHON

# How weights lie: one for each row, or one beside each reading.
BY_ROW, BESIDE = "by row", "beside"
_EIGHT = 8


def _powers(order):
    """For each power its two factors, ``d**k = d**a * d**b``."""
    return [(k // 2, k - k // 2) for k in range(2, order + 1)]


class Vectors:
    """Vector instructions of one width, appended to a block of code."""

    def __init__(self, context, builder, signature, arguments, width):
        self._context, self._builder = context, builder
        self._signature, self._arguments = signature, arguments
        self._width = width
        self.kind = self._of(ir.DoubleType())
        name = f"llvm.fma.v{width}f64" if width > 1 else "llvm.fma.f64"
        self._fused = cgutils.get_or_insert_function(
            builder.module, ir.FunctionType(self.kind, [self.kind] * 3), name
        )

    def _of(self, scalar):
        return ir.VectorType(scalar, self._width) if self._width > 1 else scalar

    def array(self, position):
        array = self._context.make_array(self._signature.args[position])
        return array(self._context, self._builder, self._arguments[position])

    def data(self, position):
        return self.array(position).data

    def load(self, base, index):
        """What lies from ``index`` on, in the precision it has."""
        pointer = self._builder.gep(base, [index])
        scalar = base.type.pointee
        pointer = self._builder.bitcast(pointer, self._of(scalar).as_pointer())
        return self._builder.load(pointer, align=4 if scalar == ir.FloatType() else 8)

    def double(self, value):
        """Widened, where it is of single precision."""
        return value if value.type == self.kind else self._builder.fpext(value, self.kind)

    def like(self, value, base):
        """Doubles in the precision of ``base``."""
        kind = self._of(base.type.pointee)
        return value if kind == self.kind else self._builder.fptrunc(value, kind)

    def store(self, value, base, index):
        pointer = self._builder.gep(base, [index])
        pointer = self._builder.bitcast(pointer, self.kind.as_pointer())
        self._builder.store(value, pointer, align=8)

    def everywhere(self, base, index):
        """One double in every lane."""
        value = self._builder.load(self._builder.gep(base, [index]))
        return value if self._width == 1 else self.spread(value)

    def spread(self, value):
        """One double in every lane."""
        result = ir.Constant(self.kind, ir.Undefined)
        for lane in range(self._width):
            result = self._builder.insert_element(result, value, ir.IntType(32)(lane))
        return result

    def zero(self):
        zero = ir.Constant(ir.DoubleType(), 0.0)
        return zero if self._width == 1 else ir.Constant(self.kind, [zero] * self._width)

    def fused(self, a, b, c):
        return self._builder.call(self._fused, (a, b, c))

    def extreme(self, comparison, a, b):
        flags = ("nnan", "nsz")
        condition = self._builder.fcmp_ordered(comparison, a, b, flags)
        return self._builder.select(condition, a, b, flags)

    def _halves(self, value):
        half = value.type.count // 2
        nothing = ir.Constant(value.type, ir.Undefined)
        places = ir.VectorType(ir.IntType(32), half)
        masks = [ir.Constant(places, list(range(i, i + half))) for i in (0, half)]
        return [self._builder.shuffle_vector(value, nothing, mask) for mask in masks]

    def folded(self, parts, join):
        """Vectors become one, and its lanes one, by halves."""
        while len(parts) > 1:
            half = len(parts) // 2
            parts = [join(parts[i], parts[i + half]) for i in range(half)]
        (value,) = parts
        while value.type.count > 1:
            value = join(*self._halves(value))
        return self._builder.extract_element(value, ir.IntType(32)(0))

    def two_sum(self, a, b):
        """The rounded sum, and what the rounding left (Knuth)."""
        add, subtract = self._builder.fadd, self._builder.fsub
        total = add(a, b)
        shadow = subtract(total, a)
        return total, add(subtract(a, subtract(total, shadow)), subtract(b, shadow))


def _tile_intrinsic(order, width, runs, lie):
    @intrinsic
    def sum_tile(typing_context, x, length, w, first, last, place, pivots, sums, rests):
        weighted = not isinstance(w, types.NoneType)
        with_weight_sums = weighted and lie == BESIDE

        def generate(context, builder, signature, arguments):
            v = Vectors(context, builder, signature, arguments, width)
            _, row_length, _, start, stop, place, _, _, _ = arguments
            readings, weights = v.data(0), v.data(2) if weighted else None
            totals, left = v.data(7), v.data(8)
            # The rows of ``sums``: extremes, sums, and the weights' own.
            least, most, lightest = 0, order + 1, order + 2
            rows = order + 2 + (5 if with_weight_sums else 0)
            precision = {least: readings, most: readings, lightest: weights}

            def constant(value):
                return ir.Constant(place.type, value)

            lanes = [builder.add(place, constant(run * width)) for run in range(runs)]
            # The lanes of a stream have one pivot.
            everywhere = v.everywhere(v.data(6), place) if lie == BESIDE else None

            def position(k, lane):
                return builder.add(lane, builder.mul(row_length, constant(k)))

            def new_cells(lane):
                cells = []
                for k in range(rows):
                    begin = v.zero()
                    if k in precision:  # extremes, found in the precision of the readings
                        begin = v.like(v.load(totals, position(k, lane)), precision[k])
                    cells.append(cgutils.alloca_once_value(builder, begin))
                return cells

            def add_to(cell, value):
                builder.store(builder.fadd(builder.load(cell), value), cell)

            def keep(cell, comparison, value):
                builder.store(v.extreme(comparison, value, builder.load(cell)), cell)

            def add(cells, pivot, value, weight):
                power = {1: builder.fsub(v.double(value), pivot)}
                lifted = dict(power)
                if weight is not None:
                    lifted[1] = builder.fmul(weight, power[1])
                add_to(cells[1], lifted[1])
                pairs = _powers(order)
                for k, (a, b) in enumerate(pairs, start=2):
                    needed = any(k in pair for pair in pairs[k - 1 :])
                    if needed:
                        power[k] = builder.fmul(power[a], power[b])
                        lifted[k] = power[k]
                        if weight is not None:
                            lifted[k] = builder.fmul(lifted[a], power[b])
                    # Additions and multiplications have units of their own: keep both busy.
                    if needed and order > 4:
                        add_to(cells[k], lifted[k])
                    else:
                        fused = v.fused(lifted[a], power[b], builder.load(cells[k]))
                        builder.store(fused, cells[k])
                keep(cells[least], "<", value)
                keep(cells[most], ">", value)
                if with_weight_sums:
                    square = builder.fmul(weight, weight)
                    keep(cells[lightest], "<", weight)
                    add_to(cells[lightest + 1], weight)
                    for j, (a, b) in enumerate(
                        ((weight, weight), (square, weight), (square, square)), start=2
                    ):
                        cell = cells[lightest + j]
                        builder.store(v.fused(a, b, builder.load(cell)), cell)

            own = [new_cells(lane) for lane in lanes]
            pivots_of = [everywhere or v.load(v.data(6), lane) for lane in lanes]
            with cgutils.for_range(builder, builder.sub(stop, start)) as loop:
                row = builder.add(loop.index, start)
                begin = builder.mul(row, row_length)
                for cells, pivot, lane in zip(own, pivots_of, lanes, strict=True):
                    index = builder.add(begin, lane)
                    weight = None
                    if weighted:
                        beside = lie == BESIDE
                        weight = v.load(weights, index) if beside else v.everywhere(weights, row)
                    add(cells, pivot, v.load(readings, index), weight)
            for cells, lane in zip(own, lanes, strict=True):
                for k, cell in enumerate(cells):
                    found = builder.load(cell)
                    if k == 1:
                        found, rest = v.two_sum(v.load(totals, position(1, lane)), found)
                        v.store(builder.fadd(v.load(left, lane), rest), left, lane)
                    elif k not in precision:
                        found = builder.fadd(v.load(totals, position(k, lane)), found)
                    v.store(v.double(found), totals, position(k, lane))
            return context.get_dummy_value()

        return types.void(x, length, w, first, last, place, pivots, sums, rests), generate

    return sum_tile


def _begin_intrinsic(rows, least, most, lanes):
    """``begin(sums, rests, pivots, pivot)``: nothing yet, in all lanes of a stream.

    ``least`` and ``most`` are the rows of ``sums`` that hold extremes.
    """

    @intrinsic
    def begin(typing_context, sums, rests, pivots, pivot):
        def generate(context, builder, signature, arguments):
            v = Vectors(context, builder, signature, arguments, _EIGHT)
            index = cgutils.intp_t

            def fill(base, value, length):
                for place in range(0, length, _EIGHT):
                    v.store(value, base, index(place))

            totals = v.data(0)
            for k in range(rows):
                value = np.inf if k in least else -np.inf if k in most else 0.0
                constant = ir.Constant(v.kind, [ir.Constant(ir.DoubleType(), value)] * _EIGHT)
                for place in range(0, lanes, _EIGHT):
                    v.store(constant, totals, index(k * lanes + place))
            fill(v.data(1), v.zero(), lanes)
            fill(v.data(2), v.spread(arguments[3]), lanes)
            return context.get_dummy_value()

        return types.void(sums, rests, pivots, pivot), generate

    return begin


def _begin_plain(rows, least, most, lanes):
    def begin(sums, rests, pivots, pivot):
        for k in range(rows):
            sums[k] = np.inf if k in least else -np.inf if k in most else 0.0
        rests[:] = 0.0
        pivots[:] = pivot

    return begin


def _fold_intrinsic(rows, least, most, lanes):
    """``fold(sums, rests)``: the lanes become one, by halves; row k is then ``sums[k, 0]``."""

    @intrinsic
    def fold(typing_context, sums, rests):
        def generate(context, builder, signature, arguments):
            v = Vectors(context, builder, signature, arguments, _EIGHT)
            totals, index = v.data(0), cgutils.intp_t

            def parts_of(base, begin):
                return [v.load(base, index(begin + place)) for place in range(0, lanes, _EIGHT)]

            left = parts_of(v.data(1), 0)

            def add_first(a, b):
                total, rest = v.two_sum(a, b)
                lost.append(rest)
                return total

            for k in range(rows):
                parts = parts_of(totals, k * lanes)
                if k in least or k in most:
                    comparison = "<" if k in least else ">"
                    value = v.folded(parts, lambda a, b, c=comparison: v.extreme(c, a, b))
                elif k == 1:
                    lost: list = []
                    value = v.folded(parts, add_first)
                    rest = v.folded(left, builder.fadd)
                    for part in lost:
                        rest = builder.fadd(rest, v.folded([part], builder.fadd))
                    value = builder.fadd(value, rest)
                else:
                    value = v.folded(parts, builder.fadd)
                builder.store(value, builder.gep(totals, [index(k * lanes)]))
            return context.get_dummy_value()

        return types.void(sums, rests), generate

    return fold


def _fold_plain(rows, least, most, lanes):
    def fold(sums, rests):
        for k in range(rows):
            if k in least or k in most:
                sums[k, 0] = (min if k in least else max)(sums[k].tolist())
                continue
            parts, lost = sums[k].tolist(), rests.tolist() if k == 1 else []
            while len(parts) > 1:
                half = len(parts) // 2
                pairs = list(zip(parts[:half], parts[half:], strict=True))
                parts = [a + b for a, b in pairs]
                if k == 1:
                    for (a, b), total in zip(pairs, parts, strict=True):
                        shadow = total - a
                        lost.append((a - (total - shadow)) + (b - shadow))
            sums[k, 0] = parts[0] + sum(lost)

    return fold


def _tile_plain(order, width, runs, lie):
    """The same in plain Python (without fused multiply-add)."""

    def sum_tile(x, length, w, first, last, place, pivots, sums, rests):
        for j in range(place, place + width * runs):
            found = [0.0] * (order + 1)
            of_weights = [0.0] * 5
            for i in range(first, last):
                value = float(x[i * length + j])
                power = [1.0, value - pivots[j]]
                weight = 1.0 if w is None else w[i * length + j if lie == BESIDE else i]
                found[1] += weight * power[1]
                for k, (a, b) in enumerate(_powers(order), start=2):
                    power.append(power[a] * power[b])
                    found[k] += weight * power[a] * power[b]
                sums[0, j] = min(sums[0, j], value)
                sums[order + 1, j] = max(sums[order + 1, j], value)
                if w is not None and lie == BESIDE:
                    sums[order + 2, j] = min(sums[order + 2, j], weight)
                    for k in range(1, 5):
                        of_weights[k] += weight**k
            total = sums[1, j] + found[1]
            shadow = total - sums[1, j]
            rests[j] += (sums[1, j] - (total - shadow)) + (found[1] - shadow)
            sums[1, j] = total
            for k in range(2, order + 1):
                sums[k, j] += found[k]
            if w is not None and lie == BESIDE:
                for k in range(1, 5):
                    sums[order + 2 + k, j] += of_weights[k]

    return sum_tile


make_tile = _tile_plain if PLAIN_PYTHON else _tile_intrinsic
make_begin = _begin_plain if PLAIN_PYTHON else _begin_intrinsic
make_fold = _fold_plain if PLAIN_PYTHON else _fold_intrinsic
