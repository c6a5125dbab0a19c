"""Promise 4: multiplied by a power of two, readings have the skewness and kurtosis they had.

A product with 2**s is exact as long as no reading leaves the normal doubles.  Readings here keep
few enough digits, or stay in range, so that it is.
"""

import itertools
import math
import warnings
from fractions import Fraction

import numpy as np
import pytest
from assertions import assert_close
from exact import BLOCK, CHANNEL_BLOCK, Exact, assert_mean
from hypothesis import given, settings
from hypothesis import strategies as st

import momentstream as ms

ORDERS = (3, 4, 8, 16)
# Beyond these the largest of the readings below overflow, or lose bits among the subnormals.
SCALES = (
    -1010,
    -930,
    -800,
    -300,
    -225,
    -113,
    -57,
    -56,
    -1,
    1,
    55,
    56,
    57,
    112,
    224,
    299,
    700,
    1010,
)


def shape_of(accumulator):
    """Everything that has no unit, of every order kept."""
    values = [accumulator.skewness()]
    if accumulator.order >= 4:
        values += [accumulator.kurtosis(), accumulator.kurtosis(bias=False)]
    values.append(accumulator.skewness(bias=False))
    values += [accumulator.standardized(k) for k in range(3, accumulator.order + 1)]
    # As text, so that nan equals nan.
    return [repr(np.ravel(value).tolist()) for value in values]


def scaled(x, s):
    """x * 2**s, checked to be exact."""
    result = np.ldexp(x, s)
    assert np.all(np.isfinite(result))
    assert np.array_equal(np.ldexp(result, -s), x)
    return result


def readings(rng, kind, n):
    """Readings of at most 50 bits or so, so that they stay exact far down."""
    x = {
        "normal": lambda: rng.normal(size=n),
        "lopsided": lambda: rng.exponential(size=n) + 0.25,
        "far from zero": lambda: rng.normal(size=n) + 4096.0,
        "two points": lambda: np.where(rng.random(n) < 0.1, 3.0, 5.0),
        "drifting": lambda: rng.normal(size=n) + np.linspace(0.0, 60.0, n),
        "heavy tails": lambda: np.clip(rng.standard_cauchy(n), -4096.0, 4096.0),
    }[kind]()
    return np.rint(x * 2.0**20) / 2.0**20


KINDS = ("normal", "lopsided", "far from zero", "two points", "drifting", "heavy tails")


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("order", ORDERS)
def test_scaled_readings_have_the_same_shape(kind, order):
    rng = np.random.default_rng([order, KINDS.index(kind)])
    for n in (5, 1000, 3 * BLOCK + 100):
        x = readings(rng, kind, n)
        wanted = shape_of(ms.Moments(order).update(x))
        for s in (*SCALES, *rng.integers(-1000, 1000, 12).tolist()):
            got = shape_of(ms.Moments(order).update(scaled(x, s)))
            assert got == wanted, f"{kind}, {n} readings times 2**{s}"


@pytest.mark.parametrize("weights", [None, "reliability"], ids=str)
def test_many_samples_at_a_few_scales(weights):
    # A power that is not correctly rounded differs between scales once in some thousand times.
    rng = np.random.default_rng(10)
    for _ in range(600):
        x = rng.integers(-(2**20), 2**20, 9) * 1.0
        w = None if weights is None else rng.integers(1, 100, 9)
        wanted = shape_of(ms.Moments(8, weights=weights).update(x, w))
        for s in (1, 2, -3):
            y, v = np.ldexp(x, s), None if w is None else np.ldexp(w, s)
            got = shape_of(ms.Moments(8, weights=weights).update(y, v))
            assert got == wanted, f"{x.tolist()} times 2**{s}"
    x = np.array([167.0, 167.0, 193.0, 193.0, 193.0, -229.0, -277.0, -17773.0, 294738.0, 294738.0])
    assert shape_of(ms.Moments().update(x)) == shape_of(ms.Moments().update(4.0 * x))


