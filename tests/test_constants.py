"""Promise 9: constants are constant, and what mathematics forbids never appears."""

import itertools
import math
from fractions import Fraction

import numpy as np
import pytest
from exact import BLOCK, CHANNEL_BLOCK
from hypothesis import given, settings
from hypothesis import strategies as st

import momentstream as ms

CONSTANTS = (
    0.1,
    -0.0,
    1.0,
    -1 / 3,
    1e308,
    1.7976931348623157e308,
    -1e-308,
    5e-324,
    2.0**-1074 * 3,
    2**53 + 1,
    2**62 + 1,
    2**64 - 1,
    -(2**63) + 1,
    1_700_000_000_123_456_789,
)
COUNTS = (1, 2, 3, 7, 1000, BLOCK, 3 * BLOCK + 5)


def assert_constant(accumulator, value, label=""):
    mean = accumulator.mean()
    assert mean == float(value), f"{label}: mean {mean!r} of {value!r}"
    for k in range(2, accumulator.order + 1):
        central = accumulator.central(k)
        assert central == 0.0, f"{label}: central({k}) is {central!r}"
        assert math.isnan(accumulator.standardized(k))
    assert accumulator.variance() == accumulator.std() == accumulator.ac_rms() == 0.0
    if accumulator.count > 1:
        assert accumulator.variance(ddof=1) == 0.0
    if accumulator.order >= 4:
        for bias in (True, False):
            assert math.isnan(accumulator.skewness(bias))
            assert math.isnan(accumulator.kurtosis(bias=bias))
    assert math.isnan(accumulator.crest_factor())
    assert accumulator.minimum() == accumulator.maximum() == float(value)


@pytest.mark.parametrize("value", CONSTANTS, ids=repr)
@pytest.mark.parametrize("order", [2, 4, 8, 16])
def test_constants(value, order):
    for n in COUNTS:
        dtype = type(value) if isinstance(value, float) else ("i8" if value < 2**63 else "u8")
        accumulator = ms.Moments(order).update(np.full(n, value, dtype))
        assert accumulator.count == n
        assert_constant(accumulator, value, f"{n} times")
    single = ms.Moments(order)
    for _ in range(1100):
        single.update(value)
    assert_constant(single, value, "one by one")


@pytest.mark.parametrize("value", CONSTANTS, ids=repr)
@pytest.mark.parametrize("weights", ["frequency", "reliability"])
def test_weighted_constants(value, weights):
    rng = np.random.default_rng(1)
    n = BLOCK + 300
    w = rng.integers(0, 9, n) if weights == "frequency" else rng.random(n) * 1e-3
    values = [value] * n
    accumulator = ms.Moments(weights=weights).update(values, w)
    parts = [
        ms.Moments(weights=weights).update(values[a:b], w[a:b])
        for a, b in itertools.pairwise([0, 1, 40, 5000, n])
    ]
    for got in (accumulator, ms.combine(parts), sum(parts)):
        assert_constant(got, value, weights)


@pytest.mark.parametrize("value", CONSTANTS, ids=repr)
def test_sharded_constants(value):
    rng = np.random.default_rng(2)
    for _ in range(5):
        sizes = (rng.pareto(1.0, rng.integers(2, 30)) * 10 + 1).astype(int)
        parts = [ms.Moments().update([value] * int(min(size, 20_000))) for size in sizes]
        shuffled = [parts[i] for i in rng.permutation(len(parts))]
        assert_constant(ms.combine(parts), value, "combined")
        assert_constant(sum(shuffled), value, "summed")
        tree = shuffled
        while len(tree) > 1:
            i, j = sorted(rng.choice(len(tree), 2, replace=False).tolist())
            tree = [*tree[:i], *tree[i + 1 : j], *tree[j + 1 :], tree[i] + tree[j]]
        assert_constant(tree[0], value, "a random tree")
        loaded = ms.from_bytes(tree[0].to_bytes()).update([value] * 3)
        assert_constant(loaded, value, "loaded and fed")


@pytest.mark.parametrize("value", CONSTANTS, ids=repr)
def test_constants_less_constants(value):
    total = ms.Moments().update([value] * 1000)
    left = total.remove(ms.Moments().update([value] * 300))
    assert left.count == 700
    assert left.mean() == float(value)
    assert left.variance() == 0.0
    assert math.isnan(left.skewness())


def test_constant_channels():
    values = np.array([v for v in CONSTANTS if isinstance(v, float)])
    x = np.tile(values, (2 * CHANNEL_BLOCK + 9, 1))
    whole = ms.Moments(8, shape=len(values)).update(x)
    merged = ms.combine(ms.Moments(8, shape=len(values)).update(p) for p in np.array_split(x, 7))
    for accumulator in (whole, merged):
        for i, value in enumerate(values.tolist()):
            assert_constant(accumulator.channel(i), value, f"channel {i}")
        assert np.all(np.isnan(accumulator.kurtosis()))


def test_constants_with_gaps():
    x = np.full(3 * BLOCK, 0.1)
    x[::3] = np.nan
    x[BLOCK : 2 * BLOCK] = np.nan
    assert_constant(ms.Moments(nonfinite="omit").update(x), 0.1, "gaps")


