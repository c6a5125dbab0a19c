"""What goes in: every container, dtype and layout gives the readings it holds, and nothing else."""

import ctypes
import enum
import gc
import math
import mmap
import tracemalloc
from array import array
from collections import deque
from fractions import Fraction

import numpy as np
import pandas as pd
import polars as pl
import pyarrow as pa
import pytest
from assertions import assert_close
from exact import Exact, assert_promise_5, assert_same_state

import momentstream as ms

NAN, INF = math.nan, math.inf
POLICIES = ("raise", "omit", "propagate")
DTYPES = ("?", "i1", "u1", "i2", "u2", "i4", "u4", "i8", "u8", "f2", "f4", "f8")


def fed(values, beside=None, **configuration):
    return ms.Moments(**configuration).update(values, beside)


def plain(values):
    """A list of numbers, the container everything else is held against."""
    return fed([float(v) for v in values])


# -- numbers -------------------------------------------------------------------------------------


class Level(enum.IntEnum):
    LOW = 3


class Pressure(float):
    pass


@pytest.mark.parametrize(
    "value",
    [
        3,
        3.0,
        Level.LOW,
        Pressure(3.0),
        *(np.dtype(dtype).type(3) for dtype in DTYPES if dtype != "?"),
        np.array(3),
        np.array(3.0),
        np.array(3, np.uint64),
        np.array(3.0, ">f4"),
        np.ma.array(3.0),
    ],
    ids=lambda v: f"{type(v).__name__} {getattr(v, 'dtype', '')}",
)
def test_a_number(value):
    assert_same_state(fed(value), fed([3.0]), repr(value))
    assert_same_state(fed([value]), fed([3.0]), repr(value))
    assert_same_state(fed(iter([value])), fed([3.0]), repr(value))


@pytest.mark.parametrize("value", [True, np.True_, np.array(True)], ids=repr)
def test_truth_counts_as_one(value):
    assert_same_state(fed(value), fed([1.0]), repr(value))
    assert_same_state(fed([value, False]), fed([1.0, 0.0]), repr(value))


def test_negative_zero_and_the_ends_of_the_range():
    largest = 1.7976931348623157e308
    moments = fed([-0.0, 5e-324, -5e-324, largest, -largest])
    assert moments.minimum() == -largest
    assert moments.maximum() == largest
    assert moments.mean() == 0.0
    # The square root of 2/5 of the square: two roundings, and the square root's own.
    assert_close(moments.std(), Fraction(largest) * Fraction(math.sqrt(0.4)), ulps=4, label="std")


def assert_promise_5_of(values, moments, weights=None):
    exact = Exact(list(values), weights, moments.order)
    assert_promise_5(moments, exact, [slice(0, len(values))], "readings")


# -- arrays --------------------------------------------------------------------------------------


def numbers(dtype, n=60):
    """Numbers a dtype holds exactly, its ends among them."""
    dtype = np.dtype(dtype)
    if dtype.kind == "b":
        return (np.arange(n) % 3 == 0).astype(dtype)
    if dtype.kind == "f":
        return (np.arange(n) * 0.25 - 3.0).astype(dtype)
    ends = np.iinfo(dtype)
    x = np.arange(n).astype(dtype)
    x[:2] = ends.min, ends.max
    return x


def layouts(x):
    """The same numbers in C order, 60 of them, laid out in every way."""
    yield "contiguous", x
    yield "strided", np.repeat(x, 3)[::3]
    yield "backwards", x[::-1].copy()[::-1]
    yield "two axes", x.reshape(12, 5)
    yield "Fortran", np.asfortranarray(x.reshape(12, 5))
    yield "transposed", x.reshape(5, 4, 3).transpose(2, 0, 1).copy().transpose(1, 2, 0)
    yield "part of a wider one", np.hstack([x.reshape(12, 5)] * 2)[:, :5]
    yield "other byte order", x.astype(x.dtype.newbyteorder())
    read_only = x.copy()
    read_only.flags.writeable = False
    yield "read-only", read_only
    record = np.zeros(x.size, dtype=[("gap", "i1"), ("value", x.dtype)])
    record["value"] = x
    yield "unaligned", record["value"]
    yield "unaligned, together", np.frombuffer(b"-" + x.tobytes(), x.dtype, offset=1)
    yield "subclass", x.view(type("Readings", (np.ndarray,), {}))
    yield "many axes", x.reshape((1,) * 20 + (60,))
    yield "empty beside", np.concatenate([x, x[:0]])


@pytest.mark.parametrize("dtype", DTYPES)
def test_every_dtype_in_every_layout(dtype):
    x = numbers(dtype)
    expected = fed(x.tolist())
    for layout, values in layouts(x):
        before = values.copy()
        assert_same_state(fed(values), expected, layout)
        assert_same_state(fed(iter(values.reshape(-1))), expected, f"{layout}, iterated")
        assert np.array_equal(values, before), "readings were written to"
    if np.dtype(dtype).kind != "b":
        assert expected.minimum() == float(x.min())
        assert expected.maximum() == float(x.max())
    assert_promise_5_of(x.tolist(), expected)


@pytest.mark.parametrize("dtype", DTYPES)
def test_every_dtype_as_rows(dtype):
    x = numbers(dtype)
    expected = fed(x.reshape(12, 5).tolist(), shape=5)
    for layout, values in layouts(x):
        if values.shape == (12, 5):
            assert_same_state(fed(values, shape=5), expected, layout)
            assert_same_state(fed(iter(values), shape=5), expected, f"{layout}, iterated")
            assert_same_state(fed(list(values), shape=5), expected, f"{layout}, in a list")
    for j in range(5):
        assert expected.channel(j).count == 12
        assert_promise_5_of(x.reshape(12, 5)[:, j].tolist(), expected.channel(j))


def test_long_arrays_in_every_layout():
    """Longer than what is converted at a time, for the paths that go stretch by stretch."""
    x = np.sin(np.arange(210_000.0)).astype(np.float32)
    expected = fed(x.astype(np.float64))
    for values in (
        x,
        x.astype(">f4"),
        np.repeat(x, 2)[::2],
        np.asfortranarray(x.reshape(700, 300)),
        np.asfortranarray(x.reshape(2, 105_000)),
        np.asfortranarray(x.reshape(105_000, 2)),
        x.reshape(3, 70_000, 1).transpose(1, 0, 2).copy().transpose(1, 0, 2),
        x.tolist(),
        iter(x),
        pd.Series(x),
        pl.Series(x),
        pa.array(x),
        pa.chunked_array([x[:100], x[100:]]),
    ):
        assert_same_state(fed(values), expected, type(values).__name__)


