"""The one door for what goes in: everything becomes stretches of doubles.

A stretch is ``(x, low, w)``: contiguous doubles (or, passed as they are, single-precision
readings), the second parts of integers that no double holds (or None), and weights (or None).
A missing entry is a NaN in ``x``.
"""

from collections import deque
from itertools import islice
from numbers import Number

import numpy as np

from .columns import check_dtype, is_frame, origin, read_column, read_frame
from .conversion import Room, pack_numbers, refuse_type, split_integers

STRETCH = 1 << 16  # readings converted at a time
CHUNK = 4096  # items of an iterator taken at a time


def _regular(values):
    """The numbers in nested lists, flat, and their shape; ragged lists are a ValueError."""
    if isinstance(values, np.ndarray):
        return list(check_dtype(values).ravel()), values.shape
    if isinstance(values, range):
        return values, (len(values),)
    if not isinstance(values, (list, tuple)):
        return [values], ()
    if not any(map(_is_nest, set(map(type, values)))):
        return values, (len(values),)
    flat: list = []
    inner = None
    for i, item in enumerate(values):
        part, shape = _regular(item)
        if inner is not None and shape != inner:
            raise ValueError(f"ragged lists: item {i} has shape {shape}, those before it {inner}")
        inner = shape
        flat.extend(part)
    return flat, (len(values), *(inner or ()))


def _is_nest(kind):
    return issubclass(kind, (list, tuple, np.ndarray))


def writable(array):
    """A view that may be written to.

    Compiled kernels would be compiled once more for read-only arrays; they never write to these.
    """
    return array if array.flags.writeable else np.asarray(_Lent(array))


class _Lent:
    def __init__(self, array):
        self.owner = array
        lent = dict(array.__array_interface__)
        lent["data"] = (lent["data"][0], False)
        self.__array_interface__ = lent


class Form:
    """What an accumulator takes: shape, channels and names of a reading, kind of weights."""

    __slots__ = ("names", "shape", "size", "whole")

    def __init__(self, shape, names, weights=None):
        self.shape = shape
        self.size = int(np.prod(shape, dtype=np.int64)) if shape else None
        self.names = names
        self.whole = weights == "frequency"

    def rows(self, shape):
        """How many readings an array of this shape holds; ValueError where it does not fit."""
        if not self.shape:
            return int(np.prod(shape, dtype=np.int64))
        if shape == self.shape:
            return 1
        if shape[1:] == self.shape:
            return shape[0]
        if 0 in shape and len(shape) == 1:
            return 0
        inner = ", ".join(str(length) for length in self.shape)
        raise ValueError(
            f"readings must have shape {self.shape}, a chunk shape (n, {inner}), "
            f"got shape {tuple(shape)}"
        )

    def fold(self, x):
        """Flat readings as one row a reading."""
        return x if self.size is None else x.reshape(-1, self.size)


def stretches(values, weights, form):
    """Whether all comes as one stretch, and an iterator over the stretches.

    Parameters
    ----------
    values : anything an accumulator's ``update`` takes
    weights : None, number, array or iterator
    form : Form
    """
    if isinstance(values, (int, float, np.number, np.bool_)) or _is_point(values):
        if form.shape:
            form.rows(np.shape(values))
        x, low = pack_numbers([values])
        return True, iter([(x, low, Weights(weights, 1, form.whole).part(0, 1))])
    if values is None or isinstance(values, (str, bytes, bytearray, dict, set, frozenset)):
        raise refuse_type(values)
    if isinstance(values, Number) or (isinstance(values, np.generic) and not values.shape):
        raise refuse_type(values)
    if is_frame(values):
        return _frame_stretches(values, weights, form)
    if not isinstance(values, np.ndarray) and hasattr(values, "__next__"):
        return False, _iterator_stretches(values, weights, form)
    if _is_array(values):
        data, mask = read_column(values)
        return _array_stretches(data, mask, weights, form)
    if not hasattr(values, "__iter__"):
        raise refuse_type(values)
    return _list_stretches(values, weights, form)


def _is_point(values):
    return isinstance(values, np.ndarray) and values.ndim == 0 and values.dtype.kind in "biuf"


def _is_array(values):
    if isinstance(values, (list, tuple, range, deque)):
        return False
    return (
        isinstance(values, (np.ndarray, memoryview))
        or origin(values) in ("pandas", "polars", "pyarrow", "array")
        or hasattr(values, "__array__")
        or hasattr(values, "__array_interface__")
    )


