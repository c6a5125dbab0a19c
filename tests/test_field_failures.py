"""Where general-purpose libraries were or are wrong: the plain, merge and weighted cases.

The joint ones are in ``test_joint_input.py``.

Each case comes with the exact answer for its exact binary input.  Tolerances are in units of the
last place of the sum of absolute terms: four an order, as for published values (a k-th power is
k - 1 multiplications, a merge moves it by k terms).  The mean is within a unit of its own last
place and 4u times the mean absolute deviation: promise 5.  What is undefined is nan, without a
warning, and a variance of 0 is exactly 0.

Every case of these kinds can be taken on.  ``cancelling-outliers-mean`` asks for an exact sum; it
is held to the same bound as every other mean, and its outliers make that bound wide.
"""

from fractions import Fraction
from functools import cache
from hashlib import sha256

import numpy as np
import pytest
from assertions import assert_close, unit_of_last_place
from exact import U
from published import Reference, fed, load, merged, random_cuts, read

import momentstream as ms

pytestmark = pytest.mark.filterwarnings("error")

CASES = {c["id"]: c for c in load("field_failures.json") if c["kind"] != "joint"}
NAMES = {
    "mean": "mean", "var0": "var_pop", "var1": "var", "std0": "sd_pop", "std1": "sd",
    "skew0": "skew_pop", "skew1": "skew_adj", "kurt0": "exkurt_pop", "kurt1": "exkurt_adj",
}  # fmt: skip
ORDERS = {"mean": 1, "skew_pop": 3, "skew_adj": 3, "exkurt_pop": 4, "exkurt_adj": 4}
# Too many readings for exact arithmetic here: the file's values are the exact ones.
LARGE = 200_000


def _shuffled():
    a = np.linspace(-100, 100, 1_000_000, dtype=np.float32)
    np.random.default_rng(42).shuffle(a)
    return a


def _far_means():
    k = np.arange(500)
    return [((k * 617) % 1009 - 504) / 256.0, 1e12 + ((k * 911) % 1009 - 504) / 256.0]


def _a_million():
    k = np.arange(1_000_000)
    return ((k * 7919) % 1000003 - 500001) / 1000003.0 * 2.0 ** ((k * 31) % 41 - 20)


# What the expressions of the file stand for; a list where the case is about parts.
MADE = {
    "const-3075.3x300": lambda: np.full(300, 3075.3),
    "const-14.62x1000": lambda: np.full(1000, 14.62),
    "const-0.1x100": lambda: np.full(100, 0.1),
    "const-6523763181031200x1000": lambda: np.full(1000, 6523763181031200.0),
    "const-604102521670485727x500": lambda: np.full(500, 604102521670485727, np.int64),
    "int64-mean-overflow": lambda: np.full(500, 20150515061816532, np.int64),
    "float16-65520-zeros-ones": lambda: np.array([0] * 32760 + [1] * 32760, np.float16),
    "float16-1e5-var": lambda: np.tile(np.array([0, 2], np.float16), 50000),
    "1e15-plus-eighths": lambda: 1e15 + ((np.arange(1000) * 617) % 8) * 0.125,
    "flox-422-plain": lambda: np.random.RandomState(1).uniform(0, 1, 12000) / 100 + 1000000,
    "two-levels-1e8": lambda: np.r_[np.full(1000, 1e8), np.full(1000, 1e8 + 1e-6)],
    "offset-1e10": lambda: 1e10 + ((np.arange(20000) * 7919) % 4096) / 1024.0,
    "shuffled-linspace-f32": _shuffled,
    "merge-1e155-8-10": lambda: [np.full(8, 1e155), np.full(10, 1e155)],
    "merge-const-6523763181031200": lambda: [np.full(n, 6523763181031200.0) for n in (3, 1000, 17)],
    "merge-offset-1e9-8-parts": lambda: np.split(
        1e9 + ((np.arange(4000) * 7919) % 4096) / 1024.0, 8
    ),
    "merge-far-means": _far_means,
    "order-and-partition-dependence": _a_million,
    "float32-axis0-uniform": lambda: (
        np.random.default_rng(802701).uniform(250, 320, (32 * 32 * 32 * 320, 2)).astype(np.float32)
    ),
}