@pytest.mark.parametrize("empty", [[], (), range(0), iter([]), deque(), np.empty(0), [[], []]])
def test_nothing(empty):
    assert_same_state(fed(empty), ms.Moments(), repr(empty))


def test_nothing_of_every_kind():
    for empty in (
        np.empty((0, 3)),
        np.empty((3, 0), np.int64),
        np.ma.empty(0),
        pd.Series([], dtype="Int64"),
        pd.DataFrame({"a": [], "b": []}),
        pd.DataFrame(),
        pl.Series([], dtype=pl.Int64),
        pl.DataFrame({"a": []}),
        pa.array([], pa.int64()),
        pa.chunked_array([], pa.int64()),
        pa.table({"a": pa.array([], pa.float64())}),
    ):
        assert_same_state(fed(empty), ms.Moments(), repr(empty))
    for empty in ([], np.empty((0, 2)), iter([]), pd.DataFrame({"a": [], "b": []})):
        assert_same_state(fed(empty, shape=2), ms.Moments(shape=2), repr(empty))
    assert_same_state(fed([], [], weights="reliability"), ms.Moments(weights="reliability"), "[]")


@pytest.mark.parametrize("code", list("bBhHiIlLqQfd"))
def test_buffers(code):
    values = [0, 1, 5, 100]
    expected = plain(values)
    assert_same_state(fed(array(code, values)), expected, f"array {code}")
    assert_same_state(fed(memoryview(array(code, values))), expected, f"memoryview {code}")
    assert_same_state(fed(memoryview(array(code, [0, 9, 1, 9, 5, 9, 100, 9]))[::2]), expected, code)
    two_axes = memoryview(array(code, values)).cast("B").cast(code, shape=[2, 2])
    assert_same_state(fed(two_axes), expected, f"memoryview of two axes {code}")
    kind = {"f": ctypes.c_float, "d": ctypes.c_double, "q": ctypes.c_int64}.get(code)
    if kind:
        assert_same_state(fed(np.ctypeslib.as_array((kind * 4)(*values))), expected, "ctypes")


def test_a_mapped_file(tmp_path):
    np.arange(20.0).tofile(tmp_path / "levels")
    expected = plain(range(20))
    assert_same_state(fed(np.memmap(tmp_path / "levels", mode="r")), expected_bytes(), "memmap")
    assert_same_state(fed(np.memmap(tmp_path / "levels", float, mode="r")), expected, "memmap")
    with open(tmp_path / "levels", "rb") as file:
        mapped = mmap.mmap(file.fileno(), 0, access=mmap.ACCESS_READ)
        view = memoryview(mapped).cast("d")
        assert_same_state(fed(view), expected, "mmap")
        view.release()
        mapped.close()


def expected_bytes():
    return plain(np.arange(20.0).tobytes())


def test_whatever_has_an_array():
    class Probe:
        def __array__(self, dtype=None, copy=None):
            return np.arange(5)

    class Interface:
        __array_interface__ = np.arange(5).__array_interface__
        kept = np.arange(5)

    Interface.__array_interface__ = Interface.kept.__array_interface__
    assert_same_state(fed(Probe()), plain(range(5)), "__array__")
    assert_same_state(fed(Interface()), plain(range(5)), "__array_interface__")


@pytest.mark.parametrize(
    "container",
    [
        list,
        tuple,
        deque,
        iter,
        lambda x: (v for v in x),
        lambda x: map(float, x),
        lambda x: dict(enumerate(x)).values(),
        lambda x: dict.fromkeys(x).keys(),
        lambda x: np.array(x).flat,
        lambda x: np.array(x, object).tolist(),
    ],
)
@pytest.mark.parametrize("n", [0, 1, 3, 4095, 4096, 4097, 8192, 20_000])
def test_iterables(container, n):
    values = [i / 7 for i in range(n)]
    assert_same_state(fed(container(values)), fed(np.array(values)), f"{n}")


def test_iterables_of_ones_own():
    class Log:
        def __iter__(self):
            return iter([1.0, 2.0, 10])

    assert_same_state(fed(Log()), plain([1, 2, 10]), "an iterable")
    assert_same_state(fed(range(5, 50, 3)), plain(range(5, 50, 3)), "range")


@pytest.mark.parametrize(
    "nested",
    [
        [[1.0, 2.0], [3.0, 10.0]],
        ((1, 2), (3, 10)),
        [(1.0, 2), [3.0, np.int8(10)]],
        [np.array([1, 2]), [3.0, 10.0]],
        [np.array([1.0, 2.0]), np.array([3, 10], np.uint8)],
        [[[1.0], [2.0]], [[3.0], [10.0]]],
        [[1.0, 2.0, 3.0, 10.0]],
        [np.array(1), 2.0, np.float32(3), 10],
    ],
    ids=str,
)
def test_nested_lists(nested):
    assert_same_state(fed(nested), plain([1, 2, 3, 10]), repr(nested))


# -- integers keep their spread ------------------------------------------------------------------

WIDE = {
    "2**62": [2**62, 2**62 + 1, 2**62 + 2, 2**62 + 5],
    "-2**63": [-(2**63), -(2**63) + 1, -(2**63) + 7, -(2**63) + 100],
    "2**53": [2**53 - 1, 2**53 + 1, 2**53 + 3, 2**53],
    "epoch": [1_700_000_000_000_000_000 + 333 * i * i for i in range(9)],
    "all": [-(2**63), 2**63 - 1, 0, 1, -1, 2**53 + 1],
}
UNSIGNED = {
    "2**64": [2**64 - 1, 2**64 - 2, 2**64 - 4, 2**64 - 1],
    "2**63": [2**63, 2**63 - 1, 2**63 + 3, 2**63 + 2],
    "from zero": [0, 1, 2**64 - 1, 2**53 + 1],
}


