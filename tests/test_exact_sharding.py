"""Promises 1 to 3 and 8 for ``ExactMoments``: any order, any sharding, removed again: same bits."""

import copy
import functools
import itertools
import math
import pickle
import struct
from fractions import Fraction

import numpy as np
import pandas as pd
import polars as pl
import pyarrow as pa
import pytest
from assertions import assert_close
from exact import Exact, assert_promise_5, blocks_of
from hypothesis import given, settings
from hypothesis import strategies as st

import momentstream as ms

NAN, INF = math.nan, math.inf
ORDERS = (1, 2, 3, 4)


def exact(*parts, **configuration):
    accumulator = ms.ExactMoments(**configuration)
    for part in parts:
        accumulator.update(part)
    return accumulator


def content(accumulator):
    """The bytes before the extremes, without the frame's head."""
    data = accumulator.to_bytes()[24:]
    (exponents,) = struct.unpack_from("<H", data, 42)
    return data[: 44 + exponents * (2 + sum(8 * (k + 1) for k in range(1, data[0] + 1)))]


def assert_same(got, wanted, label=""):
    assert got == wanted, f"{label}: {got!r}, not {wanted!r}"
    assert got.to_bytes() == wanted.to_bytes(), label
    assert got.to_bytes(resume=True) == wanted.to_bytes(resume=True), label


def readings(seed, n=3000):
    """Readings of many sizes, with zeros, repeated and cancelling values."""
    rng = np.random.default_rng(seed)
    x = rng.normal(size=n) * 10.0 ** rng.choice([0, 0, 0, 3, 200, -200, -310], n)
    x[::17], x[1::17] = 0.0, -0.0
    x[2::17] = -x[3::17][: len(x[2::17])] if n % 17 > 3 else 1.0
    return x


def tree(rng, parts):
    """Parts merged two by two, whichever comes."""
    parts = list(parts)
    while len(parts) > 1:
        a, b = (parts.pop(int(rng.integers(len(parts)))) for _ in range(2))
        parts.append(a + b if rng.random() < 0.5 else a.copy().merge(b))
    return parts[0]


# -- order and cuts --------------------------------------------------------------------------------


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("seed", range(4))
def test_any_order_any_cuts_any_tree(order, seed):
    x, rng = readings(seed), np.random.default_rng(seed)
    whole = exact(x, order=order)
    for trial in range(6):
        y = rng.permutation(x)
        assert_same(exact(y, order=order), whole, "permuted")
        pieces = np.split(y, np.sort(rng.integers(0, len(y) + 1, 3 + 20 * trial)))
        assert_same(exact(*pieces, order=order), whole, "cut")
        parts = [exact(piece, order=order) for piece in pieces]
        assert_same(tree(rng, parts), whole, "tree")
        assert_same(ms.combine(parts), whole, "combine")
        assert_same(sum(parts), whole, "sum")
        assert_same(sum(parts[::-1]), whole, "sum backwards")
    assert_same(exact(*x.tolist(), order=order), whole, "one at a time")
    assert_same(exact(*x, order=order), whole, "one at a time, of NumPy")
    assert_same(exact(x[:700].tolist(), *x[700:2900].tolist(), x[2900:], order=order), whole)


numbers = st.one_of(
    st.floats(allow_nan=False, allow_infinity=False), st.integers(-(2**63), 2**64 - 1)
)


@settings(max_examples=80, deadline=None)
@given(st.lists(numbers, max_size=20), st.randoms(use_true_random=False), st.sampled_from(ORDERS))
def test_whatever_the_history(items, random, order):
    whole = exact(items, order=order)
    mixed = items.copy()
    random.shuffle(mixed)
    a, b = exact(order=order), exact(order=order)
    for item in mixed:
        random.choice((a, b)).update(random.choice((item, [item], iter([item]))))
        if random.random() < 0.2:
            a.merge(exact(order=order))
            a, b = b, ms.from_bytes(a.to_bytes())
    assert_same(a + b, whole)
    assert_same(b + a, whole)
    left = (a + b).remove(a)
    assert left == b
    assert content(left) == content(b)
    if items:
        integers = [Fraction(item) for item in items]
        assert whole.as_fractions()["mean"] == sum(integers) / len(integers)