ROWS = ("float32-axis0-ones", "float32-axis0-constant-std", "float32-axis0-uniform")
BATCHES = "merge-5602-overflow"
MISSING = "nan-becomes-zero-skew"
WINDOWS = ("weighted-rolling-54333", "weighted-rolling-hamming")
WEIGHTED = ("weighted-8941", "weighted-price-volume")
OWN_TESTS = (*ROWS, BATCHES, MISSING, *WINDOWS, *WEIGHTED)
READINGS = [case for case in CASES if case not in OWN_TESTS]


@cache
def parts_of(case):
    """The readings of a case, as the parts it comes in: one part where nothing is merged."""
    content = CASES[case]
    data = content["data"]
    if case in MADE:
        data = MADE[case]()
        parts = data if isinstance(data, list) else [data]
    elif case == "merge-5602-scale":
        parts = np.split(np.array(data), content["parameters"]["batches"])
    elif content["kind"] == "merge":
        parts = [np.array(part, content["dtype"]) for part in data]
    else:
        parts = [np.array(data, content["dtype"])]
    assert all(part.dtype == content["dtype"] for part in parts)
    if "sha256" in content:
        # Some of these come from random streams, which a later NumPy may change.
        assert sha256(b"".join(p.tobytes() for p in parts)).hexdigest() == content["sha256"], case
    return parts


@cache
def reference(case):
    values = np.concatenate(parts_of(case))
    if len(values) > LARGE:
        return None
    return Reference(values.tolist() if values.dtype.kind in "iu" else values, order=4)


def accumulators(case):
    """(how it was fed, accumulator) in many ways."""
    parts = parts_of(case)
    values = np.concatenate(parts)
    rng = np.random.default_rng(len(values))
    yield "whole", fed(values)
    yield "as the case's own parts", ms.combine(fed(part) for part in parts)
    for count in (2, 7, 40):
        cuts = random_cuts(rng, len(values), count)
        chunked = ms.Moments()
        for cut in cuts:
            chunked.update(values[cut])
        yield f"{count} chunks", chunked
        yield f"{count} parts", merged(values, cuts)
    if len(values) <= 1000:
        yield "list", fed(values.tolist())
        yield "one at a time", fed(iter(values.tolist()))
        yield "a part a reading", merged(values, [slice(i, i + 1) for i in range(len(values))])
        in_a_row = ms.Moments()
        for value in values:
            in_a_row.merge(fed(value))
        yield "one merge after another", in_a_row
    else:
        yield "two threads", fed_by_threads(values)
        yield "another order", fed(rng.permutation(values))


def fed_by_threads(values):
    return ms.Moments().update(values, threads=2)


def assert_answer(got, case, statistic, label, exact, distance=None, value=None):
    """A statistic against the file's exact value.

    ``exact`` is None for many readings; then ``distance`` is their mean absolute deviation.
    """
    name = NAMES[statistic]
    value = CASES[case]["exact"][statistic] if value is None else value
    if name == "mean":
        distance = Fraction(exact.absolute(1)) / exact.weight if exact is not None else distance
        assert_mean(got, Fraction(value), Fraction(distance), label)
        return
    # A variance of 0 is 0 to the last bit; cubes of both signs cancel to the rounding of their sum.
    cancels = name.startswith("skew") or value != "0"
    size = exact.size(name) if exact is not None and value != "undefined" and cancels else None
    assert_close(got, value, ulps=4 * ORDERS.get(name, 2), relative_to=size, label=label)


