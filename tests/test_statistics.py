"""Every statistic and every convention, against exact rational arithmetic and enumeration.

The readings here are few, so that rounding is a matter of single units of the last place: sums of
n terms, and some ten operations on them.
"""

import itertools
import math
from fractions import Fraction

import mpmath
import numpy as np
import pytest
from assertions import assert_close
from exact import Exact

import momentstream as ms

NAN, INF = math.nan, math.inf
D = [1.0, 2.0, 3.0, 10.0]
X, W = [1.0, 2.0, 4.0, 8.0, 9.0], [1, 2, 3, 2, 1]
UNITS = 16  # of the last place: what the operations on sums of so few terms may lose

SAMPLES = {
    "D": (D, None),
    "one": ([7.25], None),
    "two": ([-1.0, 3.5], None),
    "three": ([2.0, 2.0, 5.0], None),
    "six": ([0.0, 1.0, 1.0, 2.0, 5.0, 9.0], None),
    "negative": ([-x for x in D], None),
    "far": ([1e8 + x for x in D], None),
    "eight": ([0.1, -3.7, 12.5, 0.30000000000000004, 2.0, -8.125, 1.0, 40.0], None),
    "frequency": (X, W),
    "frequency, one": ([3.0, 8.0], [5, 0]),
    "reliability": (X, [0.25, 1.5, 3.0, 0.125, 1.0]),
    "reliability, whole": (X, W),
    "reliability, one": ([3.0, 8.0], [0.5, 0.0]),
    "reliability, two": ([3.0, 8.0], [0.5, 2.5]),
    "reliability, small": ([3.0, 8.0, 9.0, 1.0], [1e-9, 2e-9, 5e-9, 1e-9]),
}


def fed(name, order=6, **configuration):
    x, w = SAMPLES[name]
    if w is not None:
        configuration["weights"] = name.partition(",")[0]
    return ms.Moments(order, **configuration).update(x, w)


class Truth:
    """What a sample says, in Fractions; the formulas are those of the textbooks."""

    def __init__(self, name, order=6):
        x, w = SAMPLES[name]
        w = [1] * len(x) if w is None else w
        kept = [(Fraction(a), Fraction(b)) for a, b in zip(x, w, strict=True) if b > 0]
        self.x, self.w = [a for a, _ in kept], [b for _, b in kept]
        self.kind = None if SAMPLES[name][1] is None else name.partition(",")[0]
        self.v = [sum(b**j for b in self.w) for j in range(5)]
        self.weight = self.v[1]
        self.count = int(self.weight) if self.kind == "frequency" else len(kept)
        self.mean = sum(a * b for a, b in kept) / self.weight
        self.central = [self.moment(self.mean, k) for k in range(order + 1)]
        self.sizes = [self.moment(self.mean, k, absolute=True) for k in range(order + 1)]

    def moment(self, about, k, absolute=False, farther=0):
        total = 0
        for a, b in zip(self.x, self.w, strict=True):
            total += b * ((abs(a - about) + farther) ** k if absolute else (a - about) ** k)
        return total / self.weight

    def k_statistic(self, k):
        """Kenney and Keeping (1951); with reliability weights as derived by enumeration."""
        m = self.central
        if self.kind == "reliability":
            _, v1, v2, v3, v4 = self.v
            if self.count < k:
                return None
            if k == 2:
                return v1**2 * m[2] / (v1**2 - v2)
            if k == 3:
                return v1**3 * m[3] / (v1**3 - 3 * v1 * v2 + 2 * v3)
            e = v1**2 - v2
            q = v1**4 - 6 * v1**2 * v2 + 8 * v1 * v3 + 3 * v2**2 - 6 * v4
            first = (v1**4 - 4 * v1 * v3 + 3 * v2**2) * m[4]
            second = 3 * (v1**4 - 2 * v1**2 * v2 + 4 * v1 * v3 - 3 * v2**2) * m[2] ** 2
            return v1**2 * (first - second) / (e * q)
        n = self.weight
        if n < k:
            return None
        if k == 2:
            return n * m[2] / (n - 1)
        if k == 3:
            return n**2 * m[3] / ((n - 1) * (n - 2))
        below = (n - 1) * (n - 2) * (n - 3)
        if k == 4:
            return n**2 * ((n + 1) * m[4] - 3 * (n - 1) * m[2] ** 2) / below
        if k == 5:
            return n**3 * ((n + 5) * m[5] - 10 * (n - 1) * m[2] * m[3]) / (below * (n - 4))
        inner = (n + 1) * (n**2 + 15 * n - 4) * m[6]
        inner -= 15 * (n - 1) ** 2 * (n + 4) * m[2] * m[4]
        inner -= 10 * (n - 1) * (n**2 - n + 4) * m[3] ** 2
        inner += 30 * n * (n - 1) * (n - 2) * m[2] ** 3
        return n**2 * inner / (below * (n - 4) * (n - 5))