@pytest.mark.parametrize("threads", [1, 2, 3])
def test_threads(threads):
    x = readings(7, 400_000)
    whole = exact(*np.split(x, 8))
    assert_same(ms.ExactMoments().update(x, threads=threads), whole)
    wide = np.arange(400_000, dtype=np.uint64) * np.uint64(46_116_860_184_273)
    mean = Fraction(46_116_860_184_273) * 399_999 / 2
    for dtype in (np.uint64, np.int64):
        a = ms.ExactMoments().update(wide[: 2**17 + 5 if dtype is np.int64 else None].astype(dtype))
        y = wide[: a.count].astype(dtype)
        assert_same(ms.ExactMoments().update(y, threads=threads), a)
    assert ms.ExactMoments().update(wide, threads=threads).as_fractions()["mean"] == mean
    gaps = np.where(np.arange(400_000) % 1000 == 3, NAN, x)
    gapped = ms.ExactMoments(nonfinite="omit").update(gaps, threads=threads)
    assert gapped.omitted == 400
    assert_same(gapped, exact(*np.split(gaps, 8), nonfinite="omit"))


def test_merges_with_empty_ones_change_nothing():
    x = readings(1, 50)
    whole = exact(x)
    for parts in itertools.permutations([exact(), exact(x[:20]), exact(), exact(x[20:])]):
        assert_same(functools.reduce(lambda a, b: a.merge(b), parts, exact()), whole)
        assert_same(ms.combine(parts), whole)
    assert_same(exact(x).remove(exact()), whole)
    assert_same(exact(x).remove(exact(x)), exact())
    assert_same(exact(x).clear(), exact())
    assert_same(exact([], (), np.empty((0, 3)), iter([])), exact())


@pytest.mark.parametrize("waiting", [1, 511, 512, 600, 1023])
def test_an_accumulator_merged_with_itself(waiting):
    scalars = [float(i) for i in range(waiting)]
    a = exact([0.25, 1e300], *scalars)
    twice = exact([0.25, 1e300] * 2 + scalars * 2)
    assert_same(a + a, twice, "a + a")
    assert_same(a.merge(a), twice, "merge")
    b = exact([0.25, 1e300], *scalars)
    assert_same(b.remove(b), exact())


# -- what goes in ----------------------------------------------------------------------------------


def test_containers_and_dtypes():
    x = np.arange(-40, 80, dtype=np.int64)
    whole = exact(x.tolist())
    kinds = ["i1", "i2", "i4", "i8", "f2", "f4", "f8", ">i4", ">f8", ">f4", ">i8"]
    given_as = [x.astype(kind) for kind in kinds]
    given_as += [tuple(x.tolist()), range(-40, 80), iter(range(-40, 80)), map(float, x)]
    given_as += [
        x.reshape(10, 12),
        np.asfortranarray(x.reshape(10, 12)),
        x[::-1],
        np.repeat(x, 2)[::2],
    ]
    given_as += [
        pd.Series(x),
        pd.array(x, "Int64"),
        pl.Series(x),
        pa.array(x),
        pa.chunked_array([x]),
    ]
    given_as += [np.ma.array(x), memoryview(x), list(map(np.float32, x)), list(map(np.int8, x))]
    for values in given_as:
        assert_same(exact(values), whole, type(values).__name__)
    assert_same(exact(np.abs(x).astype("u1")), exact(np.abs(x).tolist()))
    assert_same(exact([True, False]), exact([1.0, 0.0]))
    single = np.random.default_rng(0).normal(size=70_001).astype("f4")
    assert_same(exact(single), exact(single.astype(float)))


