"""Promise 2: however a stream is cut, contained, laid out or threaded, the same bits."""

import itertools
from array import array
from collections import deque
from fractions import Fraction

import numpy as np
import pytest
from exact import BLOCK, CHANNEL_BLOCK, assert_same_state
from hypothesis import given, settings
from hypothesis import strategies as st

import momentstream as ms

ORDERS = (1, 2, 3, 4, 6, 8, 12, 16)
SHAPES = ((), (3,), (11,), (2, 3))
POLICIES = ("raise", "omit", "propagate")
WEIGHTS = (None, "frequency", "reliability")
DTYPES = ("i1", "u1", "i2", "u2", "i4", "u4", "i8", "u8", "f2", "f4")
STATISTICS = ("mean", "variance", "std", "skewness", "kurtosis", "minimum", "maximum", "rms")
PROPERTIES = ("count", "omitted", "weight", "effective_count")
GROUP = 64 * BLOCK  # what a thread takes at a time


def block_of(shape):
    return CHANNEL_BLOCK if shape else BLOCK


def readings(rng, n, shape, nonfinite="raise", dtype=np.float64):
    """Lopsided readings far from zero, with gaps where a policy has something to do."""
    x = (rng.exponential(size=(n, *shape)) + 40.0).astype(dtype)
    if nonfinite != "raise" and n:
        missing = rng.random(x.shape) < rng.choice([0.0, 1e-4, 0.02])
        x[missing] = rng.choice([np.nan, np.inf, -np.inf], size=int(missing.sum()))
    return x


def weights_of(rng, n, kind):
    if kind is None:
        return None
    w = rng.integers(0, 4, n).astype(float) if kind == "frequency" else rng.random(n) + 0.5
    w[rng.random(n) < rng.choice([0.0, 0.001])] = 0.0
    return w


def cut_at(places, x, w, accumulator, threads=1):
    """Feed readings (and their weights) in the pieces between these places."""
    edges = [0, *sorted(places), len(x)]
    for start, stop in itertools.pairwise(edges):
        accumulator.update(x[start:stop], None if w is None else w[start:stop], threads=threads)
    return accumulator


@pytest.mark.parametrize("shape", SHAPES, ids=str)
@pytest.mark.parametrize("nonfinite", POLICIES)
@pytest.mark.parametrize("weights", WEIGHTS, ids=str)
@pytest.mark.parametrize("order", ORDERS)
def test_cuts(order, weights, nonfinite, shape):
    configuration = {"order": order, "shape": shape, "weights": weights, "nonfinite": nonfinite}
    seed = [order, WEIGHTS.index(weights), POLICIES.index(nonfinite), len(shape)]
    rng = np.random.default_rng(seed)
    block = block_of(shape)
    lengths = (int(rng.integers(0, 40)), block, int(rng.integers(block, 5 * block)))
    for n in lengths:
        x, w = readings(rng, n, shape, nonfinite), weights_of(rng, n, weights)
        whole = ms.Moments(**configuration).update(x, w)
        few = rng.integers(0, n + 1, 3)
        many = rng.integers(0, n + 1, 40)
        around = [p for p in (block - 1, block + 1, 2 * block, 3 * block + 1) if p <= n]
        for places in (few, many, around):
            pieces = cut_at(places, x, w, ms.Moments(**configuration))
            assert_same_state(pieces, whole, f"{n} readings cut at {sorted(places)}")
        threaded = cut_at(few, x, w, ms.Moments(**configuration), threads=3)
        assert_same_state(threaded, whole, f"{n} readings on three threads, cut at {sorted(few)}")


