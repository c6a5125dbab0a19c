"""Against ``scipy.stats``: skew, kurtosis, moment, kstat and describe.

Every comparison is made twice.  Ours is within four units of the last place an order of the exact
rational value, units of the sum of absolute terms (``Reference.size``): a k-th power is k - 1
multiplications, and the sums of a block and merges of blocks add a few more; two thirds of that
are reached.  SciPy's is within twice that of ours, and what its method loses besides: ``skew``,
``kurtosis``, ``moment`` and ``describe`` take deviations from a mean that was rounded, which moves
a k-th moment by k times that rounding times the absolute moment below; ``kstat`` takes differences
of sums of plain powers, and loses what those exceed the result by.  Far from zero SciPy has no
digits left: the exact value alone decides there.
"""

import warnings
from fractions import Fraction
from math import comb

import numpy as np
import pytest
from assertions import assert_close, unit_of_last_place
from exact import BLOCK, CHANNEL_BLOCK, assert_mean
from published import Reference, fed, merged, random_cuts, read
from scipy import stats

import momentstream as ms

pytestmark = pytest.mark.filterwarnings("error")

SHORT = list(range(1, 21))
AROUND_BLOCKS = [BLOCK - 1, BLOCK, BLOCK + 1, 2 * BLOCK, 2 * BLOCK + 1]

LAWS = {
    "normal": lambda rng, n: rng.normal(0.5, 2.0, n),
    "uniform": lambda rng, n: rng.random(n),
    "exponential": lambda rng, n: rng.exponential(3.0, n),
    "gamma": lambda rng, n: rng.gamma(0.3, 5.0, n),
    "beta": lambda rng, n: rng.beta(2.0, 0.5, n),
    "lognormal": lambda rng, n: rng.lognormal(0.0, 1.5, n),
    "laplace": lambda rng, n: rng.laplace(-1.0, 1.0, n),
    "t": lambda rng, n: rng.standard_t(3, n),
    "cauchy": lambda rng, n: rng.standard_cauchy(n),
    "bernoulli": lambda rng, n: (rng.random(n) < 0.3).astype(float),
    "rare-events": lambda rng, n: (rng.random(n) < 0.01) * 7.3,
    "poisson": lambda rng, n: rng.poisson(2.5, n).astype(float),
    "two-hills": lambda rng, n: rng.choice([-3.0, 4.0], n) + rng.normal(0.0, 0.1, n),
    "drift": lambda rng, n: np.linspace(-1.0, 1.0, n) + rng.normal(0.0, 0.01, n),
}

DTYPES = {
    "float16": lambda rng, n: rng.normal(3.0, 2.0, n),
    "float32": lambda rng, n: rng.normal(-1.0, 2.0, n),
    "float64": lambda rng, n: rng.normal(-1.0, 2.0, n),
    "int8": lambda rng, n: rng.integers(-128, 128, n),
    "int16": lambda rng, n: rng.integers(-(2**15), 2**15, n),
    "int32": lambda rng, n: rng.integers(-(2**31), 2**31, n),
    "int64": lambda rng, n: rng.integers(-(2**52), 2**52, n),
    "uint8": lambda rng, n: rng.integers(0, 2**8, n),
    "uint16": lambda rng, n: rng.integers(0, 2**16, n),
    "uint32": lambda rng, n: rng.integers(0, 2**32, n),
    "uint64": lambda rng, n: rng.integers(0, 2**53, n),
    "bool": lambda rng, n: rng.random(n) < 0.4,
}

# The highest power in each; the least number of readings for an estimate.
ORDERS = {
    "var": 2, "skew_pop": 3, "skew_adj": 3, "exkurt_pop": 4, "exkurt_adj": 4,
    **{f"m{k}": k for k in range(2, 7)}, **{f"k{k}": k for k in range(2, 5)},
}  # fmt: skip
LEAST = {"var": 2, "skew_adj": 3, "exkurt_adj": 4, "k2": 2, "k3": 3, "k4": 4}


def of_scipy(values):
    """SciPy's answers for readings in double precision, by the names of ``Reference``."""
    with warnings.catch_warnings(), np.errstate(all="ignore"):
        # It warns of few readings and of readings without spread.
        warnings.simplefilter("ignore")
        described = stats.describe(values)
        answers = {
            "skew_pop": stats.skew(values),
            "skew_adj": stats.skew(values, bias=False),
            "exkurt_pop": stats.kurtosis(values),
            "exkurt_adj": stats.kurtosis(values, bias=False),
            "var": described.variance,
            **{f"m{k}": stats.moment(values, order=k) for k in range(2, 7)},
            # Below the least number kstat divides by zero.
            **{f"k{k}": stats.kstat(values, k) for k in range(2, 5) if len(values) >= k},
        }
    assert answers["skew_pop"] == described.skewness or np.isnan(described.skewness)
    assert answers["exkurt_pop"] == described.kurtosis or np.isnan(described.kurtosis)
    return answers, described