def test_masked_entries_are_missing():
    x = readings(2, 200)
    gone = np.arange(200) % 7 == 3
    wanted = exact(x[~gone], nonfinite="omit")
    masks = [np.ma.array(x, mask=gone), np.where(gone, NAN, x), np.where(gone, -INF, x)]
    masks += [pd.array(x).astype("Float64"), pl.Series(np.where(gone, None, x).tolist())]
    masks[3][gone] = pd.NA
    for values in masks:
        got = exact(values, nonfinite="omit")
        assert got.omitted == gone.sum()
        assert got.as_fractions() == wanted.as_fractions()
        assert got.remove(exact([NAN] * int(gone.sum()), nonfinite="omit")) == wanted


def test_wide_integers():
    signed = [2**62 + 1, -(2**63), -(2**63) + 1, 2**63 - 1, 2**53 + 1, -(2**53) - 1, 3, 0]
    unsigned = [2**64 - 1, 2**64 - 2**10 - 1, 2**63 + 1, 2**53 + 1, 7]
    for items, dtype in ((signed, np.int64), (unsigned, np.uint64)):
        whole = exact(items)
        array = np.array(items, dtype)
        ways = [
            array,
            array.reshape(-1, 1),
            array[::-1],
            iter(items),
            list(array),
            pl.Series(array),
        ]
        for values in (*ways, array.astype(array.dtype.newbyteorder())):
            assert_same(exact(values), whole, str(dtype))
        assert_same(exact(*items), whole, "scalars")
        assert_same(exact(*array), whole, "scalars of NumPy")
        mean = Fraction(sum(items), len(items))
        assert whole.as_fractions() == {
            "count": len(items), "mean": mean,
            **{
                f"central_{k}": sum((v - mean) ** k for v in items) / len(items) for k in (2, 3, 4)
            },
        }  # fmt: skip
        floats = [0.5, -1e300, 2.0**60]
        together = exact([*items, *floats])
        assert_same(exact(floats, array), together, "mixed with floats")
        assert_same(exact(*[v for pair in zip(items, floats, strict=False) for v in pair],
                          items[3:]), together, "mixed one by one")  # fmt: skip


@pytest.mark.parametrize("value", [0, 1, -3, 2**53, 2**53 + 2, 2**63, -(2**63), 2**64 - 2**11])
def test_an_integer_that_a_double_represents_goes_in_as_that_double(value):
    wanted = exact([float(value)])
    dtype = np.int64 if value < 2**63 else np.uint64
    for given_as in (value, [value], np.array([value], dtype), dtype(value), float(value)):
        assert_same(exact(given_as), wanted)
    # Beside one that no double holds too.
    assert_same(exact([value, 2**63 - 1]), exact([2**63 - 1], float(value)))


def test_zeros_have_no_sign():
    wanted = exact([0.0, 0.0, 1.0])
    for values in itertools.product([0.0, -0.0, 0], [0.0, -0.0], [1.0]):
        for items in (values, values[::-1]):
            assert_same(exact(items), wanted)
            assert_same(exact(*items), wanted)
            assert_same(exact(items[0]) + exact(items[1:]), wanted)
    minus = exact([-0.0])
    assert (minus.minimum(), minus.maximum(), minus.mean()) == (0.0, 0.0, 0.0)


# -- taken out again -------------------------------------------------------------------------------


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("policy", ["raise", "omit", "propagate"])
def test_what_is_removed_leaves_no_trace(order, policy):
    x, y = readings(3), readings(4, 777) * 1e9
    if policy != "raise":
        x[5], y[[6, 8, 9]] = INF, [NAN, -INF, INF]
    a, b = (exact(v, order=order, nonfinite=policy) for v in (x, y))
    left = (a + b).remove(a)
    assert left == b
    assert content(left) == content(b)
    assert math.isnan(left.minimum())
    assert math.isnan(left.maximum())
    for k in range(1, order + 1):
        same = left.central(k), b.central(k)
        assert same[0] == same[1] or all(map(math.isnan, same))
    back = ms.from_bytes(left.to_bytes())
    assert_same(back, left)
    # Unknown stays unknown, and what follows goes on as ever.
    assert content(left.update(2.5).merge(a)) == content(a + b + exact(2.5, order=order))
    assert math.isnan(left.maximum())
    assert_same(left.clear().merge(b), b)