@settings(max_examples=150, deadline=None)
@given(
    value=st.one_of(
        st.floats(allow_nan=False, allow_infinity=False), st.integers(-(2**63), 2**64 - 1)
    ),
    counts=st.lists(st.integers(1, 400), min_size=1, max_size=6),
    order=st.integers(2, 16),
)
def test_any_constant(value, counts, order):
    parts = [ms.Moments(order).update([value] * n) for n in counts]
    for accumulator in (sum(parts), ms.combine(parts)):
        assert accumulator.count == sum(counts)
        assert_constant(accumulator, value)


# -- what cannot be -----------------------------------------------------------------------------


def assert_possible(accumulator, label=""):
    """No variance below zero; kurtosis + 2 >= skewness**2 to 256 units of kurtosis + 3."""
    variance = accumulator.variance()
    assert variance >= 0.0, label
    assert accumulator.central(4) >= 0.0, label
    if variance > 0.0 and math.isfinite(variance):
        skewness, kurtosis = accumulator.skewness(), accumulator.kurtosis()
        slack = 256 * math.ulp(kurtosis + 3.0)
        assert kurtosis + 2.0 >= skewness**2 - slack, f"{label}: {skewness!r} {kurtosis!r}"
        assert accumulator.minimum() <= accumulator.maximum()


def assert_mean_between(accumulator):
    assert accumulator.minimum() <= accumulator.mean() <= accumulator.maximum()


@pytest.mark.parametrize("offset", [0.0, 1e8, -1e15])
@pytest.mark.parametrize("share", [0.5, 0.3, 0.01, 1e-4])
@pytest.mark.parametrize("n", [2, 3, 100, BLOCK, 200_000])
def test_two_points_lie_on_the_bound(n, share, offset):
    # Equality, skewness**2 == kurtosis + 2, is for two points alone.
    rng = np.random.default_rng(n)
    x = np.where(rng.random(n) < share, 0.1, 1.7) + offset
    x[0], x[1] = 0.1 + offset, 1.7 + offset
    accumulator = ms.Moments().update(x)
    assert_possible(accumulator, "whole")
    parts = [ms.Moments().update(part) for part in np.array_split(x, min(n, 17))]
    assert_possible(ms.combine(parts), "combined")
    assert_possible(sum(parts), "summed")


@pytest.mark.parametrize("kind", ["normal", "lopsided", "heavy tails", "rare"])
def test_random_readings_keep_below_the_bound(kind):
    for seed in range(20):
        rng = np.random.default_rng(seed)
        n = int(rng.integers(2, 30_000))
        x = {
            "normal": rng.normal(size=n) + 1e6,
            "lopsided": rng.exponential(size=n),
            "heavy tails": rng.standard_cauchy(n),
            "rare": np.where(rng.random(n) < 2.0 / n, 1.0, rng.normal(size=n) * 1e-12),
        }[kind]
        w = rng.random(n)
        assert_possible(ms.Moments().update(x), kind)
        assert_possible(ms.Moments(weights="reliability").update(x, w), f"{kind}, weighted")
        parts = [ms.Moments().update(part) for part in np.array_split(x, 9)]
        assert_possible(ms.combine(parts), f"{kind}, combined")


def test_weighted_two_points():
    rng = np.random.default_rng(5)
    for _ in range(200):
        w = 10.0 ** rng.uniform(-12, 12, 2)
        x = rng.normal(size=2) + rng.choice([0.0, 1e6])
        accumulator = ms.Moments(weights="reliability").update(x, w)
        assert_possible(accumulator, f"weights {w}")
        share = Fraction(w[0]) / (Fraction(w[0]) + Fraction(w[1]))
        wanted = float((1 - 2 * share) ** 2 / (share * (1 - share)) - 2)
        assert accumulator.kurtosis() == pytest.approx(wanted, rel=1e-13, abs=1e-13)


READINGS = st.lists(
    st.floats(allow_nan=False, allow_infinity=False, width=64), min_size=1, max_size=40
)
NEARLY_EQUAL = st.tuples(
    st.floats(-1e6, 1e6), st.lists(st.integers(-3, 3), min_size=1, max_size=40)
).map(lambda pair: [pair[0] + step * math.ulp(pair[0]) for step in pair[1]])


@settings(max_examples=400, deadline=None)
@given(values=st.one_of(READINGS, NEARLY_EQUAL), cut=st.integers(0, 40))
def test_the_forbidden_never_appears(values, cut):
    whole = ms.Moments().update(values)
    merged = ms.Moments().update(values[:cut]) + ms.Moments().update(values[cut:])
    for accumulator in (whole, merged):
        assert_possible(accumulator, values)
        assert_mean_between(accumulator)


@settings(max_examples=200, deadline=None)
@given(values=st.one_of(READINGS, NEARLY_EQUAL), cut=st.integers(0, 40))
def test_variance_is_not_negative_after_a_removal(values, cut):
    total = ms.Moments().update(values)
    left = total.remove(ms.Moments().update(values[:cut]))
    assert left.count == max(0, len(values) - cut)
    if left.count > 0:
        assert left.variance() >= 0.0
        assert left.central(4) >= 0.0
        assert left.std() >= 0.0
    if left.count == 1:
        assert left.variance() == 0.0