@pytest.mark.parametrize("transform", ["log", "reciprocal", "abs"])
@pytest.mark.parametrize("nonfinite", ["omit", "propagate"])
@pytest.mark.parametrize("shape", [(), (3,)], ids=str)
def test_cuts_of_transformed_readings(transform, nonfinite, shape):
    rng = np.random.default_rng([len(transform), len(shape)])
    n = 2 * block_of(shape) + 77
    x = readings(rng, n, shape, nonfinite) - 40.5  # some at or below zero: outside the domain
    x[rng.random(x.shape) < 0.001] = 0.0
    configuration = {"shape": shape, "nonfinite": nonfinite, "transform": transform}
    whole = ms.Moments(**configuration).update(x)
    for places in (rng.integers(0, n, 300), range(1, 40), [n - 1]):
        pieces = cut_at(places, x, None, ms.Moments(**configuration))
        assert_same_state(pieces, whole, f"{transform} cut at {len(places)} places")
    singles = ms.Moments(**configuration).update(x[:200])
    one_by_one = ms.Moments(**configuration)
    for reading in x[:200]:
        one_by_one.update(reading)
    assert_same_state(one_by_one, singles, transform)


@settings(max_examples=60, deadline=None)
@given(
    values=st.lists(st.floats(-1e9, 1e9), max_size=30),
    repeats=st.integers(1, 700),
    places=st.lists(st.integers(0, 21_000), max_size=6),
    order=st.sampled_from(ORDERS),
)
def test_any_cuts(values, repeats, places, order):
    x = np.array(values * repeats)
    whole = ms.Moments(order).update(x)
    pieces = cut_at([p for p in places if p <= len(x)], x, None, ms.Moments(order))
    assert_same_state(pieces, whole, "hypothesis")


# -- one reading at a time, iterators, containers -----------------------------------------------


@pytest.mark.parametrize("order", ORDERS)
def test_one_reading_at_a_time(order):
    x = readings(np.random.default_rng(order), 2 * BLOCK + 5, ())
    one_by_one = ms.Moments(order)
    for value in x.tolist():
        one_by_one.update(value)
    assert_same_state(one_by_one, ms.Moments(order).update(x), "floats one by one")


@pytest.mark.parametrize("weights", WEIGHTS, ids=str)
@pytest.mark.parametrize("nonfinite", POLICIES)
@pytest.mark.parametrize("shape", SHAPES, ids=str)
def test_one_reading_at_a_time_in_every_configuration(weights, nonfinite, shape):
    rng = np.random.default_rng(len(shape))
    n = 60
    x, w = readings(rng, n, shape, nonfinite), weights_of(rng, n, weights)
    configuration = {"shape": shape, "weights": weights, "nonfinite": nonfinite}
    if nonfinite != "raise":
        x[5] = np.nan
    # Begun just before a block's end, so that it is finished by single readings.
    start, start_w = readings(rng, block_of(shape) - 20, shape), None
    if weights is not None:
        start_w = np.ones(len(start))
    whole = ms.Moments(**configuration).update(start, start_w).update(x, w)
    one_by_one = ms.Moments(**configuration).update(start, start_w)
    for i in range(n):
        reading = x[i] if shape else float(x[i])
        one_by_one.update(reading, None if w is None else float(w[i]))
    assert_same_state(one_by_one, whole, "readings one by one")


@pytest.mark.parametrize("weights", WEIGHTS, ids=str)
@pytest.mark.parametrize("shape", [(), (3,)], ids=str)
def test_iterators(weights, shape):
    rng = np.random.default_rng(7)
    n = BLOCK + 4096 + 13
    x, w = readings(rng, n, shape), weights_of(rng, n, weights)
    configuration = {"shape": shape, "weights": weights}
    whole = ms.Moments(**configuration).update(x, w)
    items = x.tolist() if not shape else list(x)
    beside = None if w is None else w.tolist()
    generated = ms.Moments(**configuration).update(
        (item for item in items), None if w is None else iter(beside)
    )
    assert_same_state(generated, whole, "a generator")
    cut = ms.Moments(**configuration)
    source = iter(items)
    for size in (1, 4095, 4096, 4097, n):
        part = list(itertools.islice(source, size))
        cut.update(iter(part), None if w is None else iter(beside[: len(part)]))
        beside = None if w is None else beside[len(part) :]
    assert_same_state(cut, whole, "iterators one after another")
    tapped = ms.Moments(**configuration)
    if weights is None:
        assert sum(1 for _ in tapped.tap(iter(items))) == n
        assert_same_state(tapped, whole, "tap")