def wide_containers(values, dtype):
    small = "Int64" if dtype == "i8" else "UInt64"
    arrow = pa.int64() if dtype == "i8" else pa.uint64()
    polars = pl.Int64 if dtype == "i8" else pl.UInt64
    x = np.array(values, dtype)
    yield x
    yield x.astype(x.dtype.newbyteorder())
    yield np.repeat(x, 2)[::2]
    yield np.ma.array(x)
    yield np.ma.array(x, mask=np.zeros(len(x), bool))
    yield memoryview(x)
    yield array("q" if dtype == "i8" else "Q", values)
    yield list(values)
    yield list(x)
    yield tuple(np.array(v, dtype) for v in values)
    yield iter(values)
    yield pd.Series(x)
    # From a list, pandas itself goes through floats.
    nullable = pd.array(x, dtype=small)
    yield pd.Series(nullable)
    yield nullable
    yield pd.Index(x)
    yield pd.Series(pa.array(values, arrow), dtype=pd.ArrowDtype(arrow))
    yield pd.DataFrame({"a": nullable})
    yield pl.Series(values, dtype=polars)
    yield pl.DataFrame({"a": pl.Series(values, dtype=polars)})
    yield pa.array(values, arrow)
    yield pa.chunked_array([values[:1], values[1:]], arrow)
    yield pa.table({"a": pa.array(values, arrow)})
    yield pa.record_batch({"a": pa.array(values, arrow)})


@pytest.mark.parametrize(
    ("dtype", "name"), [*(("i8", name) for name in WIDE), *(("u8", name) for name in UNSIGNED)]
)
def test_wide_integers_keep_their_spread(dtype, name):
    values = (WIDE if dtype == "i8" else UNSIGNED)[name]
    expected = fed(values)
    exact = Exact(values)
    assert_promise_5(expected, exact, [slice(0, len(values))], name)
    # The deviations are small integers: their sums have no rounding at all.
    if name not in ("all", "from zero", "epoch"):
        variance = (
            Fraction(sum(v * v for v in values), len(values))
            - Fraction(sum(values), len(values)) ** 2
        )
        assert_close(expected.variance(), variance, ulps=1, label=name)
    for container in wide_containers(values, dtype):
        kind = type(container).__name__
        assert_same_state(fed(container), expected, f"{name}, {kind}")


@pytest.mark.parametrize(
    ("dtype", "name"), [*(("i8", name) for name in WIDE), *(("u8", name) for name in UNSIGNED)]
)
def test_wide_integers_as_rows(dtype, name):
    values = (WIDE if dtype == "i8" else UNSIGNED)[name]
    pairs = [(v, values[-1 - i]) for i, v in enumerate(values)]
    x = np.array(pairs, dtype)
    frame = {"a": x[:, 0], "b": x[:, 1]}
    for container in (
        x,
        np.asfortranarray(x),
        np.ma.array(x, mask=False),
        pairs,
        iter(pairs),
        iter(x),
        pd.DataFrame(frame),
        pl.DataFrame(frame),
        pa.table(frame),
    ):
        moments = fed(container, shape=2)
        for j in range(2):
            kind = type(container).__name__
            assert_promise_5_of([pair[j] for pair in pairs], moments.channel(j))
            assert moments.count[j] == len(values), kind


def test_wide_integers_among_floats_and_truths():
    values = [2**62, 2.0**62, 2**62 + 3, True, np.uint64(2**62 + 9), 0.5]
    exact = Exact([2**62, 2**62, 2**62 + 3, 1, 2**62 + 9, 0.5])
    for container in (values, tuple(values), iter(values), deque(values), [values]):
        moments = fed(container)
        assert_promise_5(moments, exact, [slice(0, 6)], type(container).__name__)


def test_wide_integers_across_blocks_and_cuts():
    values = [1_700_000_000_000_000_000 + 17 * (i * i % 1013) for i in range(20_000)]
    expected = fed(np.array(values))
    blocks = [slice(i, i + 8192) for i in range(0, 20_000, 8192)]
    assert_promise_5(expected, Exact(values), blocks, "epoch nanoseconds")
    assert_same_state(fed(iter(values)), expected, "iterator")
    by_one = ms.Moments()
    for value in values:
        by_one.update(value)
    assert_same_state(by_one, expected, "one at a time")
    assert_same_state(ms.Moments().update(np.array(values), threads=2), expected, "threads")


def test_constant_wide_integers_have_no_spread():
    for value in (2**62 + 1, 2**64 - 1, -(2**63) + 1):
        for values in ([value] * 9, np.full(9000, value)):
            moments = fed(values)
            assert moments.variance() == 0.0
            assert moments.mean() == float(value)
            assert math.isnan(moments.skewness())


# -- missing entries -----------------------------------------------------------------------------


def gapped_containers(values, missing):
    """The same integers with the same entries missing, in everything that has a mask."""
    wide = max(values) >= 2**63
    x = np.array(values, np.uint64 if wide else np.int64)
    mask = np.array(missing)
    with_none = [None if gone else v for v, gone in zip(values, missing, strict=True)]
    small, arrow, polars = (
        ("UInt64", pa.uint64(), pl.UInt64) if wide else ("Int64", pa.int64(), pl.Int64)
    )
    yield "masked", np.ma.array(x, mask=mask)
    yield "masked, strided", np.ma.array(np.repeat(x, 2), mask=np.repeat(mask, 2))[::2]
    yield "masked, two axes", np.ma.array(x, mask=mask).reshape(2, -1)
    yield (
        "masked, Fortran",
        np.ma.array(
            np.asfortranarray(x.reshape(2, -1)), mask=np.asfortranarray(mask.reshape(2, -1))
        ),
    )
    yield "masked, hard", np.ma.array(x, mask=mask, hard_mask=True, fill_value=7)
    yield "Series", pd.Series(with_none, dtype=small)
    yield "extension array", pd.array(with_none, dtype=small)
    yield "Index", pd.Index(with_none, dtype=small)
    yield "Series on Arrow", pd.Series(with_none, dtype=pd.ArrowDtype(arrow))
    yield "DataFrame", pd.DataFrame({"a": pd.Series(with_none, dtype=small)})
    yield "Polars", pl.Series(with_none, dtype=polars)
    yield "Polars frame", pl.DataFrame({"a": pl.Series(with_none, dtype=polars)})
    yield (
        "Polars chunks",
        pl.concat(
            [pl.Series(with_none[:2], dtype=polars), pl.Series(with_none[2:], dtype=polars)],
            rechunk=False,
        ),
    )
    yield "Arrow", pa.array(with_none, arrow)
    yield "Arrow part", pa.array([None, 5, *with_none], arrow)[2:]
    yield "Arrow chunks", pa.chunked_array([with_none[:3], with_none[3:]], arrow)
    yield "Arrow table", pa.table({"a": pa.array(with_none, arrow)})
    yield "Arrow batch", pa.record_batch({"a": pa.array(with_none, arrow)})