def both(name, order=6):
    """The accumulator and its summary: one must say what the other says."""
    moments = fed(name, order)
    return moments, moments.summary()


def root(value, k=1):
    """The k-th power of a square root, to 60 digits, as a Fraction."""
    with mpmath.workdps(60):
        power = mpmath.sqrt(mpmath.mpf(value.numerator) / value.denominator) ** k
        return Fraction(mpmath.nstr(power, 55))


# -- level and spread ----------------------------------------------------------------------------


@pytest.mark.parametrize("name", SAMPLES)
def test_counts_and_weights(name):
    truth = Truth(name)
    for source in both(name):
        assert source.count == truth.count
        assert type(source.count) is int
        assert source.omitted == 0
        assert_close(source.weight, truth.weight, ulps=4, label="weight")
        effective = truth.weight
        if truth.kind == "reliability":
            effective = truth.v[1] ** 2 / truth.v[2]
        assert_close(source.effective_count, effective, ulps=8, label="effective_count")
        assert type(source.weight) is type(source.effective_count) is float
        assert source.minimum() == min(truth.x)
        assert source.maximum() == max(truth.x)


@pytest.mark.parametrize("name", SAMPLES)
def test_level_and_spread(name):
    truth = Truth(name)
    for source in both(name):
        assert_close(source.mean(), truth.mean, ulps=1, label="mean")
        assert source.dc() == source.mean()
        assert_close(source.variance(), truth.central[2], ulps=UNITS, label="variance")
        assert_close(source.std(), root(truth.central[2]), ulps=UNITS, label="std")
        assert source.ac_rms() == source.std()
        power = truth.moment(Fraction(0), 2)
        assert_close(source.power(), power, ulps=UNITS, label="power")
        assert source.power() == source.raw(2)
        assert_close(source.rms(), root(power), ulps=UNITS, label="rms")
        for result in (source.mean(), source.variance(), source.rms(), source.power()):
            assert type(result) is float


@pytest.mark.parametrize("ddof", [0, 1, 0.5, 1.5, 2, -1, 3, np.float32(1)])
@pytest.mark.parametrize("name", SAMPLES)
def test_degrees_of_freedom(name, ddof):
    truth = Truth(name)
    loss = Fraction(float(ddof))
    if truth.kind == "reliability":
        loss = loss * truth.v[2] / truth.v[1]
    divisor = truth.weight - loss
    if truth.kind == "reliability" and truth.count == 1 and ddof > 0:
        divisor = 0  # one reading tells nothing of a spread, whatever the rounding of W - V2/W
    wanted = "undefined" if divisor <= 0 else truth.weight * truth.central[2] / divisor
    for source in both(name):
        # The divisor cancels: its rounding counts in units of the weight.
        units = UNITS if divisor <= 0 else UNITS + 4 * float(truth.weight / divisor)
        assert_close(source.variance(ddof), wanted, ulps=units, label=f"variance({ddof})")
        if wanted == "undefined":
            assert math.isnan(source.std(ddof))
        else:
            assert_close(source.std(ddof), root(wanted), ulps=units, label=f"std({ddof})")
        assert source.variance(ddof=ddof) == source.variance(ddof) or wanted == "undefined"


# -- shape ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", SAMPLES)
def test_skewness_and_kurtosis(name):
    truth = Truth(name)
    m = truth.central
    for source in both(name):
        if m[2] == 0:
            assert math.isnan(source.skewness())
            assert math.isnan(source.kurtosis())
            continue
        deviation = root(m[2])
        size = truth.sizes[3] / deviation**3
        skewness = m[3] / deviation**3
        assert_close(
            source.skewness(), skewness, ulps=2 * UNITS, relative_to=size, label="skewness"
        )
        kurtosis = m[4] / m[2] ** 2
        assert_close(source.kurtosis(excess=False), kurtosis, ulps=3 * UNITS, label="kurtosis")
        assert_close(
            source.kurtosis(), kurtosis - 3, ulps=3 * UNITS, relative_to=kurtosis, label="excess"
        )
        assert type(source.skewness()) is type(source.kurtosis()) is float


@pytest.mark.parametrize("name", SAMPLES)
def test_unbiased_skewness_and_kurtosis(name):
    truth = Truth(name)
    k2, k3, k4 = (truth.k_statistic(k) for k in (2, 3, 4))
    few = max(float(truth.v[1] ** 2 / truth.v[2]), 1.0)
    for source in both(name):
        got = source.skewness(bias=False)
        if k3 is None or k2 == 0:
            assert math.isnan(got)
        else:
            size = truth.sizes[3] / root(truth.central[2]) ** 3
            size = max(size, abs(k3 / root(k2) ** 3))
            assert_close(got, k3 / root(k2) ** 3, ulps=8 * UNITS, relative_to=size,
                         label="skewness", inputs=few)  # fmt: skip
        for excess, added in ((True, 0), (False, 3)):
            got = source.kurtosis(excess=excess, bias=False)
            if k4 is None or k2 == 0:
                assert math.isnan(got)
                continue
            size = max(truth.central[4] / truth.central[2] ** 2, abs(k4 / k2**2))
            assert_close(got, k4 / k2**2 + added, ulps=64 * UNITS, relative_to=size,
                         label="kurtosis")  # fmt: skip