class Weights:
    """The weights of ``n`` readings, made doubles a stretch at a time where they are not."""

    __slots__ = ("_array", "_single", "whole")

    def __init__(self, weights, n, whole):
        self._single = None  # one number for all, repeated over a stretch
        self._array = None
        self.whole = True  # whether any number of them is at hand at once
        if weights is None:
            return
        if isinstance(weights, (str, bytes, bytearray, dict, set, frozenset)):
            raise refuse_type(weights, "weights")
        if hasattr(weights, "__next__"):
            weights = list(islice(weights, n + 1))
        if isinstance(weights, (list, tuple, range, deque)):
            self._array = _exact_enough(*pack_numbers(list(weights), "weights"), whole)
        elif np.ndim(weights) == 0 and not _is_array(weights):
            one = _exact_enough(*pack_numbers([weights], "weights"), whole)[0]
            self._single, self.whole = np.full(min(n, STRETCH), one), False
            return
        else:
            data = _weight_column(weights, whole)
            if data.ndim == 0:
                self._single, self.whole = np.full(min(n, STRETCH), float(data)), False
                return
            flags = data.flags
            self.whole = bool(
                data.dtype == np.float64
                and data.dtype.isnative
                and flags.c_contiguous
                and flags.aligned
            )
            self._array = data.reshape(-1)
        if len(self._array) != n:
            raise ValueError(
                f"weights must have one entry a reading: {n} readings, {len(self._array)} weights"
            )

    def part(self, start, stop):
        """The weights from ``start`` to ``stop``, at most a stretch of them unless ``whole``."""
        if self._single is not None:
            return self._single[: stop - start]
        if self._array is None:
            return None
        return writable(np.ascontiguousarray(self._array[start:stop], dtype=np.float64))


def _weight_column(weights, whole):
    try:
        data, mask = read_column(weights)
    except TypeError as error:
        raise TypeError(str(error).replace("values", "weights", 1)) from None
    if mask is not None and mask.any():
        raise ValueError(f"weights must not be missing, one is at {int(np.argmax(mask))}")
    if whole and data.dtype.kind in "iu" and data.dtype.itemsize == 8:
        flat = data.reshape(-1)
        for start in range(0, flat.size, STRETCH):
            _exact_enough(*split_integers(flat[start : start + STRETCH], Room()), whole, start)
    return data


def _exact_enough(w, low, whole, start=0):
    """Weights, unless they are frequencies that doubles do not count exactly."""
    if whole and low is not None:
        place = int(np.flatnonzero(low)[0])
        raise ValueError(
            "a frequency among the weights must be at most 2**53, "
            f"got about {w[place]:.17g} at {start + place}"
        )
    return w


def _array_stretches(data, mask, weights, form):
    n = form.rows(data.shape)
    w = Weights(weights, n, form.whole)
    if mask is not None and not mask.any():
        mask = None
    as_it_is = data.dtype == np.float64 or (
        data.dtype == np.float32 and not form.shape and weights is None
    )
    flags = data.flags
    if as_it_is and mask is None and flags.c_contiguous and flags.aligned and data.dtype.isnative:
        x = form.fold(writable(data).reshape(-1))
        if n <= STRETCH or w.whole:
            return True, iter([(x, None, w.part(0, n))])
        return False, _sliced(x, w)
    if n <= CHUNK and data.size <= STRETCH:
        gone = None if mask is None else np.ascontiguousarray(mask).reshape(-1)
        x, low = _converted(np.ascontiguousarray(data).reshape(-1), gone, Room())
        return True, iter([(form.fold(x), None if low is None else form.fold(low), w.part(0, n))])
    return False, _converted_stretches(data, mask, w, form, n)


def _sliced(x, w):
    for start in range(0, len(x), STRETCH):
        part = x[start : start + STRETCH]
        yield part, None, w.part(start, start + len(part))