@pytest.mark.parametrize("n", [0, 1, 300, BLOCK + 500, 70_000])
def test_containers_and_layouts_of_a_stream(n):
    x = readings(np.random.default_rng(n), n, ())
    whole = ms.Moments().update(x)
    fixed = x.copy()
    fixed.flags.writeable = False
    wide = np.zeros((n, 3))
    wide[:, 1] = x
    backward = x[::-1].copy()
    unaligned = np.zeros(8 * n + 1, np.uint8)[1:].view(np.float64)
    unaligned[...] = x
    forms = {
        "list": x.tolist(),
        "tuple": tuple(x.tolist()),
        "deque": deque(x.tolist()),
        "array.array": array("d", x.tolist()),
        "memoryview": memoryview(x),
        "iterator": iter(x.tolist()),
        "NumPy scalars": list(x),
        "read-only": fixed,
        "strided": wide[:, 1],
        "reversed": backward[::-1],
        "byteswapped": x.astype(x.dtype.newbyteorder()),
        "unaligned": unaligned,
        "objects with __array__": WithArray(x),
        "masked array without a mask": np.ma.array(x),
    }
    for name, form in forms.items():
        assert_same_state(ms.Moments().update(form), whole, name)


class WithArray:
    def __init__(self, values):
        self.values = values

    def __array__(self, dtype=None, copy=None):
        return self.values


def test_arrays_of_more_axes_are_read_in_the_order_of_c():
    x = readings(np.random.default_rng(3), 6 * 70 * 80, ()).reshape(6, 70, 80)
    whole = ms.Moments().update(x.reshape(-1))
    padded = np.zeros((6, 71, 160))
    padded[:, :70, ::2] = x
    forms = {
        "C": x,
        "Fortran": np.asfortranarray(x),
        "transposed memory": x.transpose(2, 0, 1).copy().transpose(1, 2, 0),
        "strided": padded[:, :70, ::2],
        "reversed": x[::-1, ::-1].copy()[::-1, ::-1],
        "nested lists": x.tolist(),
    }
    for name, form in forms.items():
        assert_same_state(ms.Moments().update(form), whole, name)


@pytest.mark.parametrize("shape", [(3,), (11,), (2, 3)], ids=str)
def test_layouts_of_channels(shape):
    n = 2 * CHANNEL_BLOCK + 100
    x = readings(np.random.default_rng(len(shape)), n, shape)
    whole = ms.Moments(shape=shape).update(x)
    fixed = x.copy()
    fixed.flags.writeable = False
    double = np.zeros((2 * n, *shape))
    double[::2] = x
    forms = {
        "Fortran": np.asfortranarray(x),
        "every second row": double[::2],
        "reversed": x[::-1].copy()[::-1],
        "reversed channels": np.flip(np.flip(x, -1).copy(), -1),
        "byteswapped": x.astype(x.dtype.newbyteorder()),
        "read-only": fixed,
        "nested lists": x.tolist(),
        "iterator of rows": iter(x),
    }
    for name, form in forms.items():
        assert_same_state(ms.Moments(shape=shape).update(form), whole, name)


# -- dtypes -------------------------------------------------------------------------------------


@pytest.mark.parametrize("order", [2, 4, 16])
@pytest.mark.parametrize("weights", [None, "reliability"], ids=str)
@pytest.mark.parametrize("shape", [(), (3,)], ids=str)
def test_equal_values_in_any_dtype(order, weights, shape):
    rng = np.random.default_rng(order)
    n = 3 * BLOCK + 5
    x = rng.integers(0, 100, (n, *shape))
    w = weights_of(rng, n, weights)
    configuration = {"order": order, "shape": shape, "weights": weights}
    whole = ms.Moments(**configuration).update(x.astype(float), w)
    for dtype in DTYPES:
        other = ms.Moments(**configuration).update(x.astype(dtype), w)
        assert_same_state(other, whole, dtype)
    swapped = ms.Moments(**configuration).update(x.astype(">i4"), w)
    assert_same_state(swapped, whole, "big-endian int32")