def loss_of_scipy(name, values, exact):
    """What SciPy's method may lose, a bound in the unit of the statistic."""
    n = len(values)
    order = ORDERS[name]
    size = float(exact.size(name))
    mean_size = float(np.mean(np.abs(values)))
    if name in ("k2", "k3", "k4"):
        # Its formulas with every minus a plus.
        s1, s2, s3, s4 = (float(np.sum(np.abs(values) ** k)) for k in (1, 2, 3, 4))
        size += {
            "k2": lambda: (n * s2 + s1**2) / (n * (n - 1)),
            "k3": lambda: (2 * s1**3 + 3 * n * s1 * s2 + n**2 * s3) / (n * (n - 1) * (n - 2)),
            "k4": lambda: (
                (
                    (6 * s1**4 + 12 * n * s1**2 * s2 + 3 * n * (n - 1) * s2**2)
                    + (4 * n * (n + 1) * s1 * s3 + n**2 * (n + 1) * s4)
                )
                / (n * (n - 1) * (n - 2) * (n - 3))
            ),
        }[name]()
    else:
        below = float(exact.absolute_central(order - 1) / exact.absolute_central(order))
        size *= 1.0 + order * mean_size * below
    return 8 * order * unit_of_last_place(size)


def assert_statistics(accumulator, values, exact, answers, label):
    """Ours against the exact values, SciPy's against ours (``answers`` None: not at all)."""
    assert_mean(accumulator.mean(), exact, f"{label}: mean")
    for name, order in ORDERS.items():
        got = read(accumulator, name)
        wanted = exact.value(name)
        if wanted == "undefined":
            assert np.isnan(got), f"{label}: {name} is {got!r} where it is undefined"
            continue
        size = exact.size(name)
        if size == 0:
            assert got == 0.0, f"{label}: {name} is {got!r}, without any spread"
            continue
        assert_close(got, wanted, ulps=4 * order, relative_to=size, label=f"{label}: {name}")
        if answers is not None:
            error = abs(Fraction(got) - Fraction(float(answers[name])))
            bound = loss_of_scipy(name, values, exact)
            assert error <= bound, (
                f"{label}: {name} is {got!r}, SciPy's {float(answers[name])!r}, exact "
                f"{float(wanted)!r}: {float(error / bound):.3g} of what SciPy's method may lose"
            )


def raw_of_scipy(values, exact):
    """For k = 1 .. 6: the exact raw moment, what its rounding errors scale with, SciPy's value."""
    result = {}
    for k in range(1, 7):
        # From central moments by the binomial theorem, each term rounded.
        terms = [comb(k, j) * abs(exact.mean) ** (k - j) for j in range(k + 1)]
        size = sum(t * exact.absolute_central(j) for j, t in enumerate(terms))
        signs = [1 if exact.mean >= 0 or (k - j) % 2 == 0 else -1 for j in range(k + 1)]
        wanted = sum(
            s * t * exact.central(j) for j, (s, t) in enumerate(zip(signs, terms, strict=True))
        )
        result[k] = wanted, size, float(stats.moment(values, order=k, center=0.0))
    return result


def assert_raw(accumulator, answers, label):
    for k, (wanted, size, answer) in answers.items():
        got = accumulator.raw(k)
        assert_close(got, wanted, ulps=4 * k, relative_to=size, label=f"{label}: raw {k}")
        error = abs(Fraction(got) - Fraction(answer))
        assert error <= 8 * k * unit_of_last_place(size), f"{label}: raw {k}: {got!r}, {answer!r}"


def ways(values, rng, **configuration):
    n = len(values)
    yield "whole", fed(values, **configuration)
    yield "parts", merged(values, random_cuts(rng, n, 3), **configuration)
    chunked = ms.Moments(**configuration)
    for cut in random_cuts(rng, n, 4):
        chunked.update(values[cut])
    yield "chunks", chunked


@pytest.mark.parametrize("n", SHORT + AROUND_BLOCKS)
@pytest.mark.parametrize("law", LAWS)
def test_laws_and_lengths(law, n):
    rng = np.random.default_rng([n, list(LAWS).index(law)])
    values = LAWS[law](rng, n)
    exact = Reference(values, order=6)
    answers, described = of_scipy(values)
    raw = raw_of_scipy(values, exact)
    for how, accumulator in ways(values, rng, order=6):
        label = f"{n} readings of {law}, {how}"
        assert_statistics(accumulator, values, exact, answers if n > 1 else None, label)
        assert_raw(accumulator, raw, label)
        assert accumulator.count == described.nobs
        assert (accumulator.minimum(), accumulator.maximum()) == described.minmax