def _converted_stretches(data, mask, w, form, n):
    size = form.size or 1
    rows = max(1, STRETCH // size)
    room = Room()
    done = 0
    kept: list = []
    masks: list = []
    held = 0
    if mask is not None:
        mask = np.broadcast_to(mask, data.shape)
    for part, missing in _pieces(data, mask):
        kept.append(part)
        masks.append(missing)
        held += part.size
        if held >= rows * size or done * size + held == n * size:
            flat = np.concatenate(kept) if len(kept) > 1 else kept[0]
            gone = None
            if mask is not None:
                gone = np.concatenate(masks) if len(masks) > 1 else masks[0]
            take = flat.size // size * size
            x, low = _converted(flat[:take], None if gone is None else gone[:take], room)
            count = take // size
            part_w = w.part(done, done + count)
            yield form.fold(x), None if low is None else form.fold(low), part_w
            done += count
            kept, masks = [flat[take:]], [None if gone is None else gone[take:]]
            held = flat.size - take


def _pieces(data, mask):
    """Flat parts of an array in C order, at most a stretch long, whatever its layout."""
    if data.ndim == 0:
        yield data.reshape(1), None if mask is None else mask.reshape(1)
    elif data.ndim == 1 or data.flags.c_contiguous:
        flat = data.reshape(-1)
        gone = None if mask is None else mask.reshape(-1)
        for start in range(0, flat.size, STRETCH):
            stop = start + STRETCH
            yield flat[start:stop], None if gone is None else gone[start:stop]
    elif data[0].size > STRETCH:
        for i in range(len(data)):
            yield from _pieces(data[i], None if mask is None else mask[i])
    elif data.size:
        rows = STRETCH // data[0].size
        for start in range(0, len(data), rows):
            part = data[start : start + rows].reshape(-1)
            yield part, None if mask is None else mask[start : start + rows].reshape(-1)


def _converted(flat, mask, room):
    """Doubles and second parts of a flat array in any dtype; masked entries become NaN."""
    if not flat.dtype.isnative:
        flat = flat.astype(flat.dtype.newbyteorder("="))
    x, low = split_integers(flat, room)
    if mask is not None:
        x[mask] = np.nan
        if low is not None:
            low[mask] = 0.0
    return x, low


def _list_stretches(values, weights, form):
    values = values if isinstance(values, (list, tuple, range)) else list(values)
    try:
        flat, shape = _regular(values)
    except RecursionError:
        raise ValueError("values must be lists of finite depth, got one within itself") from None
    n = form.rows(shape)
    w = Weights(weights, n, form.whole)
    return n * (form.size or 1) <= STRETCH, _list_parts(flat, n, w, form)


def _list_parts(flat, n, w, form):
    size = form.size or 1
    rows = max(1, STRETCH // size)
    for start in range(0, n, rows):
        stop = min(start + rows, n)
        part = flat[start * size : stop * size]
        part = part if isinstance(part, list) else list(part)
        x, low = pack_numbers(part, start=start * size)
        yield form.fold(x), None if low is None else form.fold(low), w.part(start, stop)


def _iterator_stretches(values, weights, form):
    beside = iter(weights) if hasattr(weights, "__iter__") and np.ndim(weights) else None
    if hasattr(weights, "__next__"):
        beside = weights
    rows = max(1, min(CHUNK, STRETCH // (form.size or 1)))
    done = 0
    part = weights
    while True:
        items = list(islice(values, rows))
        if beside is not None:
            part = list(islice(beside, len(items) if items else 1))
            if len(part) != len(items):
                fewer = "weights" if len(part) < len(items) else "readings"
                raise ValueError(f"readings and weights must be as many: the {fewer} ran out")
        if not items:
            return
        flat = items
        if form.shape:
            flat, shape = _regular(items)
            if shape[1:] != form.shape:
                raise ValueError(
                    f"an iterator must yield readings of shape {form.shape}, got shape {shape[1:]}"
                    f" (for so many at once: {shape})"
                )
        x, low = pack_numbers(flat, start=done * (form.size or 1))
        w = Weights(part, len(items), form.whole).part(0, len(items))
        yield form.fold(x), None if low is None else form.fold(low), w
        done += len(items)


def _frame_stretches(values, weights, form):
    columns = read_frame(values, form.names, form.size if form.shape else None)
    if form.shape and len(form.shape) != 1:
        raise ValueError(f"a frame holds readings of one axis, the accumulator has {form.shape}")
    n = len(columns[0][0]) if columns else 0
    w = Weights(weights, n if form.shape else n * len(columns), form.whole)

    def read():
        rows = max(1, STRETCH // max(1, len(columns)))
        room = Room()
        for start in range(0, n, rows):
            stop = min(start + rows, n)
            x = np.empty((stop - start, len(columns)))
            low = None
            for j, (data, mask) in enumerate(columns):
                part_mask = None if mask is None else mask[start:stop]
                x[:, j], rest = _converted(data[start:stop], part_mask, room)
                if rest is not None:
                    if low is None:
                        low = np.zeros_like(x)
                    low[:, j] = rest
            size = 1 if form.shape else len(columns)
            part_w = w.part(start * size, stop * size)
            flat = None if low is None else form.fold(low.reshape(-1))
            yield form.fold(x.reshape(-1)), flat, part_w

    return False, read()