@pytest.mark.parametrize("gaps", [[NAN], [INF], [-INF], [INF, -INF], [NAN, INF, INF, -INF]])
def test_finite_results_come_back(gaps):
    finite = exact([1.0, 2.5, 1e300], nonfinite="propagate")
    hurt = finite + exact(gaps, nonfinite="propagate")
    assert hurt.count == 3 + len(gaps)
    assert not math.isfinite(hurt.mean())
    assert math.isnan(hurt.variance())
    hurt.remove(exact(gaps, nonfinite="propagate"))
    assert hurt == finite
    assert (hurt.mean(), hurt.kurtosis()) == (finite.mean(), finite.kurtosis())
    both = exact([1.0, NAN, 2.0], nonfinite="omit").merge(exact([NAN, NAN], nonfinite="omit"))
    assert (both.count, both.omitted) == (2, 3)
    assert both.remove(exact([NAN], nonfinite="omit")).omitted == 2


def test_a_window_that_slides():
    x = readings(9, 400)
    window = exact(x[:100])
    for i in range(300):
        window.remove(exact(x[i])).update(x[i + 100])
        assert content(window) == content(exact(x[i + 1 : i + 101]))


# -- large counts ----------------------------------------------------------------------------------


def test_shards_of_one_reading():
    x = np.random.default_rng(1).normal(size=100_000)
    whole = exact(x)
    assert_same(ms.combine(exact(v) for v in x.tolist()), whole)
    assert_same(sum(exact(v) for v in x[:20_000].tolist()), exact(x[:20_000]))
    assert len(whole.to_bytes()) <= 8000


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize(
    "values", [[1.0, 2.0, 10.0], [2**64 - 1, 2**64 - 3], [-(2**63) + 1, -5], [1.7e308, -1.0],
               [5e-324, (2**53 - 1) * 5e-324]]
)  # fmt: skip
def test_doubled_sixty_times(order, values):
    once = exact(values, order=order)
    many = once.copy()
    for _ in range(60):
        many.merge(many.copy())
    times = 2**60
    assert many.count == times * len(values)
    assert many.as_fractions() == {**once.as_fractions(), "count": many.count}
    for k in range(1, order + 1):
        assert many.central(k) == once.central(k)
        assert many.raw(k) == once.raw(k)
    if order >= 2:
        assert (many.variance(), many.std(ddof=1)) == (once.variance(), once.std())
        exact_variance = Fraction(once.as_fractions()["central_2"]) * many.count / (many.count - 1)
        if exact_variance < Fraction(1.7e308):
            assert_close(many.variance(ddof=1), exact_variance, ulps=0.5, label="unbiased")
    back = ms.from_bytes(many.to_bytes())
    assert_same(back, many)
    parts = [once.copy() for _ in range(4)]
    for part in parts:
        for _ in range(58):
            part.merge(part)
    assert_same(ms.combine(parts), many)
    assert content(many.remove(parts[0]).remove(parts[1])) == content(parts[2] + parts[3])
    assert len(many.summary().as_dict()) > 5


def huge(readings_left, **configuration):
    """An accumulator of ones whose count is so much below 2**63 - 1."""
    power, whole = exact(1.0, **configuration), exact(**configuration)
    for digit in bin(2**63 - 1 - readings_left)[:1:-1]:
        whole = whole + power if digit == "1" else whole
        if power.count < 2**62:
            power = power + power
    assert whole.count == 2**63 - 1 - readings_left
    return whole


def test_counts_end_at_two_to_the_63():
    nearly = huge(10)
    assert (nearly.mean(), nearly.variance(), nearly.minimum()) == (1.0, 0.0, 1.0)
    for call, error in (
        (lambda a: a.merge(a), ms.MergeError),
        (lambda a: a.merge(exact([1.0] * 12)), ms.MergeError),
        (lambda a: a.merge(exact(*[1.0] * 12)), ms.MergeError),
        (lambda a: a.update([1.0] * 12), ValueError),
        (lambda a: a.update(np.ones(400_000), threads=2), ValueError),
    ):
        victim = nearly.copy()
        with pytest.raises(error, match=r"2\*\*63"):
            call(victim)
        assert_same(victim, nearly)
    gaps = exact(NAN, nonfinite="omit")
    for _ in range(62):
        gaps.merge(gaps)
    with pytest.raises(ms.MergeError, match="omitted"):
        gaps.merge(gaps)
    assert gaps.omitted == 2**62