# -- moments -------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", SAMPLES)
@pytest.mark.parametrize("order", [1, 2, 3, 4, 6, 9, 16])
def test_central_moments(name, order):
    truth = Truth(name, order)
    for source in both(name, order):
        assert source.order == order
        for k in range(order + 1):
            units = UNITS * max(k, 1)  # a k-th power has k roundings of the deviation
            assert_close(source.central(k), truth.central[k], ulps=units,
                         relative_to=truth.sizes[k] or None, label=f"central({k})")  # fmt: skip
        assert source.central(0) == 1.0
        if order > 1:
            assert source.variance() == source.central(2)


@pytest.mark.parametrize("name", SAMPLES)
@pytest.mark.parametrize("about", [0.0, 1.0, -3.25, 1e8, 4.0, 1e300])
def test_raw_moments(name, about):
    truth = Truth(name)
    point = Fraction(about)
    for source in both(name):
        for k in range(7):
            exact = truth.moment(point, k)
            size = truth.moment(truth.mean, k, absolute=True, farther=abs(truth.mean - point))
            assert_close(source.raw(k, about), exact, ulps=UNITS * max(k, 1),
                         relative_to=size or None, label=f"raw({k}, {about})")  # fmt: skip
        assert_close(source.raw(1), truth.mean, ulps=1, label="raw(1)")
        assert source.raw(3) == source.raw(3, about=0.0)
        assert source.raw(0, about) == 1.0


@pytest.mark.parametrize("name", SAMPLES)
def test_standardized_moments(name):
    truth = Truth(name)
    for source in both(name):
        for k in range(7):
            if truth.central[2] == 0:
                assert math.isnan(source.standardized(k))
                continue
            deviation = root(truth.central[2], k)
            assert_close(source.standardized(k), truth.central[k] / deviation,
                         ulps=2 * UNITS * max(k, 1),
                         relative_to=truth.sizes[k] / deviation, label=k)  # fmt: skip
        if truth.central[2] != 0:
            assert (source.standardized(0), source.standardized(2)) == (1.0, 1.0)
            assert source.standardized(1) == 0.0
            assert source.standardized(3) == source.skewness()


def cumulants(raw, sign=-1):
    """Smith's recursion (1995), in Fractions; with plus signs it gives the size of the terms."""
    kept = [None]
    for n in range(1, len(raw)):
        lower = sum(math.comb(n - 1, j - 1) * kept[j] * raw[n - j] for j in range(1, n))
        kept.append(raw[n] + sign * lower)
    return kept


@pytest.mark.parametrize("name", SAMPLES)
@pytest.mark.parametrize("order", [1, 4, 6, 12])
def test_cumulants(name, order):
    truth = Truth(name, order)
    # Cumulants but the first do not depend on the origin: raw moments give the same.
    exact = cumulants([truth.moment(Fraction(0), k) for k in range(order + 1)])
    sizes = cumulants([1, 0, *truth.sizes[2:]], sign=1)
    for source in both(name, order):
        assert_close(source.cumulant(1), truth.mean, ulps=1, label="cumulant(1)")
        for k in range(2, order + 1):
            assert_close(source.cumulant(k), exact[k], ulps=UNITS * k,
                         relative_to=sizes[k] or None, label=f"cumulant({k})")  # fmt: skip
        if order > 1:
            assert source.cumulant(2) == source.variance()


@pytest.mark.parametrize("name", SAMPLES)
def test_k_statistics(name):
    truth = Truth(name)
    top = 4 if truth.kind == "reliability" else 6
    for source in both(name):
        assert source.k_statistic(1) == source.mean()
        for k in range(2, top + 1):
            exact = truth.k_statistic(k)
            if exact is None:
                assert math.isnan(source.k_statistic(k))
                continue
            # Terms of both signs cancel for few readings: what they are is the size.
            n = truth.weight if truth.kind != "reliability" else Fraction(truth.count)
            shrink = math.prod(1 - Fraction(j) / n for j in range(1, k))
            size = max(abs(exact), cumulants([1, 0, *truth.sizes[2:]], sign=1)[k]) / shrink
            assert_close(source.k_statistic(k), exact, ulps=4 * UNITS, relative_to=size or None,
                         label=f"k_statistic({k})")  # fmt: skip


