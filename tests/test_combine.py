"""``combine``, sums of parts, affine maps, channels, and kernels in a caller's own loop."""

import gc
import itertools
import math
import weakref
from fractions import Fraction

import numba
import numpy as np
import pytest
from assertions import assert_close
from exact import BLOCK, Exact, assert_promise_5, assert_same_state

import momentstream as ms
from momentstream.algebra import central
from momentstream.kernels import vector as kernel

CONFIGURATIONS = [
    {},
    {"order": 9},
    {"shape": (3,)},
    {"shape": (2, 2), "order": 6},
    {"weights": "frequency"},
    {"weights": "reliability", "order": 8},
    {"nonfinite": "omit"},
    {"nonfinite": "propagate"},
    {"transform": "log"},
]


def part_of(configuration, seed, n=50):
    rng = np.random.default_rng(seed)
    shape = configuration.get("shape", ())
    x = rng.exponential(size=(n, *shape)) + seed + 1.0
    if configuration.get("nonfinite") == "omit":
        x[::9] = np.nan
    w = rng.integers(1, 5, n) if configuration.get("weights") else None
    return ms.Moments(**configuration).update(x, w)


# -- combining ----------------------------------------------------------------------------------


@pytest.mark.parametrize("parts", [1, 2, 3, 7, 64, 100])
@pytest.mark.parametrize("order", [4, 8])
def test_combined_parts_are_as_accurate_as_promised(parts, order):
    x = np.random.default_rng(parts).normal(size=4000) + 1e8
    pieces = [p.tolist() for p in np.array_split(np.arange(4000), parts)]
    whole = ms.combine(ms.Moments(order).update(x[piece]) for piece in pieces)
    assert_promise_5(whole, Exact(x, order=order), pieces, f"{parts} parts")
    assert (whole.minimum(), whole.maximum()) == (x.min(), x.max())


@pytest.mark.parametrize("configuration", CONFIGURATIONS, ids=str)
def test_parts_are_never_changed(configuration):
    parts = [part_of(configuration, seed) for seed in range(9)]
    before = [part.to_bytes(resume=True) for part in parts]
    whole = ms.combine(parts)
    sum(parts), parts[0] + parts[1], parts[2].copy().merge(parts[3])
    assert [part.to_bytes(resume=True) for part in parts] == before
    # Nor is a part changed by what becomes of the whole.
    single = ms.combine(parts[:1])
    assert single == parts[0]
    assert single is not parts[0]
    for result in (whole, single):
        result.merge(parts[1]).clear()
    assert [part.to_bytes(resume=True) for part in parts] == before


@pytest.mark.parametrize("configuration", CONFIGURATIONS, ids=str)
def test_the_result_has_the_parts_configuration(configuration):
    whole = ms.combine(part_of(configuration, seed) for seed in range(5))
    for name, value in configuration.items():
        assert getattr(whole, name) == value
    total = sum(np.asarray(part_of(configuration, seed).count) for seed in range(5))
    assert np.array_equal(whole.count, total)
    omitted = sum(np.asarray(part_of(configuration, seed).omitted) for seed in range(5))
    assert np.array_equal(whole.omitted, omitted)


def test_only_a_trees_depth_of_parts_is_held():
    references = []
    most = 0

    def living():
        return sum(reference() is not None for reference in references)

    def parts():
        nonlocal most
        for i in range(500):
            part = ms.Moments().update([float(i), i + 1.0])
            references.append(weakref.ref(part))
            most = max(most, living())
            yield part
            del part

    whole = ms.combine(parts())
    assert whole.count == 1000
    # A part waits at each of nine levels at most; one comes, and the one before may be in hand.
    assert most <= 11
    gc.collect()
    assert living() == 0


def test_the_tree_is_balanced():
    # One by one, a million merges into a whole of growing weight would lose digits; here every
    # part passes through twenty at most.
    class Counted(ms.Moments):
        __slots__ = ("depth",)

        def merge(self, other):
            super().merge(other)
            self.depth = 1 + max(getattr(self, "depth", 0), getattr(other, "depth", 0))
            return self

        def copy(self):
            other = Counted().merge(self)
            other.depth = getattr(self, "depth", 0)
            return other

    whole = ms.combine(Counted().update(float(i)) for i in range(1000))
    assert whole.count == 1000
    assert whole.depth <= 10


