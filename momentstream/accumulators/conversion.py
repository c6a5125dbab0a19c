"""Python numbers and 64-bit integers as doubles: every integer keeps all its digits."""

import struct
import sys
from collections import deque

import numpy as np

_EXACT = 2**53


def refuse_type(values, what="values"):
    """The TypeError for what is never taken; ``what`` says whether values or weights came."""
    name = type(values).__name__
    cure = {
        "str": "parse it into numbers first",
        "bytes": "np.frombuffer(data, dtype) reads numbers from bytes",
        "bytearray": "np.frombuffer(data, dtype) reads numbers from bytes",
        "dict": "feed .values() as a list",
        "set": "a set loses repeated readings; feed a list",
        "frozenset": "a set loses repeated readings; feed a list",
        "complex": "feed the real and imaginary parts apart",
        "Decimal": "convert it with float()",
        "Fraction": "convert it with float()",
        "longdouble": "convert it with float()",
        "NoneType": "leave missing readings out, or feed nan",
        "NAType": "leave missing readings out, or feed nan",
    }.get(name, "feed a number, an array of real numbers, or an iterable of numbers")
    return TypeError(f"{what} must be real numbers, got {name}; {cure}")


class Room:
    """Working space of one call, used for stretch after stretch: fresh pages cost more than
    arithmetic."""

    __slots__ = ("_arrays",)

    def __init__(self):
        self._arrays = {}

    def get(self, name, size, dtype=np.float64):
        array = self._arrays.get(name)
        if array is None or len(array) < size or array.dtype != dtype:
            array = self._arrays[name] = np.empty(size, dtype)
        return array[:size]


def split_integers(array, room):
    """Doubles, and what they leave of 64-bit integers (None where they leave nothing)."""
    x = room.get("x", len(array))
    if array.dtype.itemsize < 8 or array.dtype.kind not in "iu":
        np.copyto(x, array)
        return x, None
    low, half = room.get("low", len(array)), room.get("half", len(array), array.dtype)
    np.right_shift(array, 32, out=half)
    np.multiply(half, 4294967296.0, out=x)
    np.bitwise_and(array, 0xFFFFFFFF, out=half)
    np.copyto(low, half)
    total = room.get("total", len(array))
    np.add(x, low, out=total)
    np.subtract(total, x, out=x)
    np.subtract(low, x, out=low)
    return total, low if low.any() else None


def pack_floats(items):
    """A list of Python floats as an array; three times as fast as NumPy's own."""
    x = np.empty(len(items))
    struct.pack_into(f"{len(items)}d", x, 0, *items)
    return x


def pack_numbers(items, what="values", start=0):
    """A list of numbers as doubles and, for wide integers, their second parts.

    Parameters
    ----------
    items : list
        A masked entry becomes a NaN.
    what : str
        What they are called in an error.
    start : int
        The place of the first in the whole call, for errors.

    Raises
    ------
    TypeError
        An item is not a real number.
    ValueError
        An integer is outside -2**63 .. 2**64 - 1.
    """
    try:
        deque(map(float.conjugate, items), maxlen=0)  # the fastest test that all are floats
    except TypeError:
        packed = _pack_integers(items) if set(map(type, items)) == {int} else None
        return packed or _pack_mixed(items, what, start)
    return pack_floats(items), None


def _pack_integers(items):
    """A list of Python integers as doubles and second parts, or None where one is too large."""
    for dtype in (np.int64, np.uint64):
        try:
            array = np.array(items, dtype=dtype)
        except OverflowError:
            continue
        return split_integers(array, Room())
    return None


def _pack_mixed(items, what, start):
    x = np.empty(len(items))
    low = None
    for i, item in enumerate(items):
        if isinstance(item, np.ndarray) and item.ndim == 0:
            item = np.nan if is_masked(item) else item[()]
        elif hasattr(item, "as_py"):  # an Arrow scalar
            item = np.nan if item.as_py() is None else item.as_py()
        if isinstance(item, (bool, np.bool_)):
            x[i] = bool(item)
        elif isinstance(item, (int, np.integer)) and not isinstance(item, np.timedelta64):
            value = int(item)
            if not -(2**63) <= value < 2**64:
                raise ValueError(
                    f"{what} that are integers must lie in -2**63 .. 2**64 - 1, got "
                    f"{_shortened(value)} at {start + i}"
                )
            x[i] = value
            if not -_EXACT <= value <= _EXACT:
                rest = value - int(x[i])
                if rest:
                    if low is None:
                        low = np.zeros(len(items))
                    low[i] = rest
        elif isinstance(item, (float, np.float32, np.float16)):
            x[i] = item
        else:
            raise refuse_type(item, what)
    return x, low


def is_masked(value):
    """Whether a value is NumPy's masked constant, or an array of one masked entry."""
    masked = sys.modules.get("numpy.ma")
    return masked is not None and isinstance(value, masked.MaskedArray) and bool(value.mask)


def _shortened(value):
    """An integer for an error: whole, or its beginning."""
    if value.bit_length() > 10_000:
        return f"one of {value.bit_length()} bits"
    text = str(value)
    return text if len(text) <= 40 else f"{text[:30]}... ({len(text)} digits)"