def assert_mean(got, value, distance, label):
    """Promise 5: one unit of its own last place plus 4u times the mean absolute deviation."""
    bound = unit_of_last_place(value) + 4 * U * distance
    error = abs(Fraction(got) - value)
    assert error <= bound, f"{label}: mean {got!r}, off by {float(error / bound):.3g} of the bound"


def mean_distance(values):
    """The mean absolute deviation, to the digits a tolerance needs."""
    values = values.astype(np.float64)
    return float(np.mean(np.abs(values - np.mean(values))))


def label_of(case, statistic, how):
    content = CASES[case]
    return f"{case} ({content['source']}: {content['title']}): {statistic}, {how}"


@pytest.mark.parametrize("case", READINGS)
def test_right_where_others_are_not(case):
    exact = reference(case)
    distance = None if exact is not None else mean_distance(np.concatenate(parts_of(case)))
    for how, accumulator in accumulators(case):
        for statistic in CASES[case]["exact"]:
            got = read(accumulator, NAMES[statistic])
            assert_answer(got, case, statistic, label_of(case, statistic, how), exact, distance)


def test_a_mean_among_cancelling_outliers():
    # The outliers are 1e16 off: 4u times the mean absolute deviation is 0.74, and no more.
    values = np.array(CASES["cancelling-outliers-mean"]["data"])
    exact = Reference(values, order=4)
    bound = float(4 * U * Fraction(exact.absolute(1)) / exact.weight)
    assert 0.7 < bound < 0.8
    rng = np.random.default_rng(12)
    for _ in range(200):
        shuffled = rng.permutation(values)
        cuts = random_cuts(rng, 12, 4)
        for accumulator in (fed(shuffled), merged(shuffled, cuts)):
            error = abs(accumulator.mean() - 55 / 12)
            assert error <= bound + np.spacing(55 / 12), (shuffled, cuts, error)


# -- rows of two columns, read along axis 0 --------------------------------------------------------


def rows_of(case):
    if case == "float32-axis0-ones":
        return np.ones((20_000_000, 2), np.float32)
    if case == "float32-axis0-constant-std":
        return np.array([100.0, -100.0])[None, :].repeat(1_000_000, axis=0).astype(np.float32)
    rows = MADE[case]()
    assert sha256(rows.tobytes()).hexdigest() == CASES[case]["sha256"]
    return rows


@pytest.mark.parametrize("case", ROWS)
def test_columns_of_many_float32_rows(case):
    rows = rows_of(case)
    distance = 0 if rows[0, 0] == rows[-1, 0] else mean_distance(rows[::100, 0])
    half = len(rows) // 2 + 1
    ways = {
        "whole": fed(rows, shape=(2,)),
        "halves": ms.combine([fed(rows[:half], shape=2), fed(rows[half:], shape=2)]),
        "a column": fed(rows[:, 0]),
    }
    if case == "float32-axis0-constant-std":
        ways["chunks"] = ms.Moments(shape=2)
        for chunk in np.array_split(rows, 7):
            ways["chunks"].update(chunk)
    for how, accumulator in ways.items():
        for statistic, value in CASES[case]["exact"].items():
            got = float(np.reshape(read(accumulator, NAMES[statistic]), -1)[0])
            label = label_of(case, statistic, how)
            if statistic == "mean":
                assert_mean(got, Fraction(value), Fraction(distance), label)
            else:
                assert_close(got, value, ulps=8, label=label)


# -- merging many batches --------------------------------------------------------------------------


def test_a_hundred_batches_near_the_largest_double():
    value = np.finfo(float).max / 1e5 / 1e2
    content = CASES[BATCHES]
    assert Fraction(content["exact"]["mean"]) - Fraction(value) < unit_of_last_place(value)
    batches = content["parameters"]["batches"]
    rows = np.full((content["parameters"]["batch_rows"], 1), value)
    for part in (fed(rows, shape=1), fed(rows)):
        in_a_row = part.copy()
        for _ in range(batches - 1):
            in_a_row.merge(part)
        for whole in (ms.combine([part] * batches), in_a_row, part.copy().update(rows)):
            assert np.all(whole.mean() == value)
            assert np.all(whole.variance() == 0.0)
            assert np.all(np.isnan(whole.skewness()))
    assert in_a_row.count == batches * len(rows)