def test_published_k_statistics():
    """The values of the formula book, by hand from Kenney and Keeping (1951)."""
    moments = ms.Moments(6).update(D)
    for k, exact in ((2, "50/3"), (3, "120"), (4, "2690/3")):
        assert_close(moments.k_statistic(k), exact, ulps=4, label=f"k{k} of D")
    moments = ms.Moments(6).update([0.0, 1.0, 1.0, 2.0, 5.0, 9.0])
    published = {2: "58/5", 3: "54", 4: "786/5", 5: "-1350", 6: "-182422/5"}
    for k, exact in published.items():
        # The terms of k6 of six readings are some ten times what is left of them.
        units = 64 if k == 6 else 8
        assert_close(moments.k_statistic(k), exact, ulps=units, label=f"k{k} of six")
    moments = ms.Moments(4, weights="reliability").update(X, W)
    for k, exact in ((2, "315/31"), (3, "303/17"), (4, "-117453/620")):
        assert_close(moments.k_statistic(k), exact, ulps=16, label=f"reliability k{k}")
    assert_close(moments.effective_count, "81/19", ulps=1, label="effective count")
    assert_close(moments.variance(ddof=1), "315/31", ulps=8, label="variance(1)")
    # Not what the effective count in Fisher's formula would give: that is biased.
    assert abs(moments.k_statistic(3) - 18.41) > 0.5


def every_sample(n):
    """All samples of n from the population {0, 1, 3}, a channel each."""
    return np.array(list(itertools.product([0.0, 1.0, 3.0], repeat=n))).T


# mean 4/3 of the population {0, 1, 3}
POPULATION = cumulants([Fraction(0**k + 1 + 3**k, 3) for k in range(7)])


@pytest.mark.parametrize("n", [2, 3, 4, 5, 6, 7])
def test_k_statistics_are_unbiased(n):
    """Over all samples of a small population they average to its cumulants, exactly."""
    x = every_sample(n)
    moments = ms.Moments(6, shape=x.shape[1]).update(x)
    for k in range(1, min(n, 6) + 1):
        values = moments.k_statistic(k)
        assert values.shape == (3**n,)
        size = Fraction(float(np.max(np.abs(values))))
        assert_close(math.fsum(values) / 3**n, POPULATION[k], ulps=UNITS, relative_to=size,
                     label=f"k{k} of {n}")  # fmt: skip
    for k in range(n + 1, 7):
        assert np.all(np.isnan(moments.k_statistic(k)))


@pytest.mark.parametrize(
    "w",
    [[1, 1], [1, 2, 3], [0.5, 2.0, 1.0, 0.25], [1, 2, 3, 2, 1], [8, 1, 1, 1, 1, 0.125]],
    ids=str,
)
def test_weighted_k_statistics_are_unbiased(w):
    x = every_sample(len(w))
    moments = ms.Moments(4, shape=x.shape[1], weights="reliability").update(x, w)
    for k in range(1, min(len(w), 4) + 1):
        values = moments.k_statistic(k)
        size = Fraction(float(np.max(np.abs(values))))
        assert_close(math.fsum(values) / 3 ** len(w), POPULATION[k], ulps=2 * UNITS,
                     relative_to=size, label=f"k{k}")  # fmt: skip
    assert_close(math.fsum(moments.variance(ddof=1)) / 3 ** len(w), POPULATION[2], ulps=2 * UNITS,
                 relative_to=10, label="variance(1)")  # fmt: skip


@pytest.mark.parametrize("order", [4, 6])
def test_frequencies_are_repetition(order):
    repeated = [x for x, w in zip(X, W, strict=True) for _ in range(w)]
    often = ms.Moments(order, weights="frequency").update(X, W)
    plain = ms.Moments(order).update(repeated)
    for read in (
        lambda m: m.mean(), lambda m: m.variance(), lambda m: m.variance(1), lambda m: m.std(1),
        lambda m: m.skewness(), lambda m: m.skewness(False), lambda m: m.kurtosis(False),
        lambda m: m.kurtosis(True, False), lambda m: m.k_statistic(2), lambda m: m.k_statistic(4),
        lambda m: m.weight, lambda m: m.effective_count, lambda m: m.rms(),
    ):  # fmt: skip
        assert_close(read(often), Fraction(read(plain)), ulps=4 * UNITS, label="repetition")
    assert often.count == plain.count == 9


@pytest.mark.parametrize("factor", [2.0**-40, 3.0, 2.0**300, 1e-200])
def test_only_ratios_of_reliabilities_matter(factor):
    base = ms.Moments(4, weights="reliability").update(X, W)
    other = ms.Moments(4, weights="reliability").update(X, [w * factor for w in W])
    exact = math.frexp(factor)[0] == 0.5
    for read in (
        lambda m: m.mean(), lambda m: m.variance(1), lambda m: m.skewness(bias=False),
        lambda m: m.kurtosis(bias=False), lambda m: m.k_statistic(4), lambda m: m.effective_count,
    ):  # fmt: skip
        # A power of two moves no bit.
        units = 0 if exact else 8 * UNITS
        assert_close(read(other), Fraction(read(base)), ulps=units, label=f"weights * {factor}")


# -- the signal engineer's words -----------------------------------------------------------------