def test_nothing_to_combine():
    for nothing in ([], (), iter([])):
        with pytest.raises(ValueError, match="at least one part"):
            ms.combine(nothing)
    assert ms.combine([ms.Moments(), ms.Moments()]) == ms.Moments()


def test_what_does_not_fit_is_refused():
    with pytest.raises(ms.MergeError, match="order"):
        ms.combine([ms.Moments(), ms.Moments(), ms.Moments(6)])
    with pytest.raises(TypeError, match="part 1"):
        ms.combine([ms.Moments(), 4.0])
    with pytest.raises(TypeError, match="iterable"):
        ms.combine(ms.Moments())


@pytest.mark.parametrize(
    ("one", "other", "word"),
    [
        ({"order": 4}, {"order": 5}, "order"),
        ({"shape": 2}, {"shape": 3}, "shape"),
        ({"shape": 2}, {}, "shape"),
        ({"weights": "frequency"}, {}, "weights"),
        ({"weights": "frequency"}, {"weights": "reliability"}, "weights"),
        ({"transform": "log"}, {}, "transform"),
        ({"names": ["a", "b"]}, {"names": ["b", "a"]}, "names"),
    ],
)
def test_merges_of_unlike_parts_change_nothing(one, other, word):
    a, b = part_of_any(one), part_of_any(other)
    before = a.to_bytes(resume=True), b.to_bytes(resume=True)
    for action in (a.merge, a.remove, lambda part: a + part, lambda part: ms.combine([a, part])):
        with pytest.raises(ms.MergeError, match=word):
            action(b)
    assert (a.to_bytes(resume=True), b.to_bytes(resume=True)) == before
    assert isinstance(ms.MergeError("x"), ValueError)


def part_of_any(configuration):
    accumulator = ms.Moments(**configuration)
    x = np.arange(1.0, 4.0 if not accumulator.shape else 3.0 * accumulator.shape[0] + 1.0)
    return accumulator.update(x.reshape(-1, *accumulator.shape), configuration.get("weights") and 1)


def test_other_things_do_not_merge():
    with pytest.raises(ms.MergeError, match="float"):
        ms.Moments().merge(4.0)
    with pytest.raises(TypeError):
        ms.Moments() + 4.0
    with pytest.raises(TypeError):
        4.0 + ms.Moments()


def test_sums_of_parts():
    parts = [part_of({}, seed) for seed in range(5)]
    total = sum(parts)
    assert total == parts[0] + parts[1] + parts[2] + parts[3] + parts[4]
    assert sum([parts[0]]) == parts[0]
    assert sum([parts[0]]) is not parts[0]
    total += parts[0]
    assert total.count == 300


def test_a_part_merged_with_itself_counts_twice():
    part = part_of({}, 1)
    x = np.random.default_rng(1).exponential(size=50) + 2.0
    twice = np.concatenate([x, x])
    doubled = part.copy()
    assert doubled.merge(doubled) is doubled
    assert_promise_5(doubled, Exact(twice), [slice(0, 50)], "twice")


@pytest.mark.parametrize("configuration", CONFIGURATIONS, ids=str)
@pytest.mark.parametrize("lengths", [(50, 50), (1, 40), (700, 3)])
def test_settled_parts_merge_in_either_order_to_the_same_bits(configuration, lengths):
    a, b = (part_of(configuration, seed, n) for seed, n in enumerate(lengths))
    assert a + b == b + a
    # Also merged ones, once they are settled: what a merge left apart is folded first.
    c, d = (ms.from_bytes((a + b).to_bytes()), ms.from_bytes((b + b).to_bytes()))
    assert c + d == d + c


def test_an_empty_part_changes_no_bit():
    for configuration in CONFIGURATIONS:
        part = part_of(configuration, 3)
        empty = ms.Moments(**configuration)
        assert_same_state(part + empty, part, str(configuration))
        assert empty + part == part


def test_policies_of_parts_may_differ():
    strict, lenient = ms.Moments(), ms.Moments(nonfinite="omit").update([1.0, math.nan])
    assert (strict + lenient).nonfinite == "raise"
    assert (lenient + strict).nonfinite == "omit"
    assert (strict + lenient).omitted == 1