@pytest.mark.parametrize(
    "values",
    [
        [1, 2, 77, 3, 10, 88],
        [2**62, 2**62 + 1, 5, 2**62 + 2, 2**62 + 9, 6],
        [2**64 - 1, 2**64 - 3, 5, 2**64 - 8, 2**64 - 2, 6],
        [2**62, 2**62 + 1, 2**53 + 1, 2**62 + 2, 2**62 + 9, 2**53 + 1],
    ],
    ids=["small", "2**62", "2**64", "wide under the mask"],
)
@pytest.mark.parametrize("nonfinite", POLICIES)
def test_masked_and_null_entries_are_missing(values, nonfinite):
    missing = [False, False, True, False, False, True]
    seen = [v for v, gone in zip(values, missing, strict=True) if not gone]
    for name, container in gapped_containers(values, missing):
        moments = ms.Moments(nonfinite=nonfinite)
        if nonfinite == "raise":
            with pytest.raises(ms.NonFiniteError) as caught:
                moments.update(container)
            assert caught.value.position == 2, name
            assert moments == ms.Moments()
            continue
        moments.update(container)
        if nonfinite == "propagate":
            assert moments.count == 6, name
            assert math.isnan(moments.mean()), name
            assert math.isnan(moments.variance()), name
            continue
        assert (moments.count, moments.omitted) == (4, 2), name
        assert_promise_5(moments, Exact(seen), [slice(0, 4)], name)
        assert moments.minimum() == float(min(seen))
        assert moments.maximum() == float(max(seen))


def nullable(values, kind):
    """Numbers with None in them in every nullable form of a kind."""
    capital, arrow, polars = {
        "f8": ("Float64", pa.float64(), pl.Float64),
        "f4": ("Float32", pa.float32(), pl.Float32),
        "i1": ("Int8", pa.int8(), pl.Int8),
        "u2": ("UInt16", pa.uint16(), pl.UInt16),
        "i4": ("Int32", pa.int32(), pl.Int32),
        "?": ("boolean", pa.bool_(), pl.Boolean),
    }[kind]
    yield pd.Series(values, dtype=capital)
    yield pd.Series(values, dtype=pd.ArrowDtype(arrow))
    yield pl.Series(values, dtype=polars)
    yield pa.array(values, arrow)
    yield pa.chunked_array([values], arrow)


@pytest.mark.parametrize("kind", ["f8", "f4", "i1", "u2", "i4", "?"])
@pytest.mark.parametrize("gaps", [True, False])
def test_nullable_columns_of_every_dtype(kind, gaps):
    values = [True, None, False, True] if kind == "?" else [1, None, 4, 10]
    if not gaps:
        values = [v for v in values if v is not None]
    expected = fed([NAN if v is None else float(v) for v in values], nonfinite="omit")
    for container in nullable(values, kind):
        moments = fed(container, nonfinite="omit")
        assert_same_state(moments, expected, type(container).__name__)
        assert moments.omitted == gaps


def test_half_precision_with_nulls():
    half = pa.array([np.float16(1.5), None, np.float16(4)], pa.float16())
    expected = fed([1.5, NAN, 4.0], nonfinite="omit")
    assert_same_state(fed(half, nonfinite="omit"), expected, "Arrow")
    assert_same_state(
        fed(pd.Series([1.5, None, 4], dtype=pd.ArrowDtype(pa.float16())), nonfinite="omit"),
        expected,
        "pandas",
    )


def test_columns_of_nothing_but_nulls():
    expected = fed([NAN, NAN], nonfinite="omit")
    for container in (
        np.ma.masked_all(2),
        np.ma.masked_all(2, np.int64),
        pd.Series([None, None], dtype="Int64"),
        pd.Series([None, None], dtype="Float64"),
        pl.Series([None, None]),
        pl.Series([None, None], dtype=pl.Float64),
        pa.nulls(2, pa.int64()),
        pa.nulls(2),
    ):
        assert_same_state(fed(container, nonfinite="omit"), expected, repr(container))


def test_nan_and_null_are_both_missing():
    for container in (
        pd.array(
            pd.arrays.FloatingArray(np.array([1.0, NAN, 3.0]), np.array([False, False, True]))
        ),
        pl.Series([1.0, NAN, None]),
        pa.array([1.0, NAN, None]),
        np.ma.array([1.0, NAN, 3.0], mask=[False, False, True]),
        np.ma.array([1.0, NAN, INF], mask=[False, True, False]),
    ):
        moments = fed(container, nonfinite="omit")
        assert (moments.count, moments.omitted, moments.mean()) == (1, 2, 1.0)


def test_what_is_under_a_mask_is_not_read():
    hidden = np.ma.array([1.0, NAN, 3.0, INF], mask=[0, 1, 0, 1])
    moments = fed(hidden, nonfinite="omit")
    assert (moments.count, moments.omitted, moments.mean()) == (2, 2, 2.0)
    assert hidden.data[3] == INF
    weighted = fed(hidden, [1, 0, 1, 0], weights="frequency")
    assert (weighted.count, weighted.mean()) == (2, 2.0)


@pytest.mark.parametrize("nonfinite", ["omit", "propagate"])
def test_masked_numbers_alone_in_lists_and_in_iterators(nonfinite):
    expected = fed([NAN, 1.0], nonfinite=nonfinite)
    masked = np.ma.array([5.0, 1.0], mask=[True, False])
    alone = ms.Moments(nonfinite=nonfinite).update(masked[0]).update(masked[1])
    assert_same_state(alone, expected, "np.ma.masked")
    zero_axes = np.ma.array(5.0, mask=True)
    assert_same_state(fed(zero_axes, nonfinite=nonfinite), fed(NAN, nonfinite=nonfinite), "0-d")
    assert_same_state(fed([np.ma.masked, 1.0], nonfinite=nonfinite), expected, "list")
    assert_same_state(fed(iter(masked), nonfinite=nonfinite), expected, "iterator")


