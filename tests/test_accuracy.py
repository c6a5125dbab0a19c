"""Promise 5: power sums and means against exact rational arithmetic.

Every bound is that of the promise, in u = 2**-53 times the sum of absolute powers: 64 of them to
the fourth order, and above 64 (from the ninth on 128) of the sum of (abs(x - mean) + D)**k.
"""

import itertools
import math
from fractions import Fraction

import numpy as np
import pytest
from assertions import assert_close
from exact import (
    BLOCK,
    CHANNEL_BLOCK,
    Exact,
    U,
    assert_mean,
    assert_promise_5,
    assert_sum,
    blocks_of,
)

import momentstream as ms

OFFSETS = (0.0, 1e4, 1e8, 1e15)  # in units of the spread


def arrivals(rng, n):
    """Readings in the orders of arrival that hurt, by name."""
    normal = rng.normal(size=n)
    place = np.arange(n)
    return {
        "normal": normal,
        "lopsided": rng.exponential(size=n),
        "sorted": np.sort(normal),
        "drifting": normal + np.linspace(0.0, 100.0, n),
        "one level step": normal + np.where(place < n // 3, 0.0, 1e3),
        "a step every block": normal + 1e4 * (place // BLOCK),
        "two points": np.where(rng.random(n) < 0.3, 0.1, 1.7),
        "rarely another": np.where(place % 1000 == 7, 1.0, 0.0),
        "huge and small in turn": np.where(place % 2, 1e8, 1.0) * normal,
        "heavy tails": np.tan(np.pi * (rng.random(n) - 0.5)),
        "an outlier first": np.concatenate([[1e10], normal[1:]]),
        "an outlier last": np.concatenate([normal[1:], [1e10]]),
        "an unlike beginning": normal + np.where(place < 300, 50.0, 0.0),
        "alternating signs": np.where(place % 2, 1.0, -1.0) * (1.0 + 1e-9 * normal),
    }


NAMES = tuple(arrivals(np.random.default_rng(0), 1000))


@pytest.mark.parametrize("offset", OFFSETS)
@pytest.mark.parametrize("name", NAMES)
@pytest.mark.parametrize(("order", "n"), [(4, 40_000), (8, 17_000), (16, 17_000)])
def test_power_sums(order, n, name, offset):
    x = arrivals(np.random.default_rng(order), n)[name]
    x = x + offset * x.std()
    exact = Exact(x, order=order)
    accumulator = ms.Moments(order).update(x)
    assert_promise_5(accumulator, exact, blocks_of(0, n), name)
    assert accumulator.minimum() == x.min()
    assert accumulator.maximum() == x.max()


@pytest.mark.parametrize("order", [1, 2, 4, 8])
@pytest.mark.parametrize("weights", [None, "reliability"], ids=str)
@pytest.mark.parametrize("shape", [(), (1,)], ids=str)
def test_means_beside_rare_far_readings(order, weights, shape):
    # The deviations are many times smaller than the standard deviation, and so is what the mean may
    # be off by; the first readings, of which one is far, tell little of where the mean is.
    for seed in range(10):
        rng = np.random.default_rng(seed)
        n = int(rng.integers(1500, 2000)) if shape else int(rng.integers(4000, BLOCK))
        x = rng.normal(size=n) * 1e-3 + np.where(np.arange(n) % 1000 == 7, 1.0, 0.0)
        w = None if weights is None else rng.random(n) + 0.5
        accumulator = ms.Moments(order, shape=shape, weights=weights)
        accumulator.update(x.reshape(n, *shape), w)
        assert_mean(np.ravel(accumulator.mean())[0], Exact(x, w, order=1), f"seed {seed}")


@pytest.mark.parametrize("order", [4, 8])
@pytest.mark.parametrize("noise", [0.0, 1.0])
def test_means_beside_one_far_reading(order, noise):
    # Where the far reading has been added, its size is what every further sum is rounded to.
    for seed in range(150):
        rng = np.random.default_rng(seed)
        x = rng.normal() + noise * rng.normal(size=int(rng.integers(100, BLOCK)))
        x[rng.integers(len(x))] = 10.0 ** rng.uniform(1, 19)
        assert_mean(ms.Moments(order).update(x).mean(), Exact(x, order=1), f"seed {seed}")


@pytest.mark.parametrize("order", [1, 2, 3, 5, 6, 7, 12, 15])
def test_every_order(order):
    x = arrivals(np.random.default_rng(order), 9000)["lopsided"] + 1e8
    assert_promise_5(ms.Moments(order).update(x), Exact(x, order=order), blocks_of(0, 9000), "")


@pytest.mark.parametrize("n", [1, 2, 3, 7, 63, 64, 65, 511, 513, BLOCK - 1, BLOCK, BLOCK + 1])
def test_lengths_around_the_edges(n):
    x = np.random.default_rng(n).normal(size=n) + 1e8
    accumulator = ms.Moments(8).update(x)
    assert_promise_5(accumulator, Exact(x, order=8), blocks_of(0, n), f"{n} readings")


@pytest.mark.parametrize("offset", [0, 10**4, 10**8, 2**52])
def test_ten_million_readings(offset):
    # Counts of a converter with 4096 steps: repeated values are weights of a few exact ones.
    rng = np.random.default_rng(offset)
    n = 10_000_000
    steps = np.clip(np.rint(rng.standard_normal(n, np.float32) * 500.0) + 1500, 0, 4095)
    steps = np.sort(steps.astype(np.int64).reshape(-1, 10_000), axis=1).reshape(-1)
    unit = 1.0 if offset == 2**52 else 2.0**-20
    values, counts = np.arange(4096), np.bincount(steps, minlength=4096)
    seen = counts > 0
    exact = Exact(
        ((values + offset) * unit)[seen],
        counts[seen].astype(float),
    )
    accumulator = ms.Moments().update((steps + offset) * unit)
    assert accumulator.count == n
    assert_mean(accumulator.mean(), exact, "ten million")
    for k in (2, 3, 4):
        assert_sum(
            Fraction(accumulator.central(k)) * n, exact.sums[k], k, exact.absolute(k), "ten million"
        )


# -- merging and removing -----------------------------------------------------------------------


def unequal_parts(rng, n, most):
    """Slices of very unequal lengths that cover n readings."""
    parts = rng.integers(2, most)
    places = np.sort((n * rng.random(parts - 1) ** 3).astype(int))
    return [slice(a, b) for a, b in itertools.pairwise([0, *places.tolist(), n])]


def blocks_of_parts(parts):
    return [*parts, *(block for part in parts for block in blocks_of(part.start, part.stop))]


@pytest.mark.parametrize("name", NAMES)
@pytest.mark.parametrize("order", [4, 8, 16])
@pytest.mark.parametrize("offset", [0.0, 1e8])
def test_merges_of_unequal_parts(order, name, offset):
    rng = np.random.default_rng([order, NAMES.index(name)])
    n = 5000
    x = arrivals(rng, n)[name]
    x = x + offset * x.std()
    exact = Exact(x, order=order)
    parts = unequal_parts(rng, n, 40)
    accumulators = [ms.Moments(order).update(x[part]) for part in parts]
    shuffled = [accumulators[i] for i in rng.permutation(len(parts))]
    one_by_one = ms.Moments(order)
    for part in shuffled:
        one_by_one.merge(part)
    # Parts of what has been merged are parts as well: their means too may lie far away.
    ends = [slice(0, part.stop) for part in parts]
    within = blocks_of_parts(parts)
    assert_promise_5(one_by_one, exact, within, f"{name}, one by one")
    in_order = ms.Moments(order)
    for part in accumulators:
        in_order.merge(part)
    assert_promise_5(in_order, exact, within + ends, f"{name}, in order")
    assert_promise_5(ms.combine(accumulators), exact, within, f"{name}, combined")


def test_a_thousand_parts_of_one_reading():
    x = np.random.default_rng(1).normal(size=1000) + 1e8
    exact = Exact(x)
    parts = [ms.Moments().update(value) for value in x.tolist()]
    singles = [slice(i, i + 1) for i in range(1000)]
    assert_promise_5(sum(parts), exact, singles, "sum")
    assert_promise_5(ms.combine(parts), exact, singles, "combine")


@pytest.mark.parametrize("order", [4, 8])
@pytest.mark.parametrize("offset", [0.0, 1e4, 1e8])
@pytest.mark.parametrize("share", [0.01, 0.5, 0.99])
def test_removing(order, offset, share):
    rng = np.random.default_rng([order, int(share * 100)])
    n = 10_000
    x = rng.normal(size=n) + offset
    gone = int(n * share)
    total = ms.Moments(order).update(x)
    left = total.copy().remove(ms.Moments(order).update(x[:gone]))
    assert left.count == left.weight == left.effective_count == n - gone
    assert math.isnan(left.minimum())
    assert math.isnan(left.maximum())
    # The error is 64 units relative to the power sums of the total, moved to the mean that stays.
    exact, whole = Exact(x[gone:], order=order), Exact(x, order=order)
    distance = float(abs(exact.mean - whole.mean))
    for k in range(2, order + 1):
        got = Fraction(left.central(k)) * (n - gone)
        assert_sum(got, exact.sums[k], k, whole.absolute(k, distance), f"{share} removed")
    # The mean of the rest carries the total's error, divided by the rest's share.
    allowed = Fraction(math.ulp(left.mean())) + 64 * U * Fraction(whole.absolute(1)) / (n - gone)
    assert abs(Fraction(left.mean()) - exact.mean) <= allowed
    assert left.variance(ddof=1) == pytest.approx(left.variance() * left.count / (left.count - 1))
    # Taken in again, it weighs what it weighed.
    again = left.merge(ms.Moments(order).update(x[:gone]))
    assert again.count == n
    allowed = Fraction(math.ulp(again.mean())) + 64 * U * Fraction(whole.absolute(1)) / n
    assert abs(Fraction(again.mean()) - whole.mean) <= allowed


# -- weights ------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["normal", "lopsided", "two points", "one level step"])
@pytest.mark.parametrize("order", [2, 4, 8, 16])
@pytest.mark.parametrize("offset", [0.0, 1e8])
def test_frequencies_are_repetitions(name, order, offset):
    rng = np.random.default_rng(order)
    n = 10_000
    x = arrivals(rng, n)[name]
    x = x + offset * x.std()
    w = rng.integers(0, 9, n)
    exact = Exact(x, w.astype(float), order)
    weighted = ms.Moments(order, weights="frequency").update(x, w)
    assert weighted.count == w.sum()
    assert_promise_5(weighted, exact, blocks_of(0, n), name)
    repeated = np.repeat(x, w)
    plain = ms.Moments(order).update(repeated)
    again = Exact(repeated, order=order)
    assert again.sums == exact.sums
    assert_promise_5(plain, again, blocks_of(0, len(repeated)), name)


@pytest.mark.parametrize("spread_of_weights", ["alike", "wide"])
@pytest.mark.parametrize("order", [4, 8, 16])
@pytest.mark.parametrize("offset", [0.0, 1e4, 1e8])
def test_reliability_weights(spread_of_weights, order, offset):
    rng = np.random.default_rng(order)
    n = 12_000
    x = rng.exponential(size=n) + offset
    w = rng.random(n) + 0.5
    if spread_of_weights == "wide":
        w = 10.0 ** rng.uniform(-20, 5, n)
    exact = Exact(x, w, order)
    accumulator = ms.Moments(order, weights="reliability").update(x, w)
    assert_promise_5(accumulator, exact, blocks_of(0, n), spread_of_weights)
    assert accumulator.count == n
    # Two sums of positive terms, a square and a division: some units of the last place each.
    assert_close(
        accumulator.effective_count,
        exact.weight**2 / exact.power_of_weights(2),
        ulps=64,
        label="effective count",
    )
    parts = unequal_parts(rng, n, 20)
    merged = ms.combine(
        ms.Moments(order, weights="reliability").update(x[part], w[part]) for part in parts
    )
    assert_promise_5(merged, exact, blocks_of_parts(parts), f"{spread_of_weights}, merged")


def unbiased(exact, k):
    """Rimoldini's unbiased estimates of the cumulants for reliability weights, exactly."""
    v = [None, None, *(exact.power_of_weights(j) / exact.weight**j for j in (2, 3, 4))]
    second, third, fourth = (exact.central(j) for j in (2, 3, 4))
    if k == 2:
        return second / (1 - v[2])
    if k == 3:
        return third / (1 - 3 * v[2] + 2 * v[3])
    below = (1 - v[2]) * (1 - 6 * v[2] + 8 * v[3] + 3 * v[2] ** 2 - 6 * v[4])
    above = (1 - 4 * v[3] + 3 * v[2] ** 2) * fourth
    return (above - 3 * (1 - 2 * v[2] + 4 * v[3] - 3 * v[2] ** 2) * second**2) / below


@pytest.mark.parametrize("n", [5, 50, 2000])
@pytest.mark.parametrize("offset", [0.0, 1e8])
def test_unbiased_estimates_of_reliability_weights(n, offset):
    rng = np.random.default_rng(n)
    x = rng.exponential(size=n) + offset
    w = rng.random(n) + 0.5
    exact = Exact(x, w)
    accumulator = ms.Moments(weights="reliability").update(x, w)
    k2, k3, k4 = (unbiased(exact, k) for k in (2, 3, 4))
    # The sums' 64 u, and of the divisors 1 - V2 and so on what cancels in them at five readings.
    cubes, fourths = exact.absolute(3), exact.absolute(4)
    assert_close(accumulator.variance(ddof=1), k2, ulps=64, label="k2")
    assert_close(accumulator.k_statistic(2), k2, ulps=64, label="k2")
    weight = float(exact.weight)
    ratio_3, ratio_4 = float(k3 / exact.central(3)), float(abs(k4) / exact.central(4))
    assert_close(
        accumulator.k_statistic(3),
        k3,
        ulps=128,
        relative_to=abs(ratio_3) * cubes / weight,
        label="k3",
    )
    assert_close(
        accumulator.k_statistic(4),
        k4,
        ulps=512,
        relative_to=max(1.0, ratio_4) * fourths / weight,
        label="k4",
    )
    third, fourth = accumulator.skewness(bias=False), accumulator.kurtosis(bias=False)
    wanted = float(k3) / float(k2) ** 1.5, float(k4) / float(k2) ** 2
    sizes = (
        max(abs(wanted[0]), abs(ratio_3) * cubes / weight / float(k2) ** 1.5),
        max(abs(wanted[1]), max(1.0, ratio_4) * fourths / weight / float(k2) ** 2),
    )
    assert_close(third, Fraction(wanted[0]), ulps=256, relative_to=sizes[0], label="skewness")
    assert_close(fourth, Fraction(wanted[1]), ulps=640, relative_to=sizes[1], label="kurtosis")


# -- missing readings, channels, integers, other precisions -------------------------------------


@pytest.mark.parametrize("order", [4, 8])
@pytest.mark.parametrize("share", [0.001, 0.5, 0.999])
def test_omitted_readings_are_as_if_never_there(order, share):
    rng = np.random.default_rng(order)
    n = 30_000
    x = rng.normal(size=n) + 1e8
    x[rng.random(n) < share] = np.nan
    kept = np.isfinite(x)
    accumulator = ms.Moments(order, nonfinite="omit").update(x)
    assert accumulator.omitted == n - kept.sum()
    assert (accumulator.minimum(), accumulator.maximum()) == (x[kept].min(), x[kept].max())
    # A block holds readings by their place, gaps included.
    places = np.flatnonzero(kept)
    rank = np.cumsum(kept) - 1
    blocks = [
        slice(int(rank[part[0]]), int(rank[part[-1]]) + 1)
        for part in (places[(places >= s.start) & (places < s.stop)] for s in blocks_of(0, n))
        if len(part)
    ]
    assert_promise_5(accumulator, Exact(x[kept], order=order), blocks, f"{share} missing")


@pytest.mark.parametrize("order", [2, 4, 8, 16])
@pytest.mark.parametrize("weights", [None, "reliability"], ids=str)
def test_channels_are_streams_of_their_own(order, weights):
    rng = np.random.default_rng(order)
    n = 3 * CHANNEL_BLOCK + 100
    named = arrivals(rng, n)
    x = np.stack([values + 1e8 * (i % 3) for i, values in enumerate(named.values())], axis=1)
    w = None if weights is None else rng.random(n) + 0.5
    whole = ms.Moments(order, shape=len(named), weights=weights).update(x, w)
    for i, name in enumerate(named):
        exact = Exact(x[:, i], w, order)
        assert_promise_5(whole.channel(i), exact, blocks_of(0, n, CHANNEL_BLOCK), name)
        alone = ms.Moments(order, weights=weights).update(x[:, i], w)
        assert_promise_5(alone, exact, blocks_of(0, n), f"{name}, alone")
        assert alone.minimum() == whole.minimum()[i]
        assert alone.maximum() == whole.maximum()[i]


def test_merged_channels():
    rng = np.random.default_rng(2)
    x = np.stack([rng.normal(size=3000), rng.normal(size=3000) + 1e8], axis=1)
    parts = unequal_parts(rng, 3000, 20)
    merged = ms.combine(ms.Moments(shape=2).update(x[part]) for part in parts)
    for i in range(2):
        assert_promise_5(merged.channel(i), Exact(x[:, i]), parts, f"channel {i}")


@pytest.mark.parametrize("base", [0, 2**53, 2**62, -(2**63) + 2**30])
@pytest.mark.parametrize("order", [4, 8])
def test_wide_integers(base, order):
    rng = np.random.default_rng(order)
    n = 10_000
    x = base + rng.integers(-1000, 1000, n)
    exact = Exact(x, order=order)
    assert_promise_5(ms.Moments(order).update(x), exact, blocks_of(0, n), f"int64 at {base}")
    mixed = [*x.tolist()[:3000], 0.5, 1e300**0, *x.tolist()[3000:6000]]
    accumulator = ms.Moments(order).update(mixed)
    assert_promise_5(accumulator, Exact(mixed, order=order), blocks_of(0, len(mixed)), "mixed")


def test_unsigned_integers_near_the_top():
    x = np.uint64(2**64 - 10**6) + np.random.default_rng(3).integers(0, 10**6, 9000).astype(
        np.uint64
    )
    assert_promise_5(ms.Moments().update(x), Exact(x), blocks_of(0, 9000), "uint64")


def test_epoch_nanoseconds():
    # A reading every second or so; squares of the distances from the mean are near 2**84.
    steps = np.random.default_rng(4).integers(900_000_000, 1_100_000_000, 20_000)
    x = 1_700_000_000_000_000_000 + np.cumsum(steps)
    assert_promise_5(ms.Moments().update(x), Exact(x), blocks_of(0, 20_000), "nanoseconds")


@pytest.mark.parametrize("dtype", [np.float16, np.float32])
def test_narrow_floats_are_accumulated_in_double(dtype):
    x = (np.random.default_rng(5).normal(size=20_000) + 100.0).astype(dtype)
    assert_promise_5(ms.Moments().update(x), Exact(x), blocks_of(0, 20_000), str(dtype))


def test_raw_moments_and_root_mean_square():
    x = np.random.default_rng(6).normal(size=5000) + 3.0
    accumulator = ms.Moments(6).update(x)
    for about in (0.0, 3.0, -50.0):
        for k in range(1, 7):
            wanted = sum((Fraction(v) - Fraction(about)) ** k for v in x.tolist()) / len(x)
            size = float(np.mean((np.abs(x - x.mean()) + abs(x.mean() - about)) ** k))
            assert_close(
                accumulator.raw(k, about), wanted, ulps=64, relative_to=size, label=f"raw({k})"
            )
    wanted = sum(Fraction(v) ** 2 for v in x.tolist()) / len(x)
    assert_close(accumulator.rms(), Fraction(math.sqrt(wanted)), ulps=34, label="rms")


@pytest.mark.parametrize("transform", ["log", "reciprocal", "abs"])
def test_transformed_readings(transform):
    x = np.random.default_rng(7).exponential(size=9000) + 0.01
    apply = {"log": math.log, "reciprocal": lambda v: 1.0 / v, "abs": abs}[transform]
    exact = Exact(np.array([apply(v) for v in x.tolist()]))
    accumulator = ms.Moments(transform=transform).update(x)
    # Logarithms of another library may differ by a unit of their last place: that moves the sums.
    moved = 2 * float(U) * exact.distances.size if transform == "log" else 0.0
    assert_mean(accumulator.mean(), exact, transform)
    for k in (2, 3, 4):
        size = exact.absolute(k) + moved / float(U) * exact.absolute(k - 1) / exact.distances.size
        assert_sum(Fraction(accumulator.central(k)) * 9000, exact.sums[k], k, size, transform)