@pytest.mark.parametrize("n", [1, 2, 3, 4, 5, 20, *AROUND_BLOCKS])
@pytest.mark.parametrize("dtype", DTYPES)
def test_dtypes(dtype, n):
    rng = np.random.default_rng([n, list(DTYPES).index(dtype)])
    values = DTYPES[dtype](rng, n).astype(dtype)
    exact = Reference(values.tolist() if values.dtype.kind in "iub" else values, order=6)
    # SciPy keeps single precision as it is, and would lose half of the digits in it.
    doubles = values.astype(np.float64)
    answers, described = of_scipy(doubles)
    for how, accumulator in ways(values, rng, order=6):
        label = f"{n} readings of {dtype}, {how}"
        assert_statistics(accumulator, doubles, exact, answers if n > 1 else None, label)
        assert (accumulator.minimum(), accumulator.maximum()) == described.minmax


@pytest.mark.parametrize("n", [2, 3, 4, 7, 20, BLOCK - 1, BLOCK, BLOCK + 1, 2 * BLOCK + 1])
@pytest.mark.parametrize("dtype", ["int64", "uint64"])
def test_integers_that_doubles_do_not_hold(dtype, n):
    rng = np.random.default_rng(n)
    ends = np.iinfo(dtype)
    near = np.array([ends.max - int(k) for k in rng.integers(0, 50, n)], dtype)
    full = rng.integers(ends.min, ends.max, n, dtype, endpoint=True)
    for values in (near, full):
        exact = Reference(values.tolist(), order=6)
        for how, accumulator in ways(values, rng, order=6):
            label = f"{n} readings of {dtype}, {how}"
            assert_statistics(accumulator, None, exact, None, label)


@pytest.mark.parametrize("n", [2, 3, 5, 20, 1000, BLOCK - 1, BLOCK, BLOCK + 1, 2 * BLOCK + 1])
@pytest.mark.parametrize("offset", [1e4, 1e8, 1e15])
@pytest.mark.parametrize("law", ["normal", "exponential", "lognormal", "uniform", "bernoulli"])
def test_far_from_zero_the_exact_value_decides(law, offset, n):
    rng = np.random.default_rng([n, list(LAWS).index(law)])
    for center in (offset, -offset):
        values = center + LAWS[law](rng, n)
        exact = Reference(values, order=6)
        for how, accumulator in ways(values, rng, order=6):
            label = f"{n} readings of {law} at {center:g}, {how}"
            assert_statistics(accumulator, values, exact, None, label)


@pytest.mark.parametrize("n", [1, 2, 3, 4, 19, CHANNEL_BLOCK - 1, CHANNEL_BLOCK, CHANNEL_BLOCK + 1])
def test_channels_against_the_first_axis(n):
    rng = np.random.default_rng(n)
    rows = np.stack([LAWS[law](rng, n) for law in ("normal", "gamma", "poisson")], axis=1)
    for how, accumulator in ways(rows, rng, order=6, shape=3):
        for i in range(3):
            column = rows[:, i]
            answers = of_scipy(column)[0] if n > 1 else None
            exact = Reference(column, order=6)
            label = f"{n} rows, column {i}, {how}"
            assert_statistics(accumulator.channel(i), column, exact, answers, label)
        if n > 4:
            # Column by column the same as along the axis.
            assert_close(
                accumulator.skewness(), [accumulator.channel(i).skewness() for i in range(3)],
                ulps=0, label=f"{n} rows: skewness",
            )  # fmt: skip


@pytest.mark.parametrize("shape", [(), (2,)])
@pytest.mark.parametrize("weights", [None, "frequency", "reliability"])
def test_estimates_from_too_few_readings_are_undefined(weights, shape):
    """SciPy answers here with the biased value, and says nothing."""
    readings = [1.0, 5.0, 2.0]
    estimates = {
        "var": lambda a: a.variance(ddof=1),
        "skew_adj": lambda a: a.skewness(bias=False),
        "exkurt_adj": lambda a: a.kurtosis(bias=False),
        **{f"k{k}": lambda a, k=k: a.k_statistic(k) for k in (2, 3, 4)},
    }
    for n in range(4):
        accumulator = ms.Moments(shape=shape, weights=weights)
        for value in readings[:n]:
            reading = value if shape == () else [np.full(shape, value)]
            if weights is None:
                accumulator.update(reading)
            else:
                accumulator.update(reading, 1.0)
        for name, estimate in estimates.items():
            undefined = np.isnan(estimate(accumulator))
            assert np.all(undefined == (n < LEAST[name])), f"{name} of {n} readings"


def test_the_biased_statistics_of_two_readings_are_defined():
    pair = fed([1.0, 5.0])
    assert pair.skewness() == 0.0 == stats.skew([1.0, 5.0])
    assert pair.kurtosis() == -2.0 == stats.kurtosis([1.0, 5.0])