@pytest.mark.parametrize("nonfinite", ["omit", "propagate"])
def test_masked_rows_in_lists_and_in_iterators(nonfinite):
    rows = np.ma.array([[1, 99], [3, 4], [99, 6]], mask=[[0, 1], [0, 0], [1, 0]])
    expected = fed([[1, NAN], [3, 4], [NAN, 6]], shape=2, nonfinite=nonfinite)
    for values in (rows, list(rows), iter(rows), rows.copy(order="F")):
        moments = fed(values, shape=2, nonfinite=nonfinite)
        assert_same_state(moments, expected, type(values).__name__)
    tapped = ms.Moments(shape=2, nonfinite=nonfinite)
    assert sum(1 for _ in tapped.tap(rows)) == 3
    assert_same_state(tapped, expected, "tap")


def test_masked_rows_of_two_axes():
    x = np.arange(24).reshape(4, 2, 3)
    mask = x % 5 == 0
    expected = fed(np.where(mask, NAN, x), shape=(2, 3), nonfinite="omit")
    masked = np.ma.array(x, mask=mask)
    assert_same_state(fed(masked, shape=(2, 3), nonfinite="omit"), expected, "masked")
    assert_same_state(
        fed(masked[0], shape=(2, 3), nonfinite="omit"),
        fed(np.where(mask, NAN, x)[0], shape=(2, 3), nonfinite="omit"),
        "one masked reading",
    )
    with pytest.raises(ms.NonFiniteError) as caught:
        fed(masked, shape=(2, 3))
    assert caught.value.position == (0, 0, 0)


@pytest.mark.parametrize("nonfinite", ["omit", "propagate"])
def test_long_masked_arrays(nonfinite):
    x = np.arange(200_000)
    mask = x % 7 == 0
    expected = fed(np.where(mask, NAN, x), nonfinite=nonfinite)
    for container in (
        np.ma.array(x, mask=mask),
        np.ma.array(x.reshape(400, 500), mask=mask.reshape(400, 500)),
        np.ma.array(x.reshape(2, 100_000).copy("F"), mask=mask.reshape(2, 100_000).copy("F")),
        np.ma.array(x.astype(float), mask=mask),
        pd.Series(pd.arrays.IntegerArray(x, mask)),
        pa.array(x, mask=mask),
        pl.Series(pa.array(x, mask=mask)),
    ):
        assert_same_state(fed(container, nonfinite=nonfinite), expected, type(container).__name__)


@pytest.mark.parametrize("value", [NAN, INF, -INF])
def test_propagation_is_that_of_numpy(value):
    x = np.arange(20_000.0)
    x[12_345] = value
    moments = fed(x, nonfinite="propagate")
    assert moments.count == x.size
    assert moments.omitted == 0
    with np.errstate(invalid="ignore"):
        for name, function in (("mean", np.mean), ("variance", np.var), ("std", np.std)):
            assert np.array_equal(getattr(moments, name)(), function(x), equal_nan=True), name
    assert np.array_equal(moments.minimum(), np.min(x), equal_nan=True)
    assert np.array_equal(moments.maximum(), np.max(x), equal_nan=True)
    assert math.isnan(moments.skewness())
    assert math.isnan(moments.kurtosis())


def test_both_infinities_propagate_to_nan():
    moments = fed([1.0, INF, -INF], nonfinite="propagate")
    assert math.isnan(moments.mean())
    assert (moments.minimum(), moments.maximum()) == (-INF, INF)


# -- pandas, Polars, Arrow -----------------------------------------------------------------------


@pytest.mark.parametrize(
    "column",
    [
        pd.Series([1.0, 2.0, 3.0, 10.0]),
        pd.Series([1, 2, 3, 10], index=list("dcba"), name="level"),
        pd.Series([1, 2, 3, 10], dtype="float32"),
        pd.Series([1, 2, 3, 10], dtype="uint8"),
        pd.Series(pd.arrays.SparseArray([1, 2, 3, 10])),
        pd.Series(pd.arrays.NumpyExtensionArray(np.array([1, 2, 3, 10]))),
        pd.Index([1.0, 2.0, 3.0, 10.0]),
        pd.array([1.0, 2.0, 3.0, 10.0]),
        pd.Series([0, 1, 2, 3, 10])[lambda s: s > 0],
        pl.Series("level", [1, 2, 3, 10], dtype=pl.Int16),
        pl.Series([1, 2, 3, 10], dtype=pl.Float32),
        pl.Series([[1.0, 2.0], [3.0, 10.0]], dtype=pl.Array(pl.Float64, 2)),
        pa.array([1, 2, 3, 10], pa.uint32()),
        pa.array([1, 2, 3, 10]).dictionary_encode(),
        pa.chunked_array([[1.0], [], [2.0, 3.0], [10.0]]),
        pd.DataFrame({"a": [1, 3], "b": [2.0, 10.0]}),
        pl.DataFrame({"a": [1, 3], "b": [2.0, 10.0]}),
        pa.table({"a": [1, 3], "b": [2.0, 10.0]}),
        pa.record_batch({"a": [1, 3], "b": [2.0, 10.0]}),
    ],
    ids=lambda c: f"{type(c).__module__.split('.')[0]} {type(c).__name__}",
)
def test_columns_and_frames_as_one_stream(column):
    assert_same_state(fed(column), plain([1, 2, 3, 10]), repr(column))


def test_ranges_of_pandas():
    assert_same_state(fed(pd.RangeIndex(3, 30, 4)), plain(range(3, 30, 4)), "RangeIndex")


def frames(columns):
    """The same columns, None for what is missing, in every kind of frame."""
    yield "pandas", pd.DataFrame({k: pd.array(v) for k, v in columns.items()})
    yield "pandas floats", pd.DataFrame({k: pd.Series(v, dtype=float) for k, v in columns.items()})
    yield (
        "pandas on Arrow",
        pd.DataFrame(
            {k: pd.Series(v, dtype=pd.ArrowDtype(pa.array(v).type)) for k, v in columns.items()}
        ),
    )
    yield "Polars", pl.DataFrame(columns)
    yield "Arrow table", pa.table(columns)
    yield "Arrow batch", pa.record_batch(columns)


@pytest.mark.parametrize("names", [("inlet", "outlet"), ("outlet", "inlet")], ids=str)
def test_frame_columns_are_matched_by_name(names):
    columns = {"inlet": [1, None, 3, 10], "outlet": [0.5, 0.25, None, 4.0]}
    expected = {
        name: fed([NAN if v is None else v for v in values], nonfinite="omit")
        for name, values in columns.items()
    }
    for kind, frame in frames(columns):
        moments = fed(frame, names=names, nonfinite="omit")
        assert moments.names == names
        assert moments.omitted.tolist() == [1, 1]
        for name in names:
            channel = moments.channel(name)
            assert (channel.count, channel.omitted) == (3, 1), kind
            assert channel.mean() == expected[name].mean(), kind
            assert channel.maximum() == expected[name].maximum(), kind