@pytest.mark.parametrize("name", SAMPLES)
def test_crest_factor(name):
    truth = Truth(name)
    for source in both(name):
        if truth.central[2] == 0:
            assert math.isnan(source.crest_factor())
            continue
        peak = max(max(truth.x) - truth.mean, truth.mean - min(truth.x))
        crest = peak / root(truth.central[2])
        assert_close(source.crest_factor(), crest, ulps=UNITS, label="crest factor")


def test_signals():
    """Half a volt of direct voltage under a sine of amplitude one, and a square wave."""
    t = np.arange(1000) / 1000
    sine = ms.Moments().update(0.5 + np.sin(2 * np.pi * t))
    assert sine.dc() == pytest.approx(0.5, abs=2.0**-50)
    assert sine.ac_rms() == pytest.approx(math.sqrt(0.5), rel=2.0**-48)
    assert sine.rms() == pytest.approx(math.sqrt(0.75), rel=2.0**-48)
    assert sine.crest_factor() == pytest.approx(math.sqrt(2.0), rel=2.0**-48)
    square = ms.Moments().update([1.0, -1.0] * 50)
    assert (square.crest_factor(), square.rms(), square.power(), square.dc()) == (1, 1, 1, 0)


# -- beyond the range of doubles, and no warnings ------------------------------------------------


def test_beyond_the_range_of_doubles():
    moments = ms.Moments(6).update([1e200, -1e200, 1e200, 3e200])
    assert moments.variance() == INF
    assert moments.variance(1) == INF
    assert moments.power() == INF
    assert_close(moments.std(), root(Exact([1e200, -1e200, 1e200, 3e200]).central(2)), ulps=UNITS,
                 label="std")  # fmt: skip
    assert moments.rms() == pytest.approx(math.sqrt(3) * 1e200, rel=2.0**-50)
    assert [moments.central(k) for k in (2, 4, 6)] == [INF] * 3
    assert abs(moments.skewness()) < 1.0
    assert moments.k_statistic(2) == INF
    signs = ms.Moments(5).update([-1e200, 0.0, 0.0, 0.0])
    assert (signs.central(3), signs.central(5), signs.raw(3), signs.raw(4)) == (
        -INF,
        -INF,
        -INF,
        INF,
    )
    assert signs.cumulant(3) == -INF
    assert ms.Moments().update([1e200, -1e200]).cumulant(4) == -INF
    assert ms.Moments().update([1e200, 1e200]).raw(2) == INF
    assert ms.Moments().update([1e200, 1e200]).variance() == 0.0


def test_below_the_range_of_doubles():
    x = [1e-200, 3e-200, 7e-200]
    moments = ms.Moments(6).update(x)
    assert (moments.variance(), moments.variance(1), moments.power()) == (0.0, 0.0, 0.0)
    assert (moments.central(3), moments.cumulant(4), moments.raw(2)) == (0.0, 0.0, 0.0)
    exact = Exact(x)
    assert_close(moments.std(), root(exact.central(2)), ulps=UNITS, label="std")
    skewness = exact.central(3) / root(exact.central(2), 3)
    assert_close(moments.skewness(), skewness, ulps=2 * UNITS, label="skewness")
    kurtosis = exact.central(4) / exact.central(2) ** 2
    assert_close(moments.kurtosis(excess=False), kurtosis, ulps=3 * UNITS, label="kurtosis")
    tiny = ms.Moments().update([5e-324, 1e-323, 5e-324])
    assert tiny.mean() == 5e-324  # 20/3 of the least double is 1.33 of it, and rounds to it
    assert tiny.std() == 0.0 or tiny.std() == 5e-324
    assert tiny.skewness() == pytest.approx(math.sqrt(0.5), rel=2.0**-48)


@pytest.mark.parametrize("power", [-1000, -600, -300, -1, 1, 300, 600, 1000])
@pytest.mark.parametrize("weights", [None, "frequency", "reliability"])
def test_ratios_do_not_see_the_scale(power, weights):
    x = np.array([1.25, -2.5, 3.75, 10.0, 0.5, 7.0])
    w = None if weights is None else [1, 2, 1, 3, 1, 1]
    base = ms.Moments(6, weights=weights).update(x, w)
    other = ms.Moments(6, weights=weights).update(np.ldexp(x, power), w)
    for read in (
        lambda m: m.skewness(), lambda m: m.kurtosis(), lambda m: m.skewness(bias=False),
        lambda m: m.kurtosis(bias=False), lambda m: m.standardized(5), lambda m: m.standardized(6),
        lambda m: m.crest_factor(),
    ):  # fmt: skip
        assert read(other) == read(base)
    assert math.ldexp(base.std(), power) == other.std()
    assert math.ldexp(base.mean(), power) == other.mean()
    assert math.ldexp(base.rms(), power) == other.rms()


