"""Dot products of runs: vector instructions written out, in an order that no compiler changes.

``four(a, i, b, k, chunks, out, place)`` adds to ``out[place]`` to ``out[place + 3]`` the products
of run i of ``a`` with the runs k to k + 3 of ``b``; ``eight`` and ``one`` more or fewer of them.
``shift(a, i, chunks, pivot)`` subtracts a pivot from run i, and returns the least and the greatest
of what was there.  Runs are rows of tables of one width and are taken in ``chunks`` of eight; what
is beyond their end must be zero.
"""

from numba.core import cgutils, types
from numba.extending import intrinsic

from .compiling import PLAIN_PYTHON
from .tiles import Vectors

CHUNK = 8


def _make_intrinsic(several):
    @intrinsic
    def products(typing_context, a, i, b, k, chunks, out, place):
        def generate(context, builder, signature, arguments):
            v = Vectors(context, builder, signature, arguments, CHUNK)
            _, left_run, _, right_run, count, _, target = arguments
            width = builder.extract_value(v.array(0).shape, 1)
            left, right, totals = v.data(0), v.data(2), v.data(5)
            step = cgutils.intp_t(CHUNK)
            left_begin = builder.mul(left_run, width)
            begins = [
                builder.mul(builder.add(right_run, cgutils.intp_t(u)), width)
                for u in range(several)
            ]
            cells = [cgutils.alloca_once_value(builder, v.zero()) for _ in range(several)]
            with cgutils.for_range(builder, count) as loop:
                at = builder.mul(loop.index, step)
                value = v.load(left, builder.add(left_begin, at))
                for cell, begin in zip(cells, begins, strict=True):
                    other = v.load(right, builder.add(begin, at))
                    builder.store(v.fused(value, other, builder.load(cell)), cell)
            for u, cell in enumerate(cells):
                pointer = builder.gep(totals, [builder.add(target, cgutils.intp_t(u))])
                found = v.folded([builder.load(cell)], builder.fadd)
                builder.store(builder.fadd(builder.load(pointer), found), pointer)
            return context.get_dummy_value()

        return types.void(a, i, b, k, chunks, out, place), generate

    return products


@intrinsic
def _shift_intrinsic(typing_context, a, i, chunks, pivot):
    def generate(context, builder, signature, arguments):
        v = Vectors(context, builder, signature, arguments, CHUNK)
        _, run, count, about = arguments
        width = builder.extract_value(v.array(0).shape, 1)
        begin, runs = builder.mul(run, width), v.data(0)
        first = v.load(runs, begin)
        least = cgutils.alloca_once_value(builder, first)
        most = cgutils.alloca_once_value(builder, first)
        pivots = v.spread(about)
        with cgutils.for_range(builder, count) as loop:
            at = builder.add(begin, builder.mul(loop.index, cgutils.intp_t(CHUNK)))
            value = v.load(runs, at)
            builder.store(v.extreme("<", value, builder.load(least)), least)
            builder.store(v.extreme(">", value, builder.load(most)), most)
            v.store(builder.fsub(value, pivots), runs, at)
        ends = [
            v.folded([builder.load(cell)], lambda a, b, sign=sign: v.extreme(sign, a, b))
            for cell, sign in ((least, "<"), (most, ">"))
        ]
        return context.make_tuple(builder, signature.return_type, ends)

    return types.UniTuple(types.float64, 2)(a, i, chunks, pivot), generate


def _shift_plainly(a, i, chunks, pivot):
    run = a[i, : chunks * CHUNK]
    ends = float(run.min()), float(run.max())
    run -= pivot
    return ends


def _make_plain(several):
    def products(a, i, b, k, chunks, out, place):
        n = chunks * CHUNK
        for u in range(several):
            lanes = (a[i, :n] * b[k + u, :n]).reshape(chunks, CHUNK)
            total = lanes.sum(axis=0)
            while len(total) > 1:
                total = total[: len(total) // 2] + total[len(total) // 2 :]
            out[place + u] += total[0]

    return products


_make = _make_plain if PLAIN_PYTHON else _make_intrinsic
eight, four, one = _make(8), _make(4), _make(1)
shift = _shift_plainly if PLAIN_PYTHON else _shift_intrinsic
