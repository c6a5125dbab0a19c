"""Promise 6, and every row of what bad input gets: refused in plain words, and nothing changed."""

import datetime
import decimal
import fractions
import functools
import io
import itertools
import math
import pickle

import numpy as np
import pandas as pd
import polars as pl
import pyarrow as pa
import pytest

import momentstream as ms

MILLION = 1_000_003  # readings of an iterator that then fails
NAN, INF = math.nan, math.inf


@functools.cache
def _fed(key):
    moments = ms.Moments(**dict(key))
    rows = 2100 if moments.shape else 8492
    size = rows * math.prod(moments.shape)
    x = (np.sin(np.arange(float(size))) + 2.0).reshape(rows, *moments.shape)
    if moments.weights is None:
        moments.update(x)
    else:
        moments.update(x, np.arange(rows) % 3)
    return moments


def started(**configuration):
    """An accumulator in the middle of its work: finished blocks, a part of one, waiting floats."""
    names = configuration.get("names")
    if names is not None:
        configuration["names"] = tuple(names)
    moments = _fed(tuple(configuration.items())).copy()
    if not moments.shape and moments.weights is None:
        moments.update(1.5).update(2.5)
    return moments


def refused(call, errors, words, **configuration):
    """The error of a call on a started accumulator, which must not show a trace of it.

    A twin that never saw the call stands beside it: the bytes of both are the same, and stay the
    same when both are fed further.
    """
    victim, twin = started(**configuration), started(**configuration)
    with pytest.raises(errors) as caught:
        call(victim)
    message = str(caught.value)
    for word in words:
        assert word in message, f"{word!r} is not in {message!r}"
    assert victim.to_bytes(resume=True) == twin.to_bytes(resume=True)
    more = np.full((3, *victim.shape), 1.25)
    weights = None if victim.weights is None else 2
    victim.update(more, weights)
    twin.update(more, weights)
    assert victim.to_bytes(resume=True) == twin.to_bytes(resume=True)
    return caught.value


# -- a missing reading under "raise" -------------------------------------------------------------


@pytest.mark.parametrize("value", [NAN, INF, -INF])
@pytest.mark.parametrize("dtype", [None, float, np.float64, np.float32, np.float16])
def test_a_missing_scalar(value, dtype):
    item = np.array(value) if dtype is None else dtype(value)
    error = refused(lambda m: m.update(item), ms.NonFiniteError, [repr(value), "at 0", "omit"])
    assert error.position == 0


@pytest.mark.parametrize("place", [0, 5, 4099, 8191, 8192, 29_999, 69_000])
@pytest.mark.parametrize(
    "container",
    [
        np.asarray,
        np.ndarray.tolist,
        lambda x: iter(x.tolist()),
        lambda x: x.astype(np.float32),
        lambda x: np.repeat(x, 2)[::2],
        lambda x: x.astype(">f8"),
        lambda x: np.ma.array(np.ones(x.size, int), mask=np.isnan(x)),
        pd.Series,
        lambda x: pd.array(x).astype("Float64"),
        lambda x: pl.Series(x, nan_to_null=True),
        lambda x: pa.array(x, from_pandas=True),
    ],
    ids=[
        "array",
        "list",
        "iterator",
        "float32",
        "strided",
        "big-endian",
        "masked",
        "pandas",
        "nullable",
        "polars",
        "arrow",
    ],
)
def test_the_position_of_a_missing_reading(container, place):
    x = np.ones(70_000)
    x[place] = NAN
    error = refused(lambda m: m.update(container(x)), ms.NonFiniteError, [f"at {place} ", "nan"])
    assert error.position == place
    assert type(error.position) is int


@pytest.mark.parametrize("places", [(10_000, 29_999), (3, 20_000), (8192, 16_384, 29_999)])
@pytest.mark.parametrize("threads", [1, 2])
def test_the_first_of_several_missing_readings_is_named(places, threads):
    x = np.ones(30_000)
    x[list(places)] = NAN, *[INF] * (len(places) - 1)
    error = refused(
        lambda m: m.update(x, threads=threads), ms.NonFiniteError, [f"at {places[0]} ", "nan"]
    )
    assert error.position == places[0]


def test_the_position_far_in_is_found_by_threads():
    x = np.ones(64 * 8192 * 3)
    x[-70_000] = INF
    error = refused(lambda m: m.update(x, threads=2), ms.NonFiniteError, ["inf"])
    assert error.position == x.size - 70_000


@pytest.mark.parametrize("place", [(0, 0), (3, 2), (2500, 1), (4999, 2)])
@pytest.mark.parametrize(
    "container",
    [
        np.asarray,
        np.ndarray.tolist,
        iter,
        lambda x: iter(x.tolist()),
        np.asfortranarray,
        lambda x: np.ma.array(np.zeros(x.shape, np.int64), mask=np.isnan(x)),
        pd.DataFrame,
        lambda x: pl.DataFrame(x, nan_to_null=True),
        lambda x: pa.table({str(j): pa.array(x[:, j], from_pandas=True) for j in range(3)}),
    ],
    ids=[
        "array",
        "list",
        "iterator",
        "iterator-of-lists",
        "fortran",
        "masked",
        "pandas",
        "polars",
        "arrow",
    ],
)
def test_the_row_and_column_of_a_missing_reading(container, place):
    x = np.ones((5000, 3))
    x[place] = NAN
    error = refused(
        lambda m: m.update(container(x)), ms.NonFiniteError, [f"at {place} ", "nan"], shape=3
    )
    assert error.position == place
    assert all(type(part) is int for part in error.position)


def test_the_first_of_several_missing_rows_is_named():
    x = np.ones((5000, 3))
    x[2500, 1], x[2500, 2], x[4999, 0] = NAN, INF, NAN
    error = refused(lambda m: m.update(x), ms.NonFiniteError, ["(2500, 1)"], shape=3)
    assert error.position == (2500, 1)