def test_an_empty_accumulator_knows_nothing():
    for weights in (None, "frequency", "reliability"):
        empty = ms.Moments(6, weights=weights)
        for source in (empty, empty.summary()):
            assert (source.count, source.omitted) == (0, 0)
            assert (source.weight, source.effective_count) == (0.0, 0.0)
            for name in ("mean", "variance", "std", "skewness", "kurtosis", "minimum", "maximum",
                         "dc", "rms", "ac_rms", "power", "crest_factor"):  # fmt: skip
                assert math.isnan(getattr(source, name)()), name
            for k in range(1, 5):
                for name in ("central", "raw", "standardized", "cumulant", "k_statistic"):
                    assert math.isnan(getattr(source, name)(k)), (name, k)
            assert math.isnan(source.central(0))
            assert math.isnan(source.raw(0))
            assert math.isnan(source.variance(1))
            assert math.isnan(source.skewness(bias=False))


@pytest.mark.parametrize("n", range(1, 8))
def test_too_few_for_an_unbiased_estimate(n):
    x = [1.0, 2.0, 4.0, 8.0, 16.0, 32.0, 64.0][:n]
    for moments in (
        ms.Moments(6).update(x),
        ms.Moments(6, weights="frequency").update(x, 1),
        ms.Moments(6, weights="reliability").update(x, 0.3),
    ):
        assert math.isnan(moments.variance(1)) == (n < 2)
        assert math.isnan(moments.skewness()) == (n < 2)
        assert math.isnan(moments.skewness(bias=False)) == (n < 3)
        assert math.isnan(moments.kurtosis(bias=False)) == (n < 4)
        top = 4 if moments.weights == "reliability" else 6
        for k in range(2, top + 1):
            assert math.isnan(moments.k_statistic(k)) == (n < k)
        if moments.weights != "reliability":
            assert math.isnan(moments.variance(n))
            assert n == 1 or moments.variance(n - 1) > 0.0


# -- channels ------------------------------------------------------------------------------------


@pytest.mark.parametrize("weights", [None, "frequency", "reliability"])
@pytest.mark.parametrize("shape", [(1,), (3,), (2, 2)], ids=str)
def test_channels_are_arrays_of_the_shape(shape, weights):
    size = math.prod(shape)
    x = np.cos(np.arange(7.0 * size)).reshape(7, *shape)
    x[:, *(0,) * len(shape)] = 2.0  # a constant channel
    x[3, *(-1,) * len(shape)] = NAN
    w = None if weights is None else [1, 2, 1, 3, 1, 1, 0]
    moments = ms.Moments(6, shape=shape, weights=weights, nonfinite="omit").update(x, w)
    for source in (moments, moments.summary()):
        for name in ("count", "omitted", "weight", "effective_count"):
            value = getattr(source, name)
            assert value.shape == shape
            assert value.dtype.kind == ("i" if name in ("count", "omitted") else "f")
            for place in np.ndindex(*shape):
                assert value[place] == getattr(moments.channel(place), name)
        reads = [
            lambda m: m.mean(), lambda m: m.variance(), lambda m: m.variance(ddof=1),
            lambda m: m.std(0.5), lambda m: m.skewness(), lambda m: m.skewness(bias=False),
            lambda m: m.kurtosis(), lambda m: m.kurtosis(False, False), lambda m: m.minimum(),
            lambda m: m.maximum(), lambda m: m.dc(), lambda m: m.rms(), lambda m: m.ac_rms(),
            lambda m: m.power(), lambda m: m.crest_factor(), lambda m: m.k_statistic(3),
            *(lambda m, k=k: m.central(k) for k in range(7)),
            *(lambda m, k=k: m.raw(k, 0.5) for k in range(7)),
            *(lambda m, k=k: m.standardized(k) for k in range(7)),
            *(lambda m, k=k: m.cumulant(k) for k in range(1, 7)),
        ]  # fmt: skip
        for i, read in enumerate(reads):
            value = read(source)
            assert isinstance(value, np.ndarray), i
            assert value.shape == shape
            assert value.dtype == np.float64
            for place in np.ndindex(*shape):
                assert np.array_equal(value[place], read(moments.channel(place)), equal_nan=True), i


def test_what_is_read_is_not_the_state():
    moments = ms.Moments(shape=2).update([[1.0, 2.0], [3.0, 5.0]])
    before = moments.to_bytes(resume=True)
    for name in ("mean", "variance", "std", "skewness", "minimum", "maximum", "rms"):
        getattr(moments, name)()[:] = 99.0
    for name in ("count", "omitted", "weight", "effective_count"):
        getattr(moments, name)[:] = 99
    assert moments.to_bytes(resume=True) == before
    assert moments.count.tolist() == [2, 2]
    assert moments.maximum().tolist() == [3.0, 5.0]


def test_asking_changes_nothing():
    moments = ms.Moments(6).update(np.arange(9000.0)).update(3.5)
    before = moments.copy().to_bytes(resume=True)
    for _ in range(2):
        moments.kurtosis(bias=False)
        moments.summary()
        repr(moments)
        assert moments.count == 9001
        assert moments == moments.copy()
    assert moments.to_bytes(resume=True) == before
    rest = [1.0, 2.0, 3.0]
    assert moments.update(rest).to_bytes(True) == ms.Moments(6).update(np.arange(9000.0)).update(
        [3.5, *rest]
    ).to_bytes(True)