def test_names_survive_unnamed_parts():
    named = ms.Moments(names=["inlet", "outlet"]).update([[4.0, 3.0]])
    plain = ms.Moments(shape=2).update([[6.0, 5.0]])
    for whole in (named + plain, plain + named, ms.combine([plain, plain, named])):
        assert whole.names == ("inlet", "outlet")
        assert whole.channel("inlet").maximum() == 6.0


def test_counts_beyond_64_bits_are_refused():
    part = ms.Moments.from_central(0.0, [1.0, 0.0, 3.0], count=2**62 + 5)
    before = part.to_bytes()
    with pytest.raises(ms.MergeError, match="count"):
        part.merge(part.copy())
    assert part.to_bytes() == before


# -- affine, channel, from_central --------------------------------------------------------------


@pytest.mark.parametrize(
    ("scale", "offset"),
    [
        *itertools.product((1.8, -3.0, 1e-3, 2.0**-40), (0.0, 32.0, -1e8, 1e15)),
        *itertools.product((1e100, -1e100), (0.0, 1e100, -1e108, 1.0)),
        *itertools.product((1e-100, -1e-100), (0.0, 1e-100, -1e-92)),
    ],
)
def test_affine_maps(scale, offset):
    x = np.random.default_rng(1).exponential(size=500) + 20.0
    exact = Exact(x)
    accumulator = ms.Moments().update(x)
    before = accumulator.to_bytes(resume=True)
    mapped = accumulator.affine(scale, offset)
    assert accumulator.to_bytes(resume=True) == before
    factor = Fraction(scale)
    wanted = factor * exact.mean + Fraction(offset)
    # The mean's own unit, the offset's rounding, and 4u of the deviations.
    size = max(abs(scale) * 21.0, abs(offset))
    assert_close(mapped.mean(), wanted, ulps=2, relative_to=size, label="mean")
    for k in (2, 3, 4):
        assert_close(
            mapped.central(k),
            exact.central(k) * factor**k,
            ulps=40,
            relative_to=Fraction(exact.absolute(k)) * abs(factor) ** k / 500,
            label=f"central({k})",
        )
    ends = sorted([scale * x.min() + offset, scale * x.max() + offset])
    assert_close([mapped.minimum(), mapped.maximum()], ends, ulps=1, label="extremes")
    assert mapped.count == 500
    assert mapped.skewness() == pytest.approx(math.copysign(1, scale) * accumulator.skewness())


def test_affine_by_powers_of_two_is_exact():
    x = np.random.default_rng(2).normal(size=400)
    for s in (-900, -30, 0, 1, 30, 900):
        mapped, fed = ms.Moments(8).update(x).affine(2.0**s), ms.Moments(8).update(np.ldexp(x, s))
        mirrored = ms.Moments(8).update(x).affine(-(2.0**s))
        assert (mapped.mean(), mapped.std()) == (fed.mean(), fed.std())
        assert (mirrored.mean(), mirrored.std()) == (-fed.mean(), fed.std())
        for k in range(3, 9):
            assert mapped.standardized(k) == fed.standardized(k)
            assert mirrored.standardized(k) == (-1) ** k * fed.standardized(k)


def test_affine_of_far_readings_keeps_their_spread():
    # From nanoseconds to seconds and back to the beginning of the day.
    x = 1_700_000_000 * 10**9 + np.random.default_rng(3).integers(0, 10**9, 1000)
    mapped = ms.Moments().update(x).affine(1e-9, -1_700_000_000.0)
    exact = Exact([Fraction(int(v)) * Fraction(1e-9) - 1_700_000_000 for v in x])
    assert_close(mapped.variance(), exact.central(2), ulps=64, label="variance")
    # 1e-9 is rounded, and 1.7e18 of it is subtracted: what is left has those digits alone.
    assert_close(mapped.mean(), exact.mean, ulps=1, relative_to=1.7e9 / 2**20, label="mean")