def test_the_position_in_readings_of_two_axes():
    x = np.ones((5000, 2, 3))
    x[2500, 1, 2] = NAN
    error = refused(lambda m: m.update(x), ms.NonFiniteError, ["(2500, 1, 2)"], shape=(2, 3))
    assert error.position == (2500, 1, 2)
    error = refused(lambda m: m.update(x[2500]), ms.NonFiniteError, ["(0, 1, 2)"], shape=(2, 3))
    assert error.position == (0, 1, 2)


def test_an_array_of_two_axes_read_as_one_stream_has_flat_positions():
    x = np.ones((300, 400))
    x[211, 17] = NAN
    for array in (x, np.asfortranarray(x), x.tolist(), pd.DataFrame(x)):
        error = refused(lambda m, array=array: m.update(array), ms.NonFiniteError, ["at 84417 "])
        assert error.position == 211 * 400 + 17


@pytest.mark.parametrize(
    ("transform", "value"),
    [
        ("log", 0.0),
        ("log", -1.0),
        ("log", NAN),
        ("log", INF),
        ("reciprocal", 0.0),
        ("reciprocal", -0.0),
        ("reciprocal", INF),
        ("abs", -INF),
    ],
)
def test_a_reading_outside_the_domain(transform, value):
    x = np.ones(20_000)
    x[11_111] = value
    error = refused(
        lambda m: m.update(x), ms.NonFiniteError, [transform, "at 11111 "], transform=transform
    )
    assert error.position == 11_111
    rows = x.reshape(-1, 2)
    error = refused(
        lambda m: m.update(rows), ms.NonFiniteError, [transform], transform=transform, shape=2
    )
    assert error.position == (5555, 1)


def test_the_error_travels_with_its_position():
    with pytest.raises(ms.NonFiniteError) as caught:
        ms.Moments(shape=2).update([[1.0, NAN]])
    back = pickle.loads(pickle.dumps(caught.value))
    assert back.position == (0, 1)
    assert str(back) == str(caught.value)


# -- what is no real number ----------------------------------------------------------------------


def with_method(name, function):
    return type("Hostile", (), {name: function})()


def itself():
    endless = []
    endless.append(endless)
    return endless


def deep():
    nested = 1.0
    for _ in range(100_000):
        nested = [nested]
    return nested


REFUSED_TYPES = {
    "str": ("12.5", ["str", "parse"]),
    "numpy str": (np.str_("1"), ["str"]),
    "bytes": (b"12", ["bytes", "frombuffer"]),
    "bytearray": (bytearray(b"12"), ["bytearray", "frombuffer"]),
    "None": (None, ["NoneType", "nan"]),
    "complex": (1j, ["complex", "real and imaginary"]),
    "complex64": (np.complex64(1), ["complex64"]),
    "longdouble": (np.longdouble(1), ["longdouble", "float()"]),
    "0-d longdouble": (np.array(1, np.longdouble), ["longdouble", "float()"]),
    "Decimal": (decimal.Decimal("0.1"), ["Decimal", "float()"]),
    "Fraction": (fractions.Fraction(1, 3), ["Fraction", "float()"]),
    "dict": ({1: 2.0}, ["dict", ".values()"]),
    "set": ({1.0}, ["set", "list"]),
    "frozenset": (frozenset([1.0]), ["frozenset", "list"]),
    "object": (object(), ["object", "number"]),
    "a class": (float, ["type", "number"]),
    "date": (datetime.date(2020, 1, 1), ["date"]),
    "timedelta": (datetime.timedelta(1), ["timedelta"]),
    "datetime64": (np.datetime64("2020"), ["datetime64"]),
    "timedelta64": (np.timedelta64(1, "s"), ["timedelta64"]),
    "void": (np.void(b"1"), ["void"]),
    "pandas NA": (pd.NA, ["NA"]),
    "pandas NaT": (pd.NaT, ["NaT"]),
    "Timestamp": (pd.Timestamp("2020"), ["Timestamp"]),
    "Arrow scalar": (pa.scalar(3.0), ["DoubleScalar"]),
    "complex array": (np.array([1j]), ["complex128", "real and imaginary"]),
    "longdouble array": (np.ones(3, np.longdouble), ["float128", "astype"]),
    "text array": (np.array(["1"]), ["<U1", "astype"]),
    "bytes array": (np.array([b"1"]), ["S1", "astype"]),
    "object array": (np.array([1.0, None]), ["object", "astype"]),
    "empty object array": (np.array([], object), ["object", "astype"]),
    "date array": (np.array(["2020"], "M8[D]"), ["datetime64", "int64"]),
    "duration array": (np.array([1], "m8[s]"), ["timedelta64", "int64"]),
    "structured array": (np.zeros(2, [("a", float)]), ["dtype", "'a'"]),
    "characters": (memoryview(b"ab").cast("c"), ["S1"]),
    "list of str": ([1.0, "2"], ["str", "parse"]),
    "list of None": ([1.0, None], ["NoneType", "nan"]),
    "list of NA": ([1.0, pd.NA], ["NAType", "nan"]),
    "list of Decimal": ([decimal.Decimal(1)], ["Decimal", "float()"]),
    "list of Fraction": ([1, fractions.Fraction(1)], ["Fraction", "float()"]),
    "list of complex": ([1.0, 1j], ["complex"]),
    "list of longdouble": ([np.longdouble(1)], ["longdouble", "float()"]),
    "list of dates": ([datetime.datetime(2020, 1, 1)], ["datetime"]),
    "list of timedelta64": ([np.timedelta64(1)], ["timedelta64"]),
    "list of sets": ([{1.0}], ["set"]),
    "list of objects": ([object()], ["object"]),
    "nested text": ([[1.0, 2.0], [3.0, "4"]], ["str"]),
    "deep in a list": ([1.0] * 5000 + ["x"], ["str"]),
    "pandas objects": (pd.Series([1, "a"], dtype=object), ["object"]),
    "pandas text": (pd.Series(["a"]), ["str"]),
    "pandas dates": (pd.Series(pd.to_datetime(["2020-01-01"])), ["datetime64"]),
    "pandas zoned dates": (pd.Series(pd.date_range("2020", periods=1, tz="UTC")), ["datetime64"]),
    "pandas categories": (pd.Series([1, 2], dtype="category"), ["category"]),
    "pandas complex": (pd.Series([1j]), ["complex"]),
    "pandas pairs": (pd.MultiIndex.from_tuples([(1, 2)]), ["object"]),
    "pandas decimals": (
        pd.Series([decimal.Decimal(1)], dtype=pd.ArrowDtype(pa.decimal128(5, 2))),
        ["decimal128"],
    ),
    "frame with text": (pd.DataFrame({"a": [1.0], "b": ["x"]}), ["str"]),
    "Polars text": (pl.Series(["a"]), ["values must be"]),
    "Polars text with null": (pl.Series(["a", None]), ["values must be"]),
    "Polars dates": (pl.Series([datetime.date(2020, 1, 1)]), ["values must be"]),
    "Polars dates with null": (pl.Series([datetime.date(2020, 1, 1), None]), ["values must be"]),
    "Polars decimals": (pl.Series([decimal.Decimal(1)]), ["values must be"]),
    "Polars decimals with null": (pl.Series([decimal.Decimal(1), None]), ["values must be"]),
    "Polars 128 bits": (pl.Series([1, 2], dtype=pl.Int128), ["values must be"]),
    "Polars categories": (pl.Series(["a", None], dtype=pl.Categorical), ["values must be"]),
    "Polars lists": (pl.Series([[1.0], [2.0, 3.0]]), ["values must be"]),
    "Polars records": (pl.Series([{"a": 1}, {"a": 2}]), ["values must be"]),
    "Polars durations": (pl.Series([datetime.timedelta(1), None]), ["values must be"]),
    "Polars plan": (pl.LazyFrame({"a": [1.0]}), ["LazyFrame"]),
    "Polars expression": (pl.col("a"), ["Expr"]),
    "Arrow text": (pa.array(["a"]), ["values must be"]),
    "Arrow text with null": (pa.array(["a", None]), ["values must be"]),
    "Arrow dates": (pa.array([datetime.date(2020, 1, 1), None]), ["values must be"]),
    "Arrow decimals": (pa.array([decimal.Decimal(1), None]), ["values must be"]),
    "Arrow lists": (pa.array([[1.0], None]), ["values must be"]),
    "Arrow records": (pa.array([{"a": 1}, None]), ["values must be"]),
    "Arrow schema": (pa.schema([("a", pa.int64())]), ["Schema"]),
    "Arrow table with text": (pa.table({"a": ["x"]}), ["values must be"]),
}