def test_booleans_are_zeros_and_ones():
    x = np.random.default_rng(1).random(BLOCK + 9) < 0.3
    whole = ms.Moments().update(x.astype(float))
    assert_same_state(ms.Moments().update(x), whole, "bool array")
    assert_same_state(ms.Moments().update(x.tolist()), whole, "bool list")


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("nonfinite", POLICIES)
@pytest.mark.parametrize("law", ["normal", "offset", "lopsided", "wide range", "steps"])
def test_single_precision_gives_the_bits_of_doubles(order, nonfinite, law):
    rng = np.random.default_rng([order, POLICIES.index(nonfinite)])
    n = 4 * BLOCK + 300
    x = {
        "normal": lambda: rng.normal(size=n),
        "offset": lambda: rng.normal(size=n) + 1000.0,
        "lopsided": lambda: rng.exponential(size=n) + 1.0,
        "wide range": lambda: 10.0 ** rng.uniform(-30, 30, n),
        "steps": lambda: rng.normal(size=n) + 50.0 * (np.arange(n) // 3000),
    }[law]().astype(np.float32)
    if nonfinite != "raise":
        x[rng.integers(0, n, 5)] = np.nan
    whole = ms.Moments(order, nonfinite=nonfinite).update(x.astype(np.float64))
    assert_same_state(ms.Moments(order, nonfinite=nonfinite).update(x), whole, "at once")
    pieces = cut_at([1, 5000, 20_000], x, None, ms.Moments(order, nonfinite=nonfinite))
    assert_same_state(pieces, whole, "cut")


# -- integers that no double holds --------------------------------------------------------------


def wide_integers(rng, n, dtype):
    if dtype == np.int64:
        return 2**62 + rng.integers(-(2**20), 2**20, n)
    return np.uint64(2**64 - 2**21) + rng.integers(0, 2**20, n).astype(np.uint64)


@pytest.mark.parametrize("dtype", [np.int64, np.uint64])
@pytest.mark.parametrize("weights", [None, "frequency"], ids=str)
@pytest.mark.parametrize("order", [2, 4, 8])
def test_wide_integers(dtype, weights, order):
    rng = np.random.default_rng(order)
    n = 3 * BLOCK + 100
    x, w = wide_integers(rng, n, dtype), weights_of(rng, n, weights)
    whole = ms.Moments(order, weights=weights).update(x, w)
    for places in ([1], rng.integers(0, n, 25), [BLOCK - 1, BLOCK + 1]):
        pieces = cut_at(places, x, w, ms.Moments(order, weights=weights), threads=2)
        assert_same_state(pieces, whole, f"cut at {len(places)} places")
    python = ms.Moments(order, weights=weights).update(x.tolist(), w)
    assert_same_state(python, whole, "a list of Python integers")
    iterated = ms.Moments(order, weights=weights)
    iterated.update(iter(x.tolist()), None if w is None else iter(w.tolist()))
    assert_same_state(iterated, whole, "an iterator of Python integers")


def test_wide_integers_one_at_a_time_among_floats():
    rng = np.random.default_rng(2)
    mixed = [
        int(rng.integers(2**53, 2**62)) if rng.random() < 0.02 else float(rng.normal())
        for _ in range(BLOCK + 400)
    ]
    # A block without wide integers between two that have some.
    mixed += [*rng.normal(size=BLOCK).tolist(), 2**64 - 1, -(2**63), True, 3]
    whole = ms.Moments().update(mixed)
    one_by_one = ms.Moments()
    for value in mixed:
        one_by_one.update(value)
    assert_same_state(one_by_one, whole, "one by one")
    assert_same_state(ms.Moments().update(iter(mixed)), whole, "iterator")
    pieces = ms.Moments()
    for start in range(0, len(mixed), 999):
        pieces.update(mixed[start : start + 999])
    assert_same_state(pieces, whole, "lists")


@pytest.mark.parametrize("base", [2**62, 2**64 - 20, -(2**63), 2**53 + 1])
def test_wide_integers_keep_their_spread(base):
    values = [base, base + 3, base + 7, base + 18]
    mean = Fraction(sum(values), 4)
    variance = sum((v - mean) ** 2 for v in values) / 4
    dtype = np.uint64 if base >= 2**63 else np.int64
    for form in (values, np.array(values, dtype), iter(values)):
        assert ms.Moments().update(form).variance() == variance
    channels = ms.Moments(shape=2).update(np.array([values, values], dtype).T)
    assert channels.variance().tolist() == [variance, variance]
    assert (
        ms.Moments()
        .update([*values, *values, 1.0])
        .remove(ms.Moments().update([*values, 1.0]))
        .count
        == 4
    )


def test_wide_integers_in_channels():
    rng = np.random.default_rng(4)
    n = 2 * CHANNEL_BLOCK + 50
    x = np.stack([wide_integers(rng, n, np.int64), rng.integers(0, 9, n)], axis=1)
    whole = ms.Moments(shape=2).update(x)
    pieces = cut_at(rng.integers(0, n, 20), x, None, ms.Moments(shape=2))
    assert_same_state(pieces, whole, "cut")
    # The narrow channel has the bits it has beside another narrow one.
    narrow = ms.Moments(shape=2).update(x[:, [1, 1]])
    assert whole.channel(1) == narrow.channel(0)


# -- missing entries ----------------------------------------------------------------------------


@pytest.mark.parametrize("dtype", [np.float64, np.float32, np.int64, np.int8])
def test_masked_entries(dtype):
    rng = np.random.default_rng(6)
    n = 2 * BLOCK + 9
    x = rng.integers(0, 100, n).astype(dtype)
    mask = rng.random(n) < 0.1
    masked = np.ma.array(x, mask=mask)
    plain = np.where(mask, np.nan, x.astype(float))
    whole = ms.Moments(nonfinite="omit").update(plain)
    assert whole.omitted == mask.sum()
    assert_same_state(ms.Moments(nonfinite="omit").update(masked), whole, "at once")
    pieces = cut_at(rng.integers(0, n, 30), masked, None, ms.Moments(nonfinite="omit"))
    assert_same_state(pieces, whole, "cut")


def test_gaps_within_one_block_are_as_if_never_there():
    rng = np.random.default_rng(8)
    x = rng.normal(size=BLOCK - 1)
    gapped = x.copy()
    gapped[::7] = np.nan
    kept = ms.Moments(8).update(x[np.isfinite(gapped)])
    omitted = ms.Moments(8, nonfinite="omit").update(gapped)
    assert [omitted.central(k) for k in range(9)] == [kept.central(k) for k in range(9)]
    assert omitted.mean() == kept.mean()


# -- threads over whole groups ------------------------------------------------------------------


@pytest.mark.parametrize("order", [4, 8])
@pytest.mark.parametrize("weights", [None, "reliability"], ids=str)
@pytest.mark.parametrize("nonfinite", ["raise", "omit"])
def test_threads_take_groups_of_blocks(order, weights, nonfinite):
    rng = np.random.default_rng(order)
    n = 2 * GROUP + 3 * BLOCK + 17
    x, w = readings(rng, n, (), nonfinite), weights_of(rng, n, weights)
    configuration = {"order": order, "weights": weights, "nonfinite": nonfinite}
    whole = ms.Moments(**configuration).update(x, w)
    for threads, places in ((2, []), (3, [1]), (2, [2 * BLOCK + 5]), (2, [GROUP])):
        threaded = cut_at(places, x, w, ms.Moments(**configuration), threads)
        assert_same_state(threaded, whole, f"{threads} threads, cut at {places}")


def test_threads_take_groups_of_channel_blocks():
    rng = np.random.default_rng(5)
    n = 2 * 64 * CHANNEL_BLOCK + 5000
    x = readings(rng, n, (3,), "omit")
    whole = ms.Moments(shape=3, nonfinite="omit").update(x)
    for threads, places in ((2, []), (3, [CHANNEL_BLOCK + 1])):
        threaded = cut_at(places, x, None, ms.Moments(shape=3, nonfinite="omit"), threads)
        assert_same_state(threaded, whole, f"{threads} threads, cut at {places}")


def test_threads_on_single_precision():
    x = readings(np.random.default_rng(9), 2 * GROUP + 100, (), dtype=np.float32)
    whole = ms.Moments().update(x.astype(np.float64))
    assert_same_state(ms.Moments().update(x, threads=2), whole, "float32 on two threads")


def test_a_refusal_on_threads_names_the_first_place_and_changes_nothing():
    x = np.ones(3 * GROUP)
    x[[GROUP + 5, 2 * GROUP + 9]] = np.nan
    accumulator = ms.Moments().update([1.0, 2.0])
    before = accumulator.to_bytes(resume=True)
    with pytest.raises(ms.NonFiniteError) as caught:
        accumulator.update(x, threads=3)
    assert caught.value.position == GROUP + 5
    assert accumulator.to_bytes(resume=True) == before


# -- asking, merging ----------------------------------------------------------------------------


@pytest.mark.parametrize("shape", [(), (3,)], ids=str)
@pytest.mark.parametrize("weights", WEIGHTS, ids=str)
def test_asking_changes_nothing(shape, weights):
    rng = np.random.default_rng(11)
    n = 3 * block_of(shape) + 70
    x, w = readings(rng, n, shape), weights_of(rng, n, weights)
    configuration = {"order": 6, "shape": shape, "weights": weights}
    whole = ms.Moments(**configuration).update(x, w)
    asked = ms.Moments(**configuration)
    for start in range(0, n, 3000):
        asked.update(x[start : start + 3000], None if w is None else w[start : start + 3000])
        before = asked.to_bytes(resume=True)
        for name in STATISTICS:
            getattr(asked, name)()
        for name in PROPERTIES:
            getattr(asked, name)
        asked.raw(5, about=1.0), asked.k_statistic(4), asked.cumulant(6), asked.standardized(5)
        repr(asked), str(asked.summary()), asked.copy(), asked + asked, asked.affine(2.0, 1.0)
        assert asked == asked.copy()
        assert asked.to_bytes(resume=True) == before
    assert_same_state(asked, whole, "asked on the way")


def test_asking_while_single_readings_wait():
    x = np.random.default_rng(12).normal(size=3000).tolist()
    whole = ms.Moments().update(x)
    asked = ms.Moments()
    for i, value in enumerate(x):
        asked.update(value)
        if i % 97 == 0:
            assert asked.count == i + 1
    assert_same_state(asked, whole, "asked on the way")


def test_when_a_merge_comes_does_not_matter():
    rng = np.random.default_rng(13)
    x = rng.normal(size=3 * BLOCK + 50)
    part = ms.Moments().update(rng.exponential(size=BLOCK + 3))
    merged = [
        cut_at([], x[:n], None, ms.Moments()).merge(part).update(x[n:])
        for n in (0, 1, BLOCK, BLOCK + 77, len(x))
    ]
    for other in merged[1:]:
        assert_same_state(other, merged[0], "a merge at another time")


def test_equal_values_of_either_zero_are_equal():
    zeros = np.where(np.arange(100) % 2, 0.0, -0.0)
    plain = ms.Moments().update(np.zeros(100))
    assert ms.Moments().update(zeros) == plain
    assert str(ms.Moments().update(zeros).minimum()) == "0.0"