@pytest.mark.parametrize(("order", "offset"), [(4, 1e200), (4, -1e300), (16, 1e25), (16, 1e300)])
def test_affine_by_an_offset_far_above_the_spread(order, offset):
    near = ms.Moments(order).update([1.0, 2.0, 4.0])
    mapped = near.affine(1.0, offset)
    assert mapped.mean() == offset
    for k in range(2, order + 1):
        assert mapped.central(k) == near.central(k)
    doubled = mapped.merge(near.affine(1.0, offset))
    assert doubled.central(order) == near.central(order)


@pytest.mark.parametrize(("scale", "offset"), [(2.0, 0.0), (2e300, 1e300), (-1.0, 0.5), (0.0, 3.0)])
def test_affine_of_constants_is_a_constant(scale, offset):
    mapped = ms.Moments().update([1.0, 1.0]).affine(scale, offset)
    assert mapped == ms.Moments().update([scale + offset] * 2)


def test_affine_merges_and_is_fed():
    celsius = ms.Moments().update([10.0, 20.0])
    fahrenheit = celsius.affine(1.8, 32.0).merge(ms.Moments().update(59.0)).update(68.0)
    assert fahrenheit.count == 4
    assert fahrenheit.mean() == 61.25
    assert (fahrenheit.minimum(), fahrenheit.maximum()) == (50.0, 68.0)


def test_affine_of_channels_and_of_nothing():
    channels = ms.Moments(shape=2).update([[1.0, 2.0], [3.0, 6.0]]).affine(-2.0, 1.0)
    assert channels.mean().tolist() == [-3.0, -7.0]
    assert channels.minimum().tolist() == [-5.0, -11.0]
    assert ms.Moments().affine(2.0, 1.0) == ms.Moments()
    with pytest.raises(ValueError, match="transform"):
        ms.Moments(transform="log").update(1.0).affine(2.0)
    for bad in (math.nan, math.inf):
        with pytest.raises(ValueError, match="finite"):
            ms.Moments().update(1.0).affine(bad)


@pytest.mark.parametrize("weights", [None, "reliability"], ids=str)
def test_channels_stand_alone(weights):
    rng = np.random.default_rng(4)
    x, w = rng.normal(size=(300, 2, 3)), None if weights is None else rng.random(300)
    whole = ms.Moments(6, shape=(2, 3), weights=weights).update(x, w)
    for place in itertools.product(range(2), range(3)):
        one = whole.channel(place)
        assert one.shape == ()
        assert one.mean() == whole.mean()[place]
        assert one.kurtosis(bias=False) == whole.kurtosis(bias=False)[place]
        assert one.count == 300
        assert one == whole.channel(tuple(i - n for i, n in zip(place, (2, 3), strict=True)))
        fed_on = one.merge(ms.Moments(6, weights=weights).update(5.0, weights and 1.0))
        assert fed_on.maximum() == 5.0
    with pytest.raises(IndexError, match="outside"):
        whole.channel((2, 0))
    with pytest.raises(IndexError, match="2 indices"):
        whole.channel(1)


def test_moments_computed_elsewhere():
    x = np.random.default_rng(5).normal(size=1000) + 50.0
    exact = Exact(x, order=6)
    known = ms.Moments.from_central(
        float(exact.mean),
        [float(exact.central(k)) for k in range(2, 7)],
        count=1000,
        minimum=x.min(),
        maximum=x.max(),
    )
    assert known.order == 6
    assert known.mean() == float(exact.mean)
    for k in range(2, 7):
        # A product with the count, and a division by it.
        assert_close(known.central(k), Fraction(float(exact.central(k))), ulps=1, label=str(k))
    y = np.random.default_rng(6).normal(size=500) + 51.0
    both = Exact(np.concatenate([x, y]), order=6)
    whole = known.copy().update(y)
    assert whole == known + ms.Moments(6).update(y)
    assert whole.count == 1500
    assert whole.minimum() == min(x.min(), y.min())
    for k in range(2, 7):
        # The mean came rounded to one double: beside 50, that is 50 u of a spread of 1.
        assert_close(
            whole.central(k),
            both.central(k),
            ulps=64 + 64 * k,
            relative_to=Fraction(both.absolute(k) / 1500),
            label=f"central({k})",
        )