REFUSED_ITERATORS = {
    "characters of a text": (lambda: (c for c in "12"), ["str", "parse"]),
    "lines of a file": (lambda: io.StringIO("1\n2\n"), ["str", "parse"]),
    "iterator of None": (lambda: iter([1.0, None]), ["NoneType"]),
    "iterator of pairs": (lambda: zip([1.0], [2.0], strict=True), ["tuple"]),
    "iterator of arrays": (lambda: iter([np.ones(2)]), ["ndarray"]),
}


@pytest.mark.parametrize("name", REFUSED_TYPES)
@pytest.mark.parametrize("nonfinite", ["raise", "omit"])
def test_what_is_no_real_number(name, nonfinite):
    values, words = REFUSED_TYPES[name]
    refused(lambda m: m.update(values), TypeError, words, nonfinite=nonfinite)


@pytest.mark.parametrize("name", REFUSED_ITERATORS)
def test_iterators_of_what_is_no_real_number(name):
    make, words = REFUSED_ITERATORS[name]
    refused(lambda m: m.update(make()), TypeError, words)


@pytest.mark.parametrize(
    "values",
    [
        [[1.0, 2.0], [3.0]],
        [1.0, [2.0]],
        [[1.0], 2.0],
        [[[1.0]], [[1.0, 2.0]]],
        [np.ones(2), np.ones(3)],
        [(1.0, 2.0), [3.0, 4.0], []],
    ],
    ids=str,
)
def test_ragged_lists(values):
    refused(lambda m: m.update(values), ValueError, ["ragged", "shape"])


@pytest.mark.parametrize("make", [itself, deep])
def test_lists_without_a_bottom(make):
    values = make()
    refused(lambda m: m.update(values), (TypeError, ValueError), [])


@pytest.mark.parametrize(
    "value",
    [2**64, -(2**63) - 1, 10**400, -(10**400)],
    ids=["2**64", "-2**63-1", "10**400", "-10**400"],
)
def test_integers_out_of_range(value):
    words = ["-2**63", "2**64 - 1", str(value)[:20]]
    refused(lambda m: m.update(value), ValueError, words)
    refused(lambda m: m.update([1.0, value]), ValueError, [*words, "1"])
    refused(lambda m: m.update([[1, 2], [3, value]]), ValueError, words)
    refused(lambda m: m.update(iter([1.0] * 5000 + [value])), ValueError, [*words, "5000"])


def test_containers_that_fail_of_themselves():
    def fails(self, *arguments, **options):
        raise OSError("the logger does not answer")

    for name in ("__array__", "__iter__"):
        refused(
            lambda m, name=name: m.update(with_method(name, fails)), OSError, ["does not answer"]
        )
    for name in ("__float__", "__getitem__"):
        refused(lambda m, name=name: m.update(with_method(name, fails)), TypeError, ["Hostile"])


# -- iterators that end badly --------------------------------------------------------------------


def ends_with(last):
    """More than a million readings, then something else; an exception is raised."""
    yield from itertools.repeat(2.5, MILLION)
    if isinstance(last, BaseException):
        raise last
    yield last


@pytest.mark.parametrize(
    ("last", "error", "words"),
    [
        (OSError("the logger does not answer"), OSError, ["does not answer"]),
        (KeyboardInterrupt(), KeyboardInterrupt, []),
        (NAN, ms.NonFiniteError, [f"at {MILLION} ", "nan"]),
        (-INF, ms.NonFiniteError, [f"at {MILLION} ", "-inf"]),
        (None, TypeError, ["NoneType"]),
        ("1.0", TypeError, ["str"]),
        (2**70, ValueError, ["2**64 - 1"]),
    ],
    ids=repr,
)
def test_an_iterator_that_fails_after_a_million(last, error, words):
    caught = refused(lambda m: m.update(ends_with(last)), error, words)
    if error is ms.NonFiniteError:
        assert caught.position == MILLION