@settings(max_examples=150, deadline=None)
@given(
    mantissas=st.lists(st.integers(-(2**20), 2**20), min_size=2, max_size=40),
    s=st.integers(-1074, 1003),
    order=st.sampled_from(ORDERS),
)
def test_any_readings_any_scale(mantissas, s, order):
    # To the last subnormal and to the largest doubles.
    x = np.array(mantissas, float)
    wanted = shape_of(ms.Moments(order).update(x))
    got = shape_of(ms.Moments(order).update(scaled(x, s)))
    assert got == wanted


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("kind", KINDS)
def test_merged_parts_at_any_scale(order, kind):
    rng = np.random.default_rng([order, KINDS.index(kind), 1])
    x = readings(rng, kind, 4000)
    places = [0, 1, 2, 700, 705, 3900, 4000]
    parts = [x[a:b] for a, b in itertools.pairwise(places)]
    # Of very different sizes, so that scaled parts meet plain ones.
    parts.append(x[:50] * 2.0**40)

    def merged(s):
        accumulators = [ms.Moments(order).update(scaled(part, s)) for part in parts]
        one_by_one = ms.Moments(order)
        for accumulator in accumulators:
            one_by_one.merge(accumulator)
        return shape_of(one_by_one) + shape_of(ms.combine(accumulators))

    wanted = merged(0)
    for s in SCALES[1:-1]:
        assert merged(s) == wanted, f"{kind} times 2**{s}"


@pytest.mark.parametrize("order", [4, 8])
def test_removed_parts_at_any_scale(order):
    x = readings(np.random.default_rng(order), "lopsided", 1000)

    def left(s):
        total = ms.Moments(order).update(scaled(x, s))
        return shape_of(total.remove(ms.Moments(order).update(scaled(x[:300], s))))

    wanted = left(0)
    for s in SCALES:
        assert left(s) == wanted, f"times 2**{s}"


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("weights", [None, "reliability"], ids=str)
def test_each_channel_has_a_scale_of_its_own(order, weights):
    rng = np.random.default_rng(order)
    n = 2 * CHANNEL_BLOCK + 90
    x = np.stack([readings(rng, KINDS[i % len(KINDS)], n) for i in range(len(SCALES))], axis=1)
    w = None if weights is None else rng.random(n) + 0.5
    wanted = shape_of(ms.Moments(order, shape=len(SCALES), weights=weights).update(x, w))
    for turn in (0, 5):
        scales = np.roll(SCALES, turn)
        y = np.stack([scaled(x[:, i], int(s)) for i, s in enumerate(scales)], axis=1)
        got = ms.Moments(order, shape=len(SCALES), weights=weights).update(y, w)
        assert shape_of(got) == wanted


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("t", [-900, -500, -101, -100, -99, -87, 80, 99, 100, 101, 500, 900])
def test_scaled_weights_change_nothing(order, t):
    rng = np.random.default_rng(order)
    n = 2 * BLOCK + 70
    x = readings(rng, "lopsided", n)
    w = rng.integers(1, 2**20, n) / 2.0**20

    def fed(weights, s=0):
        y = scaled(x, s)
        whole = ms.Moments(order, weights="reliability").update(y, weights)
        parts = [
            ms.Moments(order, weights="reliability").update(y[a:b], weights[a:b])
            for a, b in ((0, 10), (10, 5000), (5000, n))
        ]
        return whole, ms.combine(parts)

    for s in (0, 900, -900, 210):
        for got, wanted in zip(fed(scaled(w, t), s), fed(w), strict=True):
            assert shape_of(got) == shape_of(wanted), f"weights times 2**{t}, readings 2**{s}"
            assert got.effective_count == wanted.effective_count
            assert got.weight == math.ldexp(wanted.weight, t)
            assert got.mean() == math.ldexp(wanted.mean(), s)
            ddof = 1
            assert got.std(ddof) == math.ldexp(wanted.std(ddof), s)


def test_parts_whose_weights_are_worlds_apart():
    rng = np.random.default_rng(3)
    x, y = rng.normal(size=500), rng.normal(size=500) + 3.0
    heavy = ms.Moments(weights="reliability").update(x, 2.0**900)
    light = ms.Moments(weights="reliability").update(y, 2.0**-900)
    # The light part is 2**-1800 of the whole: it moves no bit.
    both = heavy + light
    assert both.count == 1000
    assert (both.mean(), both.variance()) == (heavy.mean(), heavy.variance())
    assert (light + heavy).to_bytes() == both.to_bytes()


# -- near the ends of the doubles ---------------------------------------------------------------