def test_moments_computed_elsewhere_at_any_scale_and_in_channels():
    tiny = ms.Moments.from_central(1e-300, [0.0, 0.0, 0.0], count=3)
    assert tiny.mean() == 1e-300
    channels = ms.Moments.from_central([1.0, 2.0], [[1.0, 4.0], [0.0, 0.0], [3.0, 48.0]], count=9)
    assert channels.kurtosis().tolist() == [0.0, 0.0]
    assert channels.std().tolist() == [1.0, 2.0]
    assert math.isnan(ms.Moments.from_central(0.0, [1.0], count=2).minimum())


@pytest.mark.parametrize(
    ("arguments", "options", "word"),
    [
        ((0.0, [-1.0]), {"count": 5}, "negative"),
        ((math.nan, [1.0]), {"count": 5}, "finite"),
        ((0.0, [math.inf]), {"count": 5}, "finite"),
        ((0.0, [1.0]), {"count": 0}, "count"),
        ((0.0, [1.0]), {"count": 1}, "spread"),
        ((0.0, [1.0] * 16), {"count": 5}, "15"),
        (([0.0, 1.0], [1.0]), {"count": 5}, "shape"),
    ],
)
def test_moments_that_cannot_be(arguments, options, word):
    with pytest.raises(ValueError, match=word):
        ms.Moments.from_central(*arguments, **options)


# -- kernels and the algebra they repeat --------------------------------------------------------


def row_of(x, order):
    """A kernel's vector of readings, and the same as a ``MomentVector``."""
    row = ms.kernels.new_vector(order)
    ms.kernels.add_block(row, np.ascontiguousarray(x))
    vector = central.MomentVector(
        row[kernel.SUMS],
        row[kernel.MEAN],
        row[kernel.REST],
        row[kernel.SCALE],
        row[kernel.SUMS + 2 : kernel.SUMS + order + 1].copy(),
    )
    return row, vector


@pytest.mark.parametrize("order", [2, 4, 8, 16])
@pytest.mark.parametrize("size", [1.0, 1e-200, 1e200])
@pytest.mark.parametrize("lengths", [(1000, 1000), (1, 500), (3000, 7)])
def test_kernels_combine_as_the_algebra_does(order, size, lengths):
    rng = np.random.default_rng(order)
    x = (rng.normal(size=lengths[0]) + 4.0) * size
    y = (rng.normal(size=lengths[1]) + 5.0) * size
    (row, a), (other, b) = row_of(x, order), row_of(y, order)
    unchanged = other.copy()
    ms.kernels.combine_vectors(row, other)
    assert np.array_equal(other, unchanged)
    got = central.combine(a, b)
    got = central.in_units(got, row[kernel.SCALE], 0.0)
    assert got.weight == row[kernel.SUMS]
    exact = Exact(np.concatenate([x, y]) / size, order=order)
    unit = Fraction(size) / Fraction(2) ** int(row[kernel.SCALE])
    assert abs(got.mean - row[kernel.MEAN]) <= math.ulp(row[kernel.MEAN])
    for k in range(2, order + 1):
        # Two orders of the same operations: each is within some units of the same sum.
        assert_close(
            got.sums[k - 2],
            Fraction(row[kernel.SUMS + k]),
            ulps=8 * k,
            relative_to=Fraction(exact.absolute(k, 1.0)) * unit**k,
            label=f"sum {k}",
        )


def test_kernels_move_a_centre_as_the_algebra_does():
    row, vector = row_of(np.random.default_rng(1).exponential(size=300), 8)
    sums = [vector.weight, 0.0, *vector.sums]
    for offset in (0.0, 0.3, -2.0):
        table = np.zeros((1, row.size))
        table[0] = row

        got = moved_by_kernel(table, offset)
        assert got[2:].tolist() == [float(s) for s in central.moved(sums, offset)[2:]]


@numba.njit
def moved_by_kernel(table, offset):
    order = table.shape[1] - 4
    result = np.zeros(order + 1)
    for k in range(2, order + 1):
        result[k] = kernel.moved_sum(table, 0, k, offset)
    return result