@pytest.mark.parametrize(
    ("last", "error", "words"),
    [
        (OSError("the logger does not answer"), OSError, ["does not answer"]),
        (-1.0, ValueError, ["weights", "-1.0", str(MILLION)]),
        (NAN, ValueError, ["weights", "nan", str(MILLION)]),
        (None, TypeError, ["weights", "NoneType"]),
    ],
    ids=repr,
)
def test_weights_that_fail_after_a_million(last, error, words):
    def readings():
        return itertools.repeat(2.5, MILLION + 1)

    refused(lambda m: m.update(readings(), ends_with(last)), error, words, weights="reliability")


def test_an_iterator_of_rows_that_fails():
    def rows(last):
        yield from itertools.repeat([1.0, 2.0], 20_000)
        yield last

    error = refused(lambda m: m.update(rows([1.0, NAN])), ms.NonFiniteError, ["nan"], shape=2)
    assert error.position == (20_000, 1)
    for last in ([1.0], [1.0, 2.0, 3.0], 1.0):
        refused(lambda m, last=last: m.update(rows(last)), ValueError, ["shape"], shape=2)
    refused(lambda m: m.update(rows([1.0, "2"])), TypeError, ["str"], shape=2)


def test_scalars_are_no_rows_however_many_come():
    for many in (1, 2, 3, 4, 8):
        values = [1.0] * many
        refused(lambda m, v=values: m.update(iter(v)), ValueError, ["shape", "(2,)"], shape=2)
    refused(
        lambda m: m.update(iter([[1.0, 2.0, 3.0], [4.0, 5.0, 6.0]])),
        ValueError,
        ["shape", "(2, 3)"],
        shape=(2, 3),
    )


def test_an_iterator_that_feeds_the_accumulator_it_is_read_by():
    moments = ms.Moments()
    pairs = [np.array([1.0, 2.0]), np.array([3.0, 5.0])]
    try:
        moments.update(float(pair.sum()) for pair in moments.tap(pairs))
    except (RuntimeError, ValueError):
        assert moments.count == 0
    else:
        assert moments == ms.Moments().update([1.0, 2.0, 3.0, 5.0, 3.0, 8.0])


# -- weights -------------------------------------------------------------------------------------

BAD_WEIGHTS = {
    "missing": (None, ValueError, ["weights", "missing"]),
    "negative": ([1.0, -0.5, 1.0], ValueError, ["weights", "-0.5", "at 1"]),
    "nan": ([1.0, 1.0, NAN], ValueError, ["weights", "nan", "at 2"]),
    "infinite": ([INF, 1.0, 1.0], ValueError, ["weights", "inf", "at 0"]),
    "negative for all": (-1, ValueError, ["weights", "-1.0"]),
    "nan for all": (NAN, ValueError, ["weights", "nan"]),
    "too few": ([1.0, 1.0], ValueError, ["weights", "3 readings", "2 weights"]),
    "too many": ([1.0] * 4, ValueError, ["weights", "3 readings", "4 weights"]),
    "one in a list": ([1.0], ValueError, ["weights", "3 readings", "1 weights"]),
    "none": ([], ValueError, ["weights", "3 readings", "0 weights"]),
    "masked": (np.ma.array([1, 2, 3], mask=[0, 1, 0]), ValueError, ["weights", "missing", "1"]),
    "NA": (pd.Series([1, 2, None], dtype="Int64"), ValueError, ["weights", "missing", "2"]),
    "null": (pl.Series([None, 2, 3]), ValueError, ["weights", "missing", "0"]),
    "Arrow null": (pa.array([None, 2, 3]), ValueError, ["weights", "missing", "0"]),
    "str": ("abc", TypeError, ["weights", "str"]),
    "bytes": (b"abc", TypeError, ["weights", "bytes"]),
    "complex": (1j, TypeError, ["weights", "complex"]),
    "list of None": ([1.0, None, 1.0], TypeError, ["weights", "NoneType"]),
    "list of str": ([1.0, "1", 1.0], TypeError, ["weights", "str"]),
    "nested": ([[1.0, 1.0, 1.0]], (TypeError, ValueError), ["weights"]),
    "dict": ({1: 2.0, 2: 2.0, 3: 2.0}, TypeError, ["weights"]),
    "set": ({1.0, 2.0, 3.0}, TypeError, ["weights"]),
    "object": (object(), TypeError, ["weights"]),
    "dates": (np.array([1, 2, 3], "M8[s]"), TypeError, ["weights", "datetime64"]),
    "longdouble": (np.longdouble(1), TypeError, ["weights"]),
    "Decimal": (decimal.Decimal(1), TypeError, ["weights"]),
}


@pytest.mark.parametrize("beside", ["array", "list", "iterator", "rows"])
@pytest.mark.parametrize("kind", ["frequency", "reliability"])
@pytest.mark.parametrize("name", BAD_WEIGHTS)
def test_bad_weights(name, kind, beside):
    weights, errors, words = BAD_WEIGHTS[name]
    values = {
        "array": np.array([1.0, 2.0, 3.0]),
        "list": [1.0, 2.0, 3.0],
        "iterator": [1.0, 2.0, 3.0],
        "rows": np.ones((3, 2)),
    }[beside]
    configuration = {"weights": kind, "shape": 2 if beside == "rows" else ()}
    if beside == "iterator":
        # What is missing, how many there are and the like are said in other words here.
        words, errors = ["weights"], (TypeError, ValueError)
        refused(lambda m: m.update(iter(values), weights), errors, words, **configuration)
    else:
        refused(lambda m: m.update(values, weights), errors, words, **configuration)