@pytest.mark.parametrize("size", [1e300, 1e-300, 1.7e308, 5e-324 * 2**60])
@pytest.mark.parametrize("order", [2, 4, 8, 16])
def test_extreme_readings_neither_overflow_nor_vanish(size, order):
    rng = np.random.default_rng(order)
    x = rng.uniform(-1.0, 1.0, 3000) * size
    exact = Exact(x, order=4)
    accumulator = ms.Moments(order).update(x)
    merged = ms.combine(ms.Moments(order).update(part) for part in np.array_split(x, 7))
    for got in (accumulator, merged):
        unit = Fraction(2) ** math.frexp(size)[1]
        # 64 u of the second sum, half of that in its root; conversions add two roundings.
        second = exact.central(2) / unit**2
        assert_close(
            math.ldexp(got.std(), -math.frexp(size)[1]),
            Fraction(math.sqrt(second)),
            ulps=34,
            label="std",
        )
        assert got.minimum() == x.min()
        assert got.maximum() == x.max()
        assert abs(got.mean()) < size
        if order >= 4:
            kurtosis = exact.central(4) / exact.central(2) ** 2
            # 64 u of the fourth sum, twice 64 u of the second.
            assert_close(got.kurtosis(excess=False), kurtosis, ulps=192, label="kurtosis")
        raw = (exact.central(2) + exact.mean**2) / unit**2
        assert_close(
            math.ldexp(got.rms(), -math.frexp(size)[1]),
            Fraction(math.sqrt(raw)),
            ulps=34,
            label="rms",
        )


def test_std_is_finite_where_variance_is_not():
    unit = 2.0**700
    accumulator = ms.Moments().update([unit, 3 * unit])
    assert accumulator.variance() == math.inf
    assert accumulator.central(3) == 0.0
    assert accumulator.central(4) == math.inf
    assert accumulator.std() == unit
    assert accumulator.raw(2) == math.inf
    assert_close(accumulator.rms() / unit, Fraction(math.sqrt(5.0)), ulps=2, label="rms")
    assert accumulator.kurtosis() == -2.0
    assert accumulator.skewness() == 0.0
    assert ms.Moments().update([0.0, 0.0, unit]).central(3) == math.inf
    assert ms.Moments().update([0.0, 0.0, -unit]).central(3) == -math.inf


def test_std_is_not_zero_where_variance_is():
    unit = 2.0**-700
    accumulator = ms.Moments().update([unit, 3 * unit])
    assert accumulator.variance() == 0.0
    assert accumulator.std() == unit
    assert_close(accumulator.rms() / unit, Fraction(math.sqrt(5.0)), ulps=2, label="rms")
    assert accumulator.kurtosis() == -2.0
    assert accumulator.skewness() == 0.0


def test_the_whole_range_at_once():
    x = [1.7e308, -1.7e308, 1e-300, 5e-324, 0.0]
    accumulator = ms.Moments().update(x)
    exact = Exact(x)
    assert_close(
        accumulator.kurtosis(excess=False),
        exact.central(4) / exact.central(2) ** 2,
        ulps=192,
        label="kurtosis",
    )
    assert accumulator.maximum() == 1.7e308
    assert abs(accumulator.mean()) <= 2.0**-50 * 1.7e308
    parts = [ms.Moments().update(value) for value in x]
    assert_close(
        ms.combine(parts).kurtosis(excess=False),
        exact.central(4) / exact.central(2) ** 2,
        ulps=192,
        label="kurtosis of combined parts",
    )


def test_the_mean_of_the_largest_doubles():
    largest = float(np.finfo(float).max)
    x = [largest, largest, largest / 2]
    accumulator = ms.Moments().update(x)
    exact = Exact([v / 2.0**20 for v in x])
    assert_mean(accumulator.mean() / 2.0**20, exact, "largest doubles")
    assert ms.Moments().update([largest, -largest]).mean() == 0.0


def test_scales_along_a_stream():
    # Pieces of every size between the ends, in one stream and in parts.
    rng = np.random.default_rng(9)
    pieces = [rng.normal(size=BLOCK // 2) * 2.0**s for s in range(-1000, 1000, 100)]
    x = np.concatenate(pieces)
    # Beside the greatest the others are zeros, to more digits than a double has.
    exact = Exact(np.where(np.abs(x) > 2.0**750, x, 0.0) / 2.0**900)
    whole = ms.Moments().update(x)
    merged = ms.combine(ms.Moments().update(piece) for piece in pieces)
    for got in (whole, merged):
        kurtosis = exact.central(4) / exact.central(2) ** 2
        assert_close(got.kurtosis(excess=False), kurtosis, ulps=192, label="kurtosis")
        assert_mean(math.ldexp(got.mean(), -900), exact, "all scales")


def test_no_warning_at_any_scale():
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for size in (1e308, 1e200, 1e-200, 5e-324):
            accumulator = ms.Moments(8).update([size, 0.0, -size, size / 2])
            shape_of(accumulator)
            for k in range(9):
                accumulator.central(k), accumulator.raw(k), accumulator.standardized(k)
            for k in range(1, 7):
                accumulator.k_statistic(k), accumulator.cumulant(k)
            repr(accumulator), str(accumulator.summary()), accumulator.crest_factor()
            accumulator.affine(2.0**-10, size / 4), accumulator.summary().as_dict()