def test_frames_without_names_go_by_place():
    columns = {"b": [1, 2, 3], "a": [10.0, 20.0, 40.0]}
    for kind, frame in frames(columns):
        moments = fed(frame, shape=2)
        assert moments.mean().tolist() == [2.0, 70.0 / 3.0], kind
        assert moments.names is None


def test_frames_with_columns_that_are_no_texts():
    frame = pd.DataFrame([[1.0, 2.0], [3.0, 4.0]])
    assert_same_state(fed(frame, shape=2), fed([[1.0, 2.0], [3.0, 4.0]], shape=2), "by place")
    named = fed(frame, names=["1", "0"])
    assert named.mean().tolist() == [3.0, 2.0]


def test_frames_of_wide_integers_with_gaps():
    columns = {"a": [2**62, None, 2**62 + 2], "b": [2**62 + 5, 2**62 + 1, None]}
    for kind, frame in frames(columns):
        if kind == "pandas floats":
            continue
        moments = fed(frame, names=["a", "b"], nonfinite="omit")
        assert moments.variance().tolist() == [1.0, 4.0], kind


def test_long_frames():
    rng = np.random.default_rng(5)
    x = rng.normal(size=(50_000, 3)) + 9.0
    x[rng.random(x.shape) < 0.001] = NAN
    expected = fed(x, shape=3, nonfinite="omit")
    columns = {name: x[:, j] for j, name in enumerate("abc")}
    for frame in (
        pd.DataFrame(x),
        pd.DataFrame(columns),
        pl.DataFrame(columns),
        pa.table(columns),
        pa.table(
            {k: pa.chunked_array([v[:7], v[7:40_000], v[40_000:]]) for k, v in columns.items()}
        ),
        pa.table({k: pa.array(v, from_pandas=True) for k, v in columns.items()}),
    ):
        moments = fed(frame, shape=3, nonfinite="omit")
        assert_same_state(moments, expected, type(frame).__name__)
        flat = fed(frame, nonfinite="omit")
        assert_same_state(flat, fed(x, nonfinite="omit"), f"{type(frame).__name__}, one stream")


# -- shapes --------------------------------------------------------------------------------------


@pytest.mark.parametrize("shape", [(1,), (3,), (2, 3), (2, 1, 2), (1, 1), 4], ids=str)
def test_readings_of_a_shape(shape):
    moments = ms.Moments(shape=shape)
    shape = moments.shape
    x = np.cos(np.arange(5.0 * math.prod(shape))).reshape(5, *shape)
    expected = fed(x, shape=shape)
    assert_same_state(fed(x.tolist(), shape=shape), expected, "lists")
    assert_same_state(fed(iter(x), shape=shape), expected, "iterator of arrays")
    assert_same_state(fed(iter(x.tolist()), shape=shape), expected, "iterator of lists")
    assert_same_state(fed(x.astype(">f8"), shape=shape), expected, "big-endian")
    for row in x:
        moments.update(row)
    assert_same_state(moments, expected, "one at a time")
    assert_same_state(fed(np.asfortranarray(x), shape=shape), expected, "Fortran")
    for place in np.ndindex(*shape):
        channel = expected.channel(place)
        column = x[(slice(None), *place)]
        assert channel.count == 5
        assert channel.minimum() == column.min()
        assert_close(
            channel.variance(), Exact(column).central(2), ulps=64, label=f"{place}", inputs=column
        )
        assert expected.mean()[place] == channel.mean()


# -- weights -------------------------------------------------------------------------------------


def weight_forms(w):
    yield list(w)
    yield tuple(w)
    yield deque(w)
    yield np.array(w)
    yield np.array(w, np.float32)
    yield np.array(w, np.int8)
    yield np.array(w, ">f8")
    yield np.repeat(np.array(w), 2)[::2]
    yield array("d", w)
    yield memoryview(array("d", w))
    yield np.ma.array(w)
    yield np.ma.array(w, mask=False)
    yield pd.Series(w)
    yield pd.Series(w, dtype="Int64")
    yield pl.Series(w)
    yield pa.array(w)
    yield pa.chunked_array([w])


@pytest.mark.parametrize("kind", ["frequency", "reliability"])
def test_weights_in_every_form(kind):
    x, w = [1.0, 2.0, 3.0, 10.0], [3, 0, 2, 1]
    expected = fed(x, w, weights=kind)
    assert_promise_5_of(x, expected, w)
    for form in weight_forms(w):
        name = type(form).__name__
        for values in (x, np.array(x), pd.Series(x), np.array(x)[:, None]):
            assert_same_state(fed(values, form, weights=kind), expected, name)
        assert_same_state(fed(iter(x), form, weights=kind), expected, f"iterator and {name}")
        assert_same_state(
            fed(x, iter(np.asarray(form).tolist()), weights=kind), expected, f"{name}, iterated"
        )
        assert_same_state(
            fed([[v, -v] for v in x], form, weights=kind, shape=2),
            fed([[v, -v] for v in x], w, weights=kind, shape=2),
            f"rows and {name}",
        )


@pytest.mark.parametrize("kind", ["frequency", "reliability"])
@pytest.mark.parametrize("one", [2, 2.0, np.float32(2), np.int64(2), np.array(2), np.array(2.0)])
def test_one_weight_for_all(kind, one):
    x = np.arange(5000.0)
    expected = fed(x, np.full(5000, 2.0), weights=kind)
    for values in (x, x.tolist(), iter(x.tolist()), x[::-1][::-1], pd.Series(x), pl.Series(x)):
        assert_same_state(fed(values, one, weights=kind), expected, type(values).__name__)
    rows = x.reshape(-1, 2)
    expected = fed(rows, np.full(2500, 2.0), weights=kind, shape=2)
    for values in (rows, rows.tolist(), iter(rows), pd.DataFrame(rows)):
        assert_same_state(fed(values, one, weights=kind, shape=2), expected, "rows")
    assert_same_state(fed(3.0, one, weights=kind), fed([3.0], [2], weights=kind), "a number")