@numba.njit
def shard_statistics(readings, edges):
    """A user's own loop: vectors of many stretches, combined without leaving compiled code."""
    whole = ms_new_vector(4)
    for i in range(edges.size - 1):
        part = ms_new_vector(4)
        ms_add_block(part, readings[edges[i] : edges[i + 1]])
        ms_combine_vectors(whole, part)
    return (ms_mean(whole), ms_variance(whole), ms_skewness(whole), ms_kurtosis(whole)), whole


ms_new_vector, ms_add_block = ms.kernels.new_vector, ms.kernels.add_block
ms_combine_vectors, ms_mean = ms.kernels.combine_vectors, ms.kernels.mean
ms_variance, ms_skewness = ms.kernels.variance, ms.kernels.skewness
ms_kurtosis = ms.kernels.kurtosis


@pytest.mark.parametrize("size", [1.0, 1e-250, 1e250])
def test_kernels_in_a_callers_own_loop(size):
    x = (np.random.default_rng(2).exponential(size=3 * BLOCK + 10) + 30.0) * size
    edges = np.array([0, 1, 5000, 5000, 2 * BLOCK + 100, len(x)])
    statistics, _ = shard_statistics(x, edges)
    one_by_one = ms.Moments()
    for start, stop in itertools.pairwise(edges.tolist()):
        one_by_one.merge(ms.Moments().update(x[start:stop]))
    exact = Exact(x / size)
    mean, variance, skewness, kurtosis = statistics
    assert mean == pytest.approx(one_by_one.mean(), rel=1e-15)
    assert variance == pytest.approx(one_by_one.variance(), rel=1e-14)
    # 64 u of the sums each, and of the powers of the second in the divisor.
    third = exact.central(3) / Fraction(math.sqrt(exact.central(2) ** 3))
    assert_close(skewness, third, ulps=96, relative_to=exact.absolute(3) / len(x), label="skew")
    fourth = exact.central(4) / exact.central(2) ** 2 - 3
    assert_close(kurtosis, fourth, ulps=128, relative_to=fourth + 3, label="kurtosis")


def test_kernels_feed_as_an_accumulator_does():
    x = np.random.default_rng(3).normal(size=BLOCK - 5) + 1e6
    row = ms.kernels.new_vector(4)
    ms.kernels.add_block(row, x)
    accumulator = ms.Moments().update(x)
    assert ms.kernels.mean(row) == accumulator.mean()
    assert ms.kernels.variance(row) == accumulator.variance()
    assert ms.kernels.skewness(row) == accumulator.skewness()
    assert ms.kernels.kurtosis(row) == accumulator.kurtosis()
    long = np.random.default_rng(4).normal(size=5 * BLOCK) + 1e8
    row = ms.kernels.new_vector(4)
    ms.kernels.add_block(row, long)
    exact = Exact(long)
    assert_close(ms.kernels.variance(row), exact.central(2), ulps=64, label="variance")


def test_kernels_of_nothing_and_of_constants():
    row = ms.kernels.new_vector(4)
    for statistic in (ms.kernels.mean, ms.kernels.skewness, ms.kernels.kurtosis):
        assert math.isnan(statistic(row))
    assert math.isnan(ms.kernels.variance(row))
    ms.kernels.add_block(row, np.empty(0))
    assert not row.any()
    ms.kernels.add_block(row, np.full(100, 0.1))
    assert ms.kernels.mean(row) == 0.1
    assert ms.kernels.variance(row) == 0.0
    assert math.isnan(ms.kernels.kurtosis(row))


def test_kernels_refuse_what_they_cannot_take():
    for order in (0, 1, 3, 18):
        with pytest.raises(ValueError, match="order"):
            ms.kernels.new_vector(order)
    row = ms.kernels.new_vector(4)
    ms.kernels.add_block(row, np.array([1.0, 2.0]))
    before = row.copy()
    for bad in (math.nan, math.inf):
        with pytest.raises(ValueError, match="finite"):
            ms.kernels.add_block(row, np.array([1.0, bad]))
    with pytest.raises(ValueError, match="order"):
        ms.kernels.combine_vectors(row, ms.kernels.new_vector(6))
    with pytest.raises(ValueError, match="order 4"):
        ms.kernels.kurtosis(ms.kernels.new_vector(2))
    assert np.array_equal(row, before)
