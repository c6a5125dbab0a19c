"""How kernels are compiled: one decorator, and the one hint LLVM needs.

With ``NUMBA_DISABLE_JIT=1`` every kernel is plain Python, and the hint does nothing.
"""

import math
from contextlib import suppress
from typing import Any

import numba
import numpy as np
from llvmlite import ir
from numba.core import types
from numba.extending import intrinsic

from .cache import KernelCache

# Sums may be reordered and fused by the vectoriser; NaN and infinity keep their meaning.
REORDER = {"reassoc", "contract", "nsz"}
# Said for every function: a function that leaves it open takes it from whoever compiles it first,
# and sums that keep what rounding leaves would be reordered away.
_DEFAULTS = {"error_model": "numpy", "fastmath": False}


PLAIN_PYTHON = bool(vars(numba.config)["DISABLE_JIT"])


def compiled(function=None, **options):
    """``numba.njit`` without the interpreter lock, cached on disk where a folder is writable."""
    if function is None:
        return lambda function: compiled(function, **options)
    if PLAIN_PYTHON:
        return np.errstate(all="ignore")(function)
    options = _DEFAULTS | options
    kernel = numba.njit(nogil=True, **options)(function)
    # No folder can be written to: a read-only install without a home.
    with suppress(RuntimeError):
        kernel._cache = KernelCache(function)
    return kernel


def internal(function=None, **options):
    """``compiled`` for what only kernels call: no entry from Python, no file of its own."""
    if function is None:
        return lambda function: internal(function, **options)
    options = _DEFAULTS | options
    return numba.njit(nogil=True, no_cpython_wrapper=True, no_cfunc_wrapper=True, **options)(
        function
    )


def internal_as(name):
    """``internal`` for functions made by a function: each by a name of its own.

    Machine code is called by names.  Of two functions made by one ``def`` the name differs only in
    a number counted in each process: code from the cache could call the other one.
    """

    def decorate(function):
        function.__name__ = function.__qualname__ = name
        return internal(function)

    return decorate


@intrinsic
def _keep_apart(typing_context):
    def generate(context, builder, signature, arguments):
        builder.function.attributes.add("noinline")
        return context.get_dummy_value()

    return types.void(), generate


@intrinsic
def _copy_eight(typing_context, source, place, target, to):
    def generate(context, builder, signature, arguments):
        double, eight = ir.DoubleType(), ir.VectorType(ir.DoubleType(), 8)

        def pointer(array, index):
            data = context.make_array(signature.args[array])(
                context, builder, arguments[array]
            ).data
            return builder.bitcast(builder.gep(data, [arguments[index]]), eight.as_pointer())

        values = builder.load(pointer(0, 1), align=8)
        builder.store(values, pointer(2, 3), align=8)
        zeros = ir.Constant(eight, [ir.Constant(double, 0.0)] * 8)
        finite = builder.fcmp_ordered("==", builder.fsub(values, values), zeros)
        byte = builder.bitcast(finite, ir.IntType(8))
        return builder.icmp_unsigned("==", byte, ir.IntType(8)(255))

    return types.boolean(source, types.intp, target, types.intp), generate


keep_apart: Any
copy_eight: Any
ldexp: Any

if PLAIN_PYTHON:

    def _nothing():
        """Nothing, in plain Python."""

    def ldexp(value, exponent):
        """value * 2**exponent; infinite where ``math.ldexp`` would raise."""
        return float(np.ldexp(value, int(exponent)))

    def _copy_eight_plainly(source, place, target, to):
        """Copy eight readings; whether all are finite."""
        eight = source[place : place + 8]
        target[to : to + 8] = eight
        return all(value - value == 0.0 for value in eight.tolist())

    keep_apart, copy_eight = _nothing, _copy_eight_plainly
else:
    ldexp = math.ldexp

    copy_eight = _copy_eight
    # The power sums must be the same machine code wherever they are called from: inlined copies
    # could be vectorised in another order, and equal readings would give unequal bits.
    keep_apart = _keep_apart