@pytest.mark.parametrize("kind", ["frequency", "reliability"])
def test_weights_beside_long_readings(kind):
    n = 150_000
    x = np.sin(np.arange(float(n)))
    w = np.arange(n) % 4
    expected = fed(x, w, weights=kind)
    for values, weights in (
        (iter(x.tolist()), iter(w.tolist())),
        (iter(x.tolist()), w),
        (x, iter(w.tolist())),
        (np.repeat(x, 2)[::2], w),
        (np.asfortranarray(x.reshape(300, 500)), w),
        (np.asfortranarray(x.reshape(300, 500)), w.reshape(300, 500)),
        (pd.DataFrame(x.reshape(300, 500)), w),
        (pd.Series(x), pd.Series(w)),
    ):
        assert_same_state(fed(values, weights, weights=kind), expected, type(values).__name__)


@pytest.mark.parametrize("nonfinite", POLICIES)
@pytest.mark.parametrize("kind", ["frequency", "reliability"])
@pytest.mark.parametrize("n", [4, 9000])
def test_weight_zero_leaves_out_even_what_is_missing(kind, nonfinite, n):
    x = np.arange(float(n))
    x[[1, 2]] = NAN, INF
    w = np.ones(n)
    w[[1, 2, 3]] = 0, 0.0, -0.0
    moments = fed(x, w, weights=kind, nonfinite=nonfinite)
    assert (moments.count, moments.omitted) == (n - 3, 0)
    assert moments.minimum() == 0.0
    assert moments.maximum() == (0.0 if n == 4 else n - 1.0)
    kept = np.delete(x, [1, 2, 3])
    assert_close(moments.mean(), Exact(kept).mean, ulps=1, label="mean")
    assert_close(moments.variance(), Exact(kept).central(2), ulps=64, label="variance")
    rows = np.stack([x, x], axis=1)
    channels = fed(rows, w, weights=kind, nonfinite=nonfinite, shape=2)
    assert channels.count.tolist() == [n - 3] * 2
    assert channels.omitted.tolist() == [0, 0]
    nothing = fed(x, 0, weights=kind, nonfinite=nonfinite)
    assert (nothing.count, nothing.omitted, nothing.weight) == (0, 0, 0.0)
    assert math.isnan(nothing.minimum())


def test_missing_readings_with_weights_are_counted_once_or_by_frequency():
    x, w = [1.0, NAN, 3.0], [2, 3, 4]
    often = fed(x, w, weights="frequency", nonfinite="omit")
    assert (often.count, often.omitted, often.weight) == (6, 3, 6.0)
    trusted = fed(x, w, weights="reliability", nonfinite="omit")
    assert (trusted.count, trusted.omitted, trusted.weight) == (2, 1, 6.0)


# -- transforms ----------------------------------------------------------------------------------

TRANSFORMS = {"log": np.log, "reciprocal": np.reciprocal, "abs": np.abs}


@pytest.mark.parametrize("transform", TRANSFORMS)
@pytest.mark.parametrize("n", [5, 9000])
def test_transforms(transform, n):
    x = np.linspace(0.5, 40.0, n) * (np.where(np.arange(n) % 2, 1, -1) if transform == "abs" else 1)
    expected = fed(TRANSFORMS[transform](x))
    for values in (x, x.tolist(), iter(x.tolist()), np.repeat(x, 2)[::2], x.astype(">f8")):
        moments = fed(values, transform=transform)
        # The logarithm is the C library's, a unit of the last place from NumPy's at most.
        assert_close(moments.mean(), Fraction(expected.mean()), ulps=4, label="mean")
        assert_close(moments.variance(), Fraction(expected.variance()), ulps=64, label="variance")
        assert_same_state(moments, fed(x, transform=transform), type(values).__name__)
        assert moments.transform == transform
    assert moments.minimum() == pytest.approx(expected.minimum(), rel=2.0**-51)
    assert moments.maximum() == pytest.approx(expected.maximum(), rel=2.0**-51)
    rows = np.stack([x, 2 * x], axis=1)
    channels = fed(rows, transform=transform, shape=2)
    assert_close(channels.mean()[0], Fraction(expected.mean()), ulps=4, label="channel")
    single = fed(x.astype(np.float32), transform=transform)
    assert_same_state(
        single, fed(x.astype(np.float32).astype(float), transform=transform), "float32"
    )


OUTSIDE = {
    "log": ([0.0, -0.0, -1.0, NAN, INF, -INF], 2.0),
    "reciprocal": ([0.0, -0.0, NAN, INF, -INF], -2.0),
    "abs": ([NAN, INF, -INF], -2.0),
}


@pytest.mark.parametrize("transform", OUTSIDE)
def test_readings_outside_the_domain_are_missing(transform):
    outside, inside = OUTSIDE[transform]
    expected = float(TRANSFORMS[transform](inside))
    for bad in outside:
        with pytest.raises(ms.NonFiniteError, match=transform):
            fed([inside, bad], transform=transform)
        for values in ([inside, bad, inside], iter([inside, bad, inside])):
            moments = fed(values, transform=transform, nonfinite="omit")
            assert (moments.count, moments.omitted) == (2, 1)
            assert moments.mean() == pytest.approx(expected, rel=2.0**-51)
            assert moments.minimum() == moments.maximum()
        left_out = fed([inside, bad], [1, 0], transform=transform, weights="reliability")
        assert (left_out.count, left_out.omitted) == (1, 0)
        with np.errstate(all="ignore"):
            image = TRANSFORMS[transform](np.array([inside, bad]))
        propagated = fed([inside, bad], transform=transform, nonfinite="propagate")
        assert propagated.count == 2
        with np.errstate(invalid="ignore"):
            wanted = np.mean(image)
        assert np.allclose(propagated.mean(), wanted, rtol=2.0**-51, atol=0, equal_nan=True), bad


def test_masked_entries_and_transforms():
    masked = np.ma.array([1.0, -5.0, 4.0], mask=[0, 1, 0])
    for transform, expected in (("log", math.log(4) / 2), ("reciprocal", 0.625), ("abs", 2.5)):
        moments = fed(masked, transform=transform, nonfinite="omit")
        assert (moments.count, moments.omitted) == (2, 1)
        assert_close(moments.mean(), Fraction(expected), ulps=2, label=transform)


def test_transforms_of_wide_integers():
    values = [-(2**62) - 1, 2**62 + 1, -(2**62) - 3, 2**62 + 3]
    for container in (values, np.array(values), iter(values), pl.Series(values)):
        assert fed(container, transform="abs").variance() == 1.0
    assert fed([-(2**63)], transform="abs").mean() == 2.0**63
    near = fed([2**62, 2**62 + 2**9], transform="log")
    # log(1 + 2**-53) apart: the logarithms themselves are rounded to 2**-48.
    assert near.std() <= 2.0**-47