@pytest.mark.parametrize("weights", [1.5, [1.0, 0.25, 1.0], np.float32(0.1)], ids=repr)
def test_fractional_frequencies(weights):
    words = ["frequencies", "whole", "reliability"]
    refused(lambda m: m.update([1.0] * 3, weights), ValueError, words, weights="frequency")
    refused(lambda m: m.update(np.ones((3, 2)), weights), ValueError, words, weights="frequency",
            shape=2)  # fmt: skip


@pytest.mark.parametrize(
    "weights", [2**53 + 1, 2.0**54, [1, 2**53 + 1], np.array([1, 2**60])], ids=repr
)
def test_frequencies_beyond_what_is_counted_exactly(weights):
    refused(lambda m: m.update([1.0, 2.0], weights), ValueError, ["2**53"], weights="frequency")


@pytest.mark.parametrize("kind", ["frequency", "reliability"])
@pytest.mark.parametrize(
    ("place", "n"), [(8, 20), (8000, 9000), (20_000, 30_000), (190_000, 200_000)]
)
def test_the_position_of_a_bad_weight(kind, place, n):
    w = np.ones(n)
    w[place] = -2.0
    words = ["weights", "-2.0", f"at {place};"]
    for x in (np.ones(n), np.ones(2 * n)[::2], np.ones((n, 2))):
        refused(lambda m, x=x: m.update(x, w), ValueError, words, weights=kind, shape=x.shape[1:])
    refused(lambda m: m.update(iter([1.0] * n), iter(w)), ValueError, words, weights=kind)


def test_weights_that_nobody_declared():
    words = ["weights", "frequency", "reliability"]
    for values, weights in ((1.0, 1.0), ([1.0], [1.0]), (np.ones(3), 0), (iter([1.0]), iter([1]))):
        refused(lambda m, v=values, w=weights: m.update(v, w), ValueError, words)


def test_readings_and_weights_of_other_lengths_in_iterators():
    for n, many in ((3, 2), (3, 4), (4096, 4095), (4096, 4097), (5000, 4096), (0, 1), (1, 0)):
        fewer = "weights" if many < n else "readings"
        refused(
            lambda m, n=n, many=many: m.update(iter([1.0] * n), iter([1.0] * many)),
            ValueError,
            ["weights", f"the {fewer} ran out"],
            weights="reliability",
        )


@pytest.mark.parametrize("kind", ["frequency", "reliability"])
def test_tap_of_weighted_readings_says_that_weights_are_missing(kind):
    refused(lambda m: list(m.tap([1.0, 2.0])), ValueError, ["weights", "missing"], weights=kind)


@pytest.mark.parametrize("nonfinite", ["omit", "propagate", "raise"])
@pytest.mark.parametrize("n", [1100, 2048, 8191, 8192, 10_000])
def test_a_count_beyond_63_bits(n, nonfinite):
    values = np.full(n, 1.0 if nonfinite == "raise" else NAN)
    moments = ms.Moments(weights="frequency", nonfinite=nonfinite).update([1.0, 2.0], [3, 4])
    before = moments.to_bytes(resume=True)
    with pytest.raises(ValueError, match=r"2\*\*63"):
        moments.update(values, 2**53)
    assert moments.to_bytes(resume=True) == before
    half = ms.Moments(weights="frequency").update(np.ones(1000), 2**53)
    assert half.count == 1000 * 2**53
    with pytest.raises(ms.MergeError, match=r"2\*\*63"):
        half.merge(half)
    assert half.count == 1000 * 2**53


# -- shapes and frames ---------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("shape", "values"),
    [
        ((3,), np.ones((4, 2))),
        ((3,), np.ones((3, 4))),
        ((3,), np.ones(4)),
        ((3,), np.ones((2, 2, 3))),
        ((3,), np.ones((0, 4))),
        ((3,), [[1.0, 2.0]]),
        ((3,), 1.0),
        ((3,), 1),
        ((3,), np.array(1.0)),
        ((1,), 1.0),
        ((1,), [1.0, 2.0]),
        ((2, 3), np.ones((5, 3, 2))),
        ((2, 3), np.ones((5, 6))),
        ((2, 3), np.ones(6)),
        ((2, 3), np.ones((3, 2))),
    ],
    ids=lambda x: str(np.shape(x) if not isinstance(x, tuple) else x),
)
def test_chunks_of_another_shape(shape, values):
    words = ["shape", str(shape), str(np.shape(values))]
    refused(lambda m: m.update(values), ValueError, words, shape=shape)


def frames(columns):
    """The same columns in every kind of frame."""
    yield pd.DataFrame(columns)
    yield pl.DataFrame(columns)
    yield pa.table(columns)
    yield pa.record_batch(columns)


def test_frames_that_do_not_match_the_names():
    for columns, words in (
        ({"inlet": [1.0], "return": [2.0]}, ["missing", "outlet", "extra", "return"]),
        ({"inlet": [1.0]}, ["missing", "outlet"]),
        ({"inlet": [1.0], "outlet": [2.0], "return": [3.0]}, ["extra", "return"]),
        ({"Inlet": [1.0], "outlet": [2.0]}, ["missing", "inlet", "extra", "Inlet"]),
    ):
        for frame in frames(columns):
            refused(lambda m, f=frame: m.update(f), ValueError, words, names=["inlet", "outlet"])


def test_frames_of_another_width():
    for frame in frames({"a": [1.0], "b": [2.0]}):
        refused(lambda m, f=frame: m.update(f), ValueError, ["2 columns", "3 channels"], shape=3)
        refused(lambda m, f=frame: m.update(f), ValueError, ["(2, 1)"], shape=(2, 1))


def test_a_frame_with_two_columns_of_one_name():
    twice = pd.DataFrame([[1.0, 2.0]], columns=["inlet", "inlet"])
    refused(lambda m: m.update(twice), ValueError, ["inlet"], names=["inlet", "outlet"])


@pytest.mark.parametrize("threads", [0, -1, 1.5, True, None, "2"], ids=repr)
def test_threads(threads):
    errors = (TypeError, ValueError)
    refused(lambda m: m.update([1.0], threads=threads), errors, ["threads", repr(threads)])
    if threads is not True:  # which equals 1, and does no harm to a single float
        refused(lambda m: m.update(1.0, threads=threads), errors, ["threads", repr(threads)])