def test_single_readings_are_counted_no_further_either():
    nearly = huge(2)
    with pytest.raises(ValueError, match=r"2\*\*63"):
        list(nearly.tap([1.0] * 5))
    assert nearly.count < 2**63
    # What was taken can be read.
    assert nearly.mean() == 1.0


# -- beside Moments --------------------------------------------------------------------------------


@pytest.mark.parametrize("offset", [0.0, 1e3, 1e8])
@pytest.mark.parametrize("law", ["normal", "exponential", "uniform", "standard_cauchy"])
def test_moments_are_as_promised_against_exact_ones(offset, law):
    x = getattr(np.random.default_rng(11), law)(size=20_000) + offset
    plain, oracle, sums = ms.Moments().update(x), exact(x), Exact(x)
    assert_promise_5(plain, sums, blocks_of(0, len(x)), law)
    fractions = oracle.as_fractions()
    assert fractions["mean"] == sums.mean
    assert [fractions[f"central_{k}"] for k in (2, 3, 4)] == [sums.central(k) for k in (2, 3, 4)]
    sd, n = oracle.std(), oracle.count
    # Sums of k-th powers are within 64 u of those of absolute powers; a ratio adds its divisor's
    # error k / 2 times, and three roundings of its own.
    u = 2.0**-53
    size = sums.absolute(3) / n / sd**3
    skew, kurtosis = oracle.skewness(), oracle.kurtosis(excess=False)
    assert abs(plain.variance() - oracle.variance()) <= 66 * u * oracle.variance()
    assert abs(plain.skewness() - skew) <= (64 * size + (96 + 3) * abs(skew)) * u
    assert abs(plain.kurtosis() - oracle.kurtosis()) <= (64 + 128 + 4) * u * kurtosis


# -- going on --------------------------------------------------------------------------------------


@pytest.mark.parametrize("order", ORDERS)
def test_states_that_travel_go_on(order, tmp_path):
    x = readings(6)
    whole = exact(x, order=order)
    part = exact(x[:1000], *x[1000:1500].tolist(), order=order)
    ms.save(part, tmp_path / "state")
    travelled = [
        ms.load(tmp_path / "state"),
        ms.from_bytes(part.to_bytes(resume=True)),
        ms.ExactMoments.from_bytes(bytearray(part.to_bytes())),
        *(pickle.loads(pickle.dumps(part, p)) for p in range(pickle.HIGHEST_PROTOCOL + 1)),
        copy.copy(part), copy.deepcopy(part), part.copy(), part,
    ]  # fmt: skip
    for state in travelled:
        assert_same(state, exact(x[:1500], order=order))
        assert state.order == order
        state.update(x[1500:])
        assert_same(state, whole)
    assert list(exact(order=order).tap(x[:3].tolist())) == x[:3].tolist()


def test_reading_changes_nothing():
    x = readings(8).tolist()
    silent, asked = exact(), exact()
    for start in range(0, 3000, 300):
        silent.update(x[start]).update(x[start + 1 : start + 300])
        asked.update(x[start])
        values = [asked.mean(), asked.kurtosis(), asked.std(1), asked.raw(3, 0.5), asked.minimum()]
        repr(asked), asked.summary(), asked.as_fractions(), asked.to_bytes(), asked == silent
        again = [asked.mean(), asked.kurtosis(), asked.std(1), asked.raw(3, 0.5), asked.minimum()]
        assert repr(values) == repr(again)
        asked.update(x[start + 1 : start + 300])
        assert_same(asked.copy(), silent)
    assert_same(asked, silent)