# -- tap -----------------------------------------------------------------------------------------


def test_tap_counts_and_hands_on():
    moments = ms.Moments()
    items = [1.0, 2, np.float32(3), [10.0, 4.0], np.arange(3), (5, 6)]
    handed = list(moments.tap(iter(items)))
    assert all(a is b for a, b in zip(handed, items, strict=True))
    assert_same_state(moments, plain([1, 2, 3, 10, 4, 0, 1, 2, 5, 6]), "tap")


def test_tap_counts_nothing_ahead():
    moments = ms.Moments()
    tapped = moments.tap(float(i) for i in range(1000))
    assert moments.count == 0
    for expected in range(1, 4):
        next(tapped)
        assert moments.count == expected
    tapped.close()
    assert moments.count == 3


def test_tap_of_rows_and_frames():
    x = np.arange(12.0).reshape(4, 3)
    moments = ms.Moments(shape=3)
    for row in moments.tap(x):
        assert row.shape == (3,)
    assert_same_state(moments, fed(x, shape=3), "rows")
    by_chunk = ms.Moments(names=["a", "b", "c"])
    assert len(list(by_chunk.tap([pd.DataFrame(x, columns=list("abc"))]))) == 1
    assert by_chunk.mean().tolist() == [4.5, 5.5, 6.5]


# -- memory --------------------------------------------------------------------------------------


def most_memory(call):
    """Bytes allocated at the height of a call (after one that compiles and imports)."""
    call()
    gc.collect()
    tracemalloc.start()
    call()
    height = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    return height


MEGABYTE = 1 << 20


def many(n):
    return (i * 0.5 for i in range(n))


@pytest.mark.parametrize(
    "source",
    [
        lambda n: fed(many(n)),
        lambda n: fed(many(n), many(n), weights="reliability"),
        lambda n: fed(many(n), 2.0, weights="reliability"),
        lambda n: fed(many(n), transform="abs"),
        lambda n: fed(((x, x) for x in many(n // 2)), shape=2),
        lambda n: sum(1 for _ in ms.Moments().tap(many(n))),
        lambda n: fed(i for i in range(2**62, 2**62 + n)),
    ],
    ids=["numbers", "weights", "one weight", "transform", "rows", "tap", "wide integers"],
)
def test_iterators_are_read_in_bounded_memory(source):
    # A chunk of 4096 items, their weights and one block; the numbers alone would take 3 MB.
    assert most_memory(lambda: source(100_000)) < 2 * MEGABYTE


def test_iterators_of_wide_rows_are_read_in_bounded_memory():
    def rows(n):
        return (np.full(128, float(i)) for i in range(n))

    few = most_memory(lambda: fed(rows(5000), shape=128))
    more = most_memory(lambda: fed(rows(15_000), shape=128))
    assert more < few * 1.5  # some thousand rows at a time, whatever comes
    # Rows are copied as doubles, not as an object for every number.
    as_doubles = 4096 * 128 * 8
    assert few < 4 * as_doubles + most_memory(lambda: fed(np.ones((5000, 128)), shape=128))


@pytest.mark.parametrize(
    "make",
    [
        lambda n: np.zeros(2 * n)[::2],
        lambda n: np.zeros(n)[::-1],
        lambda n: np.zeros((n // 1000, 1000), order="F"),
        lambda n: np.zeros((1000, n // 1000), order="F"),
        lambda n: np.zeros((n // 4, 4), order="F"),
        lambda n: np.zeros((4, n // 4), order="F"),
        lambda n: np.zeros((50, 200, n // 10_000)).transpose(2, 0, 1),
        lambda n: np.broadcast_to(0.5, n),
        lambda n: np.zeros(n, ">f8"),
        lambda n: np.zeros(n, np.int64),
        lambda n: np.zeros(2 * n, np.float32)[::2],
        lambda n: np.ma.array(np.zeros(n), mask=np.arange(n) % 3 == 0),
        lambda n: np.ma.array(np.zeros((1000, n // 1000)), mask=np.arange(n).reshape(1000, -1) % 3),
    ],
    ids=[
        "strided",
        "backwards",
        "tall Fortran",
        "square Fortran",
        "narrow Fortran",
        "wide Fortran",
        "transposed",
        "broadcast",
        "big-endian",
        "integers",
        "float32",
        "masked",
        "masked rows",
    ],
)
def test_arrays_are_converted_in_bounded_memory(make):
    values = make(4_000_000)  # 32 MB as doubles
    assert most_memory(lambda: fed(values, nonfinite="omit")) < 12 * MEGABYTE


@pytest.mark.parametrize(
    "source",
    [
        lambda n: fed(range(n)),
        lambda n: fed([0.5] * n),
        lambda n: fed((1, 2.5) * (n // 2)),
        lambda n: fed([0.5] * n, 2.0, weights="reliability"),
    ],
    ids=["range", "list", "mixed tuple", "one weight"],
)
def test_lists_are_converted_in_bounded_memory(source):
    # The list itself takes 8 bytes an item; beyond it stands a stretch of 65536 readings.
    n = 400_000
    assert most_memory(lambda: source(n)) < 8 * n + 8 * MEGABYTE


@pytest.mark.parametrize("kind", ["frequency", "reliability"])
def test_weights_are_converted_in_bounded_memory(kind):
    x = np.ones(4_000_000)
    for w in (3, np.ones(len(x), np.int8), np.ones(2 * len(x))[::2], np.broadcast_to(2.0, len(x))):
        assert most_memory(lambda w=w: fed(x, w, weights=kind)) < 12 * MEGABYTE


@pytest.mark.parametrize("transform", TRANSFORMS)
def test_transforms_take_bounded_memory(transform):
    values = np.ones(4_000_000)
    assert most_memory(lambda: fed(values, transform=transform)) < 12 * MEGABYTE


def test_rows_are_converted_in_bounded_memory():
    for values in (
        np.zeros((1_000_000, 4), order="F"),
        np.zeros((1_000_000, 4), np.int64),
        np.broadcast_to(np.arange(4.0), (1_000_000, 4)),
        pd.DataFrame(np.zeros((1_000_000, 4))),
    ):
        assert most_memory(lambda v=values: fed(v, shape=4)) < 12 * MEGABYTE