# -- merging and removing ------------------------------------------------------------------------

DIFFERENT = {
    "order": ({"order": 4}, {"order": 2}, ["order=4", "order=2"]),
    "odd order": ({"order": 4}, {"order": 3}, ["order=4", "order=3"]),
    "shape": ({}, {"shape": 2}, ["shape=()", "shape=(2,)"]),
    "shapes": ({"shape": (2, 3)}, {"shape": (3, 2)}, ["(2, 3)", "(3, 2)"]),
    "same size": ({"shape": 4}, {"shape": (2, 2)}, ["(4,)", "(2, 2)"]),
    "weights": ({}, {"weights": "frequency"}, ["weights=None", "weights='frequency'"]),
    "kinds": ({"weights": "frequency"}, {"weights": "reliability"}, ["frequency", "reliability"]),
    "transform": ({}, {"transform": "log"}, ["transform=None", "transform='log'"]),
    "transforms": ({"transform": "abs"}, {"transform": "log"}, ["abs", "log"]),
    "names": ({"names": ["a", "b"]}, {"names": ["a", "c"]}, ["('a', 'b')", "('a', 'c')"]),
    "order of names": ({"names": ["a", "b"]}, {"names": ["b", "a"]}, ["('a', 'b')", "('b', 'a')"]),
}


@pytest.mark.parametrize("verb", ["merge", "remove"])
@pytest.mark.parametrize("name", DIFFERENT)
def test_parts_that_do_not_fit(name, verb):
    mine, theirs, words = DIFFERENT[name]
    for left, right in ((mine, theirs), (theirs, mine)):
        other = started(**right)
        kept = other.to_bytes(resume=True)
        words = [*words, "hanged"]  # nothing was changed, in whatever place of the sentence
        refused(lambda m, v=verb, o=other: getattr(m, v)(o), ms.MergeError, words, **left)
        assert other.to_bytes(resume=True) == kept
        refused(lambda m, o=other: m + o, ms.MergeError, words, **left)
        refused(lambda m, o=other: ms.combine([m, o]), ms.MergeError, words, **left)


@pytest.mark.parametrize("verb", ["merge", "remove"])
@pytest.mark.parametrize("other", [None, 3, [1.0], b"state", "text"], ids=repr)
def test_what_is_no_accumulator_does_not_merge(other, verb):
    words = ["Moments", type(other).__name__]
    refused(lambda m: getattr(m, verb)(other), (ms.MergeError, TypeError), words)


def test_a_summary_does_not_merge():
    summary = started().summary()
    refused(lambda m: m.merge(summary), (ms.MergeError, TypeError), ["Moments", "Summary"])


def test_adding_what_is_no_accumulator():
    for other in (5, 0, "x", None, [1.0]):
        refused(lambda m, o=other: m + o, TypeError, [])
    for other in (5, 0.5, "x", None):
        refused(lambda m, o=other: o + m, TypeError, [])


def test_combining_what_is_none():
    moments = started()
    with pytest.raises(ValueError, match="at least one"):
        ms.combine([])
    with pytest.raises(TypeError, match="int"):
        ms.combine([moments, 5])
    with pytest.raises(TypeError, match="iterable"):
        ms.combine(moments)
    assert moments == started()


def test_removing_more_than_there_is():
    words = ["more", "removed", "hanged"]
    larger = started().update([1.0, 2.0])
    refused(lambda m: m.remove(larger), ms.MergeError, [*words, "8496", "8494"])
    heavier = ms.Moments(weights="reliability").update([1.0], 1e6)
    refused(lambda m: m.remove(heavier), ms.MergeError, words, weights="reliability")
    often = ms.Moments(weights="frequency").update([1.0], 1_000_000)
    refused(lambda m: m.remove(often), ms.MergeError, words, weights="frequency")
    gaps = ms.Moments(nonfinite="omit").update([NAN, 1.0])
    refused(lambda m: m.remove(gaps), ms.MergeError, [*words, "omitted"])
    wide = started(shape=3).update(np.ones((1, 3)))
    refused(lambda m: m.remove(wide), ms.MergeError, words, shape=3)


# -- orders --------------------------------------------------------------------------------------

NEEDS = {
    "variance": 2,
    "std": 2,
    "rms": 2,
    "ac_rms": 2,
    "power": 2,
    "crest_factor": 2,
    "skewness": 3,
    "kurtosis": 4,
}


@pytest.mark.parametrize("order", range(1, 5))
@pytest.mark.parametrize("shape", [(), (2,)], ids=str)
def test_a_statistic_above_the_order(order, shape):
    for name, least in NEEDS.items():
        if least <= order:
            assert np.all(np.isfinite(getattr(started(order=order, shape=shape), name)()))
            continue
        words = [f"order={least}", f"order={order}", "Moments"]
        refused(lambda m, f=name: getattr(m, f)(), ms.OrderError, words, order=order, shape=shape)
        with pytest.raises(ms.OrderError, match=f"order={least}") as caught:
            getattr(started(order=order, shape=shape).summary(), name)()
        assert "Summary" in str(caught.value)


@pytest.mark.parametrize("order", [1, 2, 3, 4, 7, 15])
def test_a_moment_above_the_order(order):
    for name in ("central", "raw", "standardized", "cumulant"):
        words = [f"order={order + 1}", f"order={order}"]
        refused(lambda m, f=name: getattr(m, f)(order + 1), ms.OrderError, words, order=order)
    if order < 6:
        words = [f"order={order + 1}", f"order={order}"]
        refused(lambda m: m.k_statistic(order + 1), ms.OrderError, words, order=order)


def test_a_moment_that_no_order_keeps():
    """The cure must be one that helps: no accumulator has order 17."""
    for name in ("central", "raw", "standardized", "cumulant"):
        with pytest.raises(ValueError, match="16") as caught:
            getattr(started(), name)(17)
        assert "order=17 or higher" not in str(caught.value)
    with pytest.raises(ValueError, match="at most 6"):
        started().k_statistic(7)
    with pytest.raises(ValueError, match="at most 4"):
        started(order=3, weights="reliability").k_statistic(5)