# -- removal, affine maps, moments from elsewhere ------------------------------------------------


@pytest.mark.parametrize("weights", [None, "frequency", "reliability"])
@pytest.mark.parametrize("shape", [(), (2,)], ids=str)
@pytest.mark.parametrize("order", [1, 2, 4, 5])
def test_what_is_left_after_a_removal(order, shape, weights):
    left, gone = [*D, 4.0], X

    def made(values, w):
        x = np.array(values)
        if shape:
            x = np.stack([x, -2.0 * x], axis=1)
        moments = ms.Moments(order, shape=shape, weights=weights)
        return moments.update(x, None if weights is None else w)

    rest_weights, gone_weights = [1, 2, 1, 1, 2], W
    whole = made(left + gone, rest_weights + gone_weights)
    assert whole.remove(made(gone, gone_weights)) is whole
    alone = made(left, rest_weights)
    assert np.array_equal(whole.count, alone.count)
    assert np.array_equal(whole.omitted, alone.omitted)
    total = Exact(left + gone, None if weights is None else rest_weights + gone_weights, order)
    assert np.all(whole.weight == alone.weight)
    assert np.allclose(whole.effective_count, alone.effective_count, rtol=64 * 2.0**-52, atol=0)
    assert np.allclose(whole.mean(), alone.mean(), rtol=64 * 2.0**-52, atol=0)
    for k in range(2, order + 1):
        # 64 units of the sums of the whole; the second channel is -2 times the first.
        size = float(total.absolute(k)) / np.ravel(alone.weight)[0]
        slack = 64 * 2.0**-52 * size * np.array([1.0, 2.0**k] if shape else 1.0)
        assert np.all(np.abs(whole.central(k) - alone.central(k)) <= slack), k
    if order >= 2:
        assert np.allclose(whole.variance(1), alone.variance(1), rtol=2.0**-40, atol=0)
        assert np.allclose(whole.k_statistic(2), alone.k_statistic(2), rtol=2.0**-40, atol=0)
    assert np.all(np.isnan(whole.minimum()))
    assert np.all(np.isnan(whole.maximum()))
    back = ms.from_bytes(whole.to_bytes())
    assert back == whole
    # What is left can be worked on: the part comes back in with its full weight.
    whole.merge(made(gone, gone_weights))
    again = made(left + gone, rest_weights + gone_weights)
    assert np.all(whole.weight == again.weight)
    assert np.allclose(whole.mean(), again.mean(), rtol=2.0**-40, atol=0)
    if order >= 2:
        assert np.allclose(whole.variance(), again.variance(), rtol=2.0**-40, atol=0)


def test_removal_down_to_one_and_to_none():
    whole = ms.Moments().update([1.0, 2.0, 1e9])
    whole.remove(ms.Moments().update([1.0, 1e9]))
    assert (whole.count, whole.weight, whole.variance()) == (1, 1.0, 0.0)
    assert whole.mean() == pytest.approx(2.0, abs=1e-6)
    whole.remove(whole.copy())
    assert whole == ms.Moments()
    assert math.isnan(whole.mean())
    whole.update([3.0, 5.0])
    assert (whole.mean(), whole.minimum(), whole.maximum()) == (4.0, 3.0, 5.0)
    same = ms.Moments().update(D)
    same.remove(ms.Moments())
    assert same == ms.Moments().update(D)
    assert same.maximum() == 10.0


@pytest.mark.parametrize(("scale", "offset"), [(2.0, 0.0), (-0.5, 3.0), (1.8, 32.0), (-3, -1e6),
                                               (1.0, 0.0), (1e-3, 1e3), (1e150, 0.0)])  # fmt: skip
@pytest.mark.parametrize("weights", [None, "frequency", "reliability"])
def test_affine_maps(scale, offset, weights):
    w = None if weights is None else W
    moments = ms.Moments(6, weights=weights).update(X, w)
    mapped = [Fraction(scale) * Fraction(v) + Fraction(offset) for v in X]
    total = sum(W) if w else len(X)
    mean = sum(a * b for a, b in zip(mapped, w or [1] * 5, strict=True)) / Fraction(total)
    for source in (moments.affine(scale, offset), moments.summary().affine(scale, offset)):
        assert (source.count, source.weight) == (moments.count, moments.weight)
        assert source.effective_count == moments.effective_count
        assert_close(source.mean(), mean, ulps=2, label="mean")
        for k in range(2, 7):
            exact = Fraction(scale) ** k * Exact(X, w, 6).central(k)
            size = Fraction(abs(scale)) ** k * mean_size(X, w, k)
            assert_close(source.central(k), exact, ulps=UNITS * k, relative_to=size,
                         label=f"central({k})")  # fmt: skip
        ends = sorted(float(scale) * v + offset for v in (1.0, 9.0))
        assert [source.minimum(), source.maximum()] == ends
        assert source.skewness() == pytest.approx(
            math.copysign(1, scale) * moments.skewness(), rel=2.0**-45
        )
    assert moments == ms.Moments(6, weights=weights).update(X, w)
    assert moments.affine().mean() == moments.mean()