# -- missing readings ------------------------------------------------------------------------------


def test_a_missing_reading_does_not_become_a_plausible_number():
    content = CASES[MISSING]
    values = np.array([np.nan if v is None else v for v in content["data"]])
    (position,) = content["parameters"]["nan_positions"]
    exact = Reference(values[~np.isnan(values)], order=4)
    for cut in range(len(values) + 1):
        cuts = [slice(0, cut), slice(cut, None)]
        for accumulator in (fed(values, nonfinite="omit"), merged(values, cuts, nonfinite="omit")):
            assert (accumulator.count, accumulator.omitted) == (4, 1)
            for statistic in content["exact"]:
                got = read(accumulator, NAMES[statistic])
                assert_answer(got, MISSING, statistic, label_of(MISSING, statistic, cut), exact)
        for accumulator in (
            fed(values, nonfinite="propagate"),
            merged(values, cuts, nonfinite="propagate"),
        ):
            assert np.isnan(accumulator.skewness())
            assert np.isnan(accumulator.kurtosis())
    with pytest.raises(ms.NonFiniteError) as caught:
        ms.Moments().update(values)
    assert caught.value.position == position


# -- weights ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("case", WINDOWS)
def test_each_window_of_a_weighted_rolling_variance(case):
    content = CASES[case]
    values = np.array(content["data"])
    weights = np.array(content["parameters"]["weights"])
    length = content["parameters"]["window"]
    ends = [str(end) for end in range(length - 1, len(values))]
    for statistic, answers in content["exact"].items():
        assert list(answers) == ends
        for end, value in answers.items():
            window = values[int(end) - length + 1 : int(end) + 1]
            exact = Reference(window, weights, "reliability", order=4)
            cuts = [slice(0, 1), slice(1, None)]
            for accumulator in (
                fed(window, weights, weights="reliability"),
                merged(window, cuts, weights, weights="reliability"),
            ):
                got = read(accumulator, NAMES[statistic])
                label = label_of(case, statistic, f"window that ends at {end}")
                assert_answer(got, case, statistic, label, exact, value=value)


@pytest.mark.parametrize("case", WEIGHTED)
def test_weighted_skewness_and_kurtosis(case):
    content = CASES[case]
    values = np.array(content["data"], content["dtype"])
    weights = np.array(content["parameters"]["weights"])
    kind = "frequency" if "var1" in content["exact"] else "reliability"
    factors = (1,) if kind == "frequency" else (1, 10, 0.1, 2.0**-700, 2.0**600)
    exact = Reference(values.tolist(), weights.tolist(), kind, order=4)
    for factor in factors:
        scaled = weights * factor
        ways = {"whole": fed(values, scaled, weights=kind)}
        for cut in range(len(values) + 1):
            cuts = [slice(0, cut), slice(cut, None)]
            ways[f"cut at {cut}"] = merged(values, cuts, scaled, weights=kind)
        if kind == "frequency":
            ways["repeated"] = fed(np.repeat(values, weights))
        for how, accumulator in ways.items():
            for statistic in content["exact"]:
                got = read(accumulator, NAMES[statistic])
                label = label_of(case, statistic, f"{how}, weights times {factor}")
                assert_answer(got, case, statistic, label, exact)


def test_every_case_is_taken_on():
    assert set(READINGS) | set(OWN_TESTS) == set(CASES)
    assert {case["kind"] for case in CASES.values()} == {"plain", "merge", "weighted"}
    assert all(statistic in NAMES for case in CASES.values() for statistic in case["exact"])