@pytest.mark.parametrize("name", ["central", "raw", "standardized", "cumulant", "k_statistic"])
@pytest.mark.parametrize("k", [2.0, "2", None, 2.5, [2]], ids=repr)
def test_an_order_that_is_no_integer(name, k):
    refused(lambda m: getattr(m, name)(k), TypeError, ["k must be", repr(k)])


@pytest.mark.parametrize("name", ["central", "raw", "standardized", "cumulant", "k_statistic"])
def test_an_order_below_the_least(name):
    least = 1 if name in ("cumulant", "k_statistic") else 0
    for k in (least - 1, -7):
        refused(lambda m, k=k: getattr(m, name)(k), ValueError, ["k must be", str(least), str(k)])


# -- too little to know --------------------------------------------------------------------------


@pytest.mark.parametrize("weights", [None, "frequency", "reliability"])
@pytest.mark.parametrize("values", [[], [5.0], [5.0, 5.0], [5.0] * 20, [5.0] * 9000], ids=len)
def test_no_readings_or_no_spread_is_nan(values, weights):
    moments = ms.Moments(6, weights=weights).update(values, None if weights is None else 1)
    n = len(values)
    empty = NAN if n == 0 else 0.0
    expected = {
        "mean": 5.0 + empty,
        "dc": 5.0 + empty,
        "variance": empty,
        "std": empty,
        "ac_rms": empty,
        "rms": 5.0 + empty,
        "power": 25.0 + empty,
        "skewness": NAN,
        "kurtosis": NAN,
        "crest_factor": NAN,
        "minimum": 5.0 + empty,
        "maximum": 5.0 + empty,
    }
    for source in (moments, moments.summary()):
        for name, value in expected.items():
            got = getattr(source, name)()
            assert type(got) is float
            assert got == value or (math.isnan(got) and math.isnan(value)), name
        for name in ("skewness", "kurtosis"):
            assert math.isnan(getattr(source, name)(bias=False))
        assert math.isnan(source.kurtosis(excess=False))
        for k in range(2, 7):
            assert source.central(k) == empty or n == 0
            assert math.isnan(source.standardized(k))
        for ddof in (n, n + 1, n + 0.5, 1e9, NAN):
            assert math.isnan(source.variance(ddof))
            assert math.isnan(source.std(ddof))
        for k in range(2, 5):
            assert math.isnan(source.k_statistic(k)) == (n < k)


# -- making ---------------------------------------------------------------------------------------

BAD_ARGUMENTS = {
    "order 0": ({"order": 0}, ValueError, ["order", "1 to 16", "0"]),
    "order 17": ({"order": 17}, ValueError, ["order", "1 to 16", "17"]),
    "order -1": ({"order": -1}, ValueError, ["order", "1 to 16", "-1"]),
    "order 4.0": ({"order": 4.0}, TypeError, ["order", "1 to 16", "4.0"]),
    "order '4'": ({"order": "4"}, TypeError, ["order", "1 to 16", "'4'"]),
    "order True": ({"order": True}, TypeError, ["order", "1 to 16", "True"]),
    "order None": ({"order": None}, TypeError, ["order", "1 to 16", "None"]),
    "shape 0": ({"shape": 0}, ValueError, ["shape", "at least 1", "0"]),
    "shape -3": ({"shape": (2, -3)}, ValueError, ["shape", "at least 1", "-3"]),
    "shape text": ({"shape": "3"}, TypeError, ["shape", "'3'"]),
    "shape 1.5": ({"shape": 1.5}, TypeError, ["shape", "1.5"]),
    "shape (2, 1.5)": ({"shape": (2, 1.5)}, TypeError, ["shape", "1.5"]),
    "shape True": ({"shape": True}, TypeError, ["shape", "True"]),
    "shape None": ({"shape": None}, TypeError, ["shape", "None"]),
    "shape array": ({"shape": np.array([2, 3])}, TypeError, ["shape", "array"]),
    "shape 2**62": ({"shape": 2**62}, (ValueError, MemoryError), ["shape"]),
    "shape 2**70": ({"shape": 2**70}, (ValueError, MemoryError), ["shape"]),
    "shape 2**40 twice": ({"shape": (2**40, 2**40)}, (ValueError, MemoryError), ["shape"]),
    "names text": ({"names": "inlet"}, TypeError, ["names", "'inlet'"]),
    "names number": ({"names": 5}, TypeError, ["names", "5"]),
    "names of numbers": ({"names": [1, 2]}, TypeError, ["names", "1"]),
    "names twice": ({"names": ["a", "b", "a"]}, ValueError, ["names", "a"]),
    "no names": ({"names": []}, ValueError, ["names", "at least one"]),
    "names and shape": ({"names": ["a", "b"], "shape": 3}, ValueError, ["(3,)", "2 names"]),
    "names and axes": ({"names": ["a"], "shape": (1, 1)}, ValueError, ["(1, 1)", "1 names"]),
    "half a character": ({"names": ["\ud800"]}, (TypeError, ValueError), ["names"]),
    "weights text": ({"weights": "freq"}, ValueError, ["weights", "'freq'", "reliability"]),
    "weights True": ({"weights": True}, TypeError, ["weights", "True", "reliability"]),
    "weights list": ({"weights": [1.0]}, TypeError, ["weights", "[1.0]", "reliability"]),
    "nonfinite text": ({"nonfinite": "skip"}, ValueError, ["nonfinite", "'skip'", "omit"]),
    "nonfinite None": ({"nonfinite": None}, (TypeError, ValueError), ["nonfinite", "None", "omit"]),
    "nonfinite True": ({"nonfinite": True}, TypeError, ["nonfinite", "True", "omit"]),
    "transform text": ({"transform": "sqrt"}, ValueError, ["transform", "'sqrt'", "reciprocal"]),
    "transform function": ({"transform": math.log}, TypeError, ["transform", "log", "reciprocal"]),
    "unknown": ({"half_life": 3}, TypeError, ["half_life"]),
}