def mean_size(x, w, k):
    w = [1] * len(x) if w is None else w
    mean = Fraction(sum(Fraction(a) * b for a, b in zip(x, w, strict=True)), sum(w))
    return sum(b * abs(Fraction(a) - mean) ** k for a, b in zip(x, w, strict=True)) / sum(w)


def test_affine_maps_to_a_constant():
    for source in (
        ms.Moments().update(D).affine(0.0, 5.0),
        ms.Moments().update(D).summary().affine(0, 5),
    ):
        assert (source.mean(), source.variance(), source.minimum(), source.maximum()) == (
            5,
            0,
            5,
            5,
        )
        assert math.isnan(source.skewness())
        assert math.isnan(source.kurtosis())
    empty = ms.Moments().affine(3.0, 1.0)
    assert empty == ms.Moments()
    assert math.isnan(empty.minimum())


def test_affine_accumulators_can_be_fed_and_merged():
    celsius = ms.Moments().update([10.0, 20.0, 24.0])
    fahrenheit = celsius.affine(1.8, 32.0).update(98.6)
    whole = ms.Moments().update([50.0, 68.0, 75.2, 98.6])
    assert fahrenheit.count == 4
    assert_close(fahrenheit.mean(), Fraction(whole.mean()), ulps=4, label="mean")
    assert_close(fahrenheit.variance(), Fraction(whole.variance()), ulps=64, label="variance")
    assert fahrenheit.maximum() == 98.6


@pytest.mark.parametrize("order", range(1, 9))
def test_moments_from_elsewhere(order):
    exact = Exact(D, None, order)
    central = [float(exact.central(k)) for k in range(2, order + 1)]
    made = ms.Moments.from_central(4.0, central, count=4, minimum=1.0, maximum=10.0)
    fed_in = ms.Moments(order).update(D)
    assert made.order == order
    assert (made.count, made.weight, made.mean()) == (4, 4.0, 4.0)
    for k in range(2, order + 1):
        assert_close(made.central(k), exact.central(k), ulps=2, label=f"central({k})")
    made.merge(ms.Moments(order).update(X)).update(7.0)
    fed_in.merge(ms.Moments(order).update(X)).update(7.0)
    assert made.count == 10
    assert (made.minimum(), made.maximum()) == (1.0, 10.0)
    for k in range(2, order + 1):
        assert_close(made.central(k), Fraction(fed_in.central(k)), ulps=64, label=f"central({k})",
                     relative_to=mean_size(D + X + [7.0], None, k))  # fmt: skip


def test_channels_from_elsewhere():
    made = ms.Moments.from_central(
        [[4.0, 0.0]], [[[12.5, 1.0]], [[45.0, 0.0]]], count=4, minimum=[[1.0, -1.0]]
    )
    assert (made.order, made.shape) == (3, (1, 2))
    assert made.count.tolist() == [[4, 4]]
    assert made.variance().tolist() == [[12.5, 1.0]]
    assert made.skewness()[0, 0] == pytest.approx(1.0182337649086284, rel=2.0**-50)
    assert made.minimum().tolist() == [[1.0, -1.0]]
    assert np.all(np.isnan(made.maximum()))


@pytest.mark.parametrize("spread", [1e-300, 1e-150, 1.0, 1e150, 1e200])
def test_moments_from_elsewhere_at_any_scale(spread):
    """What was given comes back: no scale of the mean may swallow the spread."""
    for mean in (0.0, 1.0, 1e100, 1e300):
        variance = min(spread * spread, 1e300) or 1e-320
        made = ms.Moments.from_central(mean, [variance], count=9)
        assert made.mean() == mean
        assert made.variance() == variance
        assert made.std() == pytest.approx(math.sqrt(variance), rel=2.0**-50)


# -- Moments of one reading at a time, named example ---------------------------------------------


def test_the_running_example():
    """D = {1, 2, 3, 10}: mean 4, M2..M8 = 50, 180, 1394, 7500, 47450, 277620, 1686434."""
    moments = ms.Moments(8).update(D)
    assert moments.mean() == 4.0
    sums = [50, 180, 1394, 7500, 47450, 277620, 1686434]
    assert [4 * moments.central(k) for k in range(2, 9)] == sums
    assert moments.skewness() == 1.0182337649086284
    assert_close(moments.kurtosis(), "-0.7696", ulps=2, relative_to=3, label="kurtosis")
    for factor in (2.0**1000, 2.0**-1000):
        scaled = ms.Moments(8).update([x * factor for x in D])
        assert scaled.skewness() == moments.skewness()
        assert scaled.kurtosis() == moments.kurtosis()