@pytest.mark.parametrize("name", BAD_ARGUMENTS)
def test_bad_arguments(name):
    arguments, errors, words = BAD_ARGUMENTS[name]
    with pytest.raises(errors) as caught:
        ms.Moments(**arguments)
    for word in words:
        assert word in str(caught.value)
    assert not isinstance(caught.value, UnicodeError)


def test_only_the_order_goes_by_place():
    with pytest.raises(TypeError, match="positional"):
        ms.Moments(4, 3)


@pytest.mark.parametrize("axes", [1, 8, 31, 32])
def test_what_can_be_made_can_be_saved(axes):
    moments = ms.Moments(shape=(1,) * axes).update(np.full((3, *(1,) * axes), 2.0))
    for resume in (False, True):
        assert ms.from_bytes(moments.to_bytes(resume)) == moments


@pytest.mark.parametrize("axes", [33, 64, 300])
def test_more_axes_than_a_state_holds(axes):
    with pytest.raises(ValueError, match="shape"):
        ms.Moments(shape=(1,) * axes)


BAD_CENTRAL = {
    "no count": ((0.0, [1.0]), {}, TypeError, ["count"]),
    "count 0": ((0.0, [1.0]), {"count": 0}, ValueError, ["count", "at least 1", "0"]),
    "count 2.0": ((0.0, [1.0]), {"count": 2.0}, TypeError, ["count", "2.0"]),
    "count text": ((0.0, [1.0]), {"count": "2"}, TypeError, ["count", "'2'"]),
    "count too large": ((0.0, [1.0]), {"count": 2**63}, ValueError, ["count", "2**63"]),
    "mean text": (("1", [1.0]), {"count": 2}, TypeError, ["mean", "'1'"]),
    "mean None": ((None, [1.0]), {"count": 2}, (TypeError, ValueError), ["mean", "None"]),
    "mean complex": ((1j, [1.0]), {"count": 2}, TypeError, ["mean", "1j"]),
    "mean nan": ((NAN, [1.0]), {"count": 2}, ValueError, ["mean", "finite", "nan"]),
    "central inf": ((0.0, [1.0, INF]), {"count": 2}, ValueError, ["central[1]", "finite", "inf"]),
    "central text": ((0.0, ["1"]), {"count": 2}, TypeError, ["central[0]", "'1'"]),
    "central number": ((0.0, 1.0), {"count": 2}, TypeError, ["central", "1.0"]),
    "variance < 0": ((0.0, [-1.0]), {"count": 2}, ValueError, ["central moment 2", "-1.0"]),
    "fourth < 0": ((0.0, [1, 0, -1]), {"count": 2}, ValueError, ["central moment 4", "-1.0"]),
    "spread of one": ((0.0, [1.0]), {"count": 1}, ValueError, ["one reading", "spread"]),
    "too many": ((0.0, [1.0] * 16), {"count": 3}, ValueError, ["central", "15", "16"]),
    "other shape": (([0.0, 1.0], [1.0]), {"count": 3}, ValueError, ["central[0]", "(2,)", "()"]),
    "minimum text": ((0.0, [1.0]), {"count": 3, "minimum": "x"}, TypeError, ["minimum", "'x'"]),
    "minimum shape": ((0.0, [1.0]), {"count": 3, "minimum": [1, 2]}, ValueError, ["minimum"]),
    "extremes crossed": ((0.0, [1.0]), {"count": 3, "minimum": 2, "maximum": -2}, ValueError,
                         ["minimum", "maximum"]),
}  # fmt: skip


@pytest.mark.parametrize("name", BAD_CENTRAL)
def test_bad_moments_for_an_accumulator(name):
    arguments, options, errors, words = BAD_CENTRAL[name]
    with pytest.raises(errors) as caught:
        ms.Moments.from_central(*arguments, **options)
    for word in words:
        assert word in str(caught.value)


@pytest.mark.parametrize(
    ("scale", "offset", "errors", "words"),
    [
        ("2", 0.0, TypeError, ["scale", "'2'"]),
        (None, 0.0, TypeError, ["scale", "None"]),
        (1j, 0.0, TypeError, ["scale", "1j"]),
        (NAN, 0.0, ValueError, ["scale", "finite", "nan"]),
        (1.0, INF, ValueError, ["offset", "finite", "inf"]),
        (1.0, [1.0], TypeError, ["offset"]),
    ],
    ids=repr,
)
def test_bad_affine_maps(scale, offset, errors, words):
    refused(lambda m: m.affine(scale, offset), errors, words)
    refused(lambda m: m.summary().affine(scale, offset), errors, words)


@pytest.mark.parametrize("transform", ["log", "reciprocal", "abs"])
def test_affine_of_transformed_readings(transform):
    words = [f"transform={transform!r}", "summary().affine"]
    refused(lambda m: m.affine(2.0), ValueError, words, transform=transform)


@pytest.mark.parametrize(
    ("which", "errors", "words"),
    [
        (3, IndexError, ["3", "(3,)"]),
        (-4, IndexError, ["-4", "(3,)"]),
        ((0, 0), IndexError, ["(3,)"]),
        ("return", KeyError, ["return", "inlet"]),
        (None, TypeError, ["None"]),
        (1.0, TypeError, ["1.0"]),
    ],
    ids=repr,
)
def test_channels_that_are_not_there(which, errors, words):
    names = ["inlet", "outlet", "bypass"]
    refused(lambda m: m.channel(which), errors, words, names=names)
    with pytest.raises(ValueError, match="no channels"):
        started().channel(0)


def test_tap_refuses_at_the_item_and_keeps_those_before():
    moments = ms.Moments()
    seen = []
    with pytest.raises(ms.NonFiniteError):
        seen.extend(moments.tap([1.0, 2.0, NAN, 4.0]))
    assert seen == [1.0, 2.0]
    assert moments == ms.Moments().update([1.0, 2.0])
    with pytest.raises(TypeError, match="int"):
        list(moments.tap(5))
