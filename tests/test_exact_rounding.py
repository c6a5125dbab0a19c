"""Each statistic of ``ExactMoments`` is the double nearest to the exact value.

Proved without rounding: the exact value, a ratio of integers (or the root of one), lies between
the two midpoints of the double that was read and its neighbours; on a midpoint the double's last
bit is even.  Infinity counts as the even neighbour of the largest double.  The exact values are
sums over the readings themselves, not over their powers.
"""

import math
import struct
from fractions import Fraction

import numpy as np
import pytest
from assertions import assert_close
from exact import integers
from published import load, read
from test_published_values import CASES, readings_of

import momentstream as ms

NAN, INF = math.nan, math.inf
LARGEST, LEAST = float.fromhex("0x1.fffffffffffffp1023"), 5e-324
DDOFS = (0, 1, 0.5)
POINTS = (1.5, -3e-7, 1e300, 3)


# -- the proof -------------------------------------------------------------------------------------


def midpoints(value):
    """The midpoints below and above a double that is not negative, as integers times 2**e.

    And whether its last bit is even.
    """
    (bits,) = struct.unpack("<Q", struct.pack("<d", value))
    biased, fraction = bits >> 52, bits & (2**52 - 1)
    m = fraction + (2**52 if biased else 0)
    e = max(biased, 1) - 1075
    # In quarters of a unit: below a power of two the doubles are twice as dense.
    below = 4 * m - (1 if fraction == 0 and biased > 1 else 2)
    return below, 4 * m + 2, e - 2, bits % 2 == 0


def assert_nearest(got, above, below=1, exponent=0, root=False, sign=1, label=""):
    """``got`` is the nearest double to above / below * 2**exponent.

    With ``root`` to sign * sqrt(above / below) * 2**exponent.
    """
    assert type(got) is float, label
    assert not math.isnan(got), f"{label}: nan, not {above} / {below} * 2**{exponent}"
    sign = sign if root else (above > 0) - (above < 0)
    if above == 0:
        assert got == 0.0, f"{label}: {got!r}, not 0"
        return
    assert got == 0.0 or (got > 0.0) == (sign > 0), f"{label}: {got!r} has the wrong sign"
    low, high, e, even = midpoints(abs(got))
    ratio, power = abs(above), 2 if root else 1
    shift = power * (exponent - e)

    def side(midpoint):
        """-1, 0, 1: the exact value is below, on, above the midpoint."""
        left, right = ratio, midpoint**power * below
        left, right = (left << shift, right) if shift >= 0 else (left, right << -shift)
        return (left > right) - (left < right)

    at_low = 1 if got == 0.0 else side(low)
    at_high = -1 if math.isinf(got) else side(high)
    assert at_low > 0 or (at_low == 0 and even), f"{label}: {got!r} is too large"
    assert at_high < 0 or (at_high == 0 and even), f"{label}: {got!r} is too small"


def test_the_proof_tells_neighbours_apart():
    for value in (1.0, 1.5, LEAST, 2.0**-1022, 2.0**-1022 - LEAST, 2.0**-1021, LARGEST, 0.1, 3e200):
        above, below = value.as_integer_ratio()
        assert_nearest(value, above, below)
        assert_nearest(-value, -above, below)
        assert_nearest(value, above**2, below**2, root=True)
        for other in (math.nextafter(value, INF), math.nextafter(value, 0.0), -value):
            with pytest.raises(AssertionError):
                assert_nearest(other, above, below)
            with pytest.raises(AssertionError):
                assert_nearest(other, above**2, below**2, root=True)
        # Midpoints go to the even neighbour, and what is a little off them does not.
        upper = math.nextafter(value, INF)
        top = Fraction(upper) if upper < INF else Fraction(2**1024)
        middle = (Fraction(value) + top) / 2
        odd = struct.unpack("<Q", struct.pack("<d", value))[0] & 1
        a, b = (upper, value) if odd else (value, upper)
        assert_nearest(a, middle.numerator, middle.denominator)
        with pytest.raises(AssertionError):
            assert_nearest(b, middle.numerator, middle.denominator)
        above, below = middle.numerator * 10**40, middle.denominator * 10**40
        assert_nearest(upper, above + 1, below)
        assert_nearest(value, above - 1, below)
        with pytest.raises(AssertionError):
            assert_nearest(upper, above - 1, below)
        with pytest.raises(AssertionError):
            assert_nearest(value, above + 1, below)
    assert_nearest(0.0, 1, 2**1075)
    assert_nearest(LEAST, 2**60 + 1, 2**1135)
    with pytest.raises(AssertionError):
        assert_nearest(LEAST, 1, 2**1075)


# -- exact values ----------------------------------------------------------------------------------


def exact_values(readings):
    """(name, how it is read, what it must be: a tuple for ``assert_nearest``, or None for nan)."""
    x, e = integers(readings)
    n = len(x)
    total = sum(x)
    away = [n * v - total for v in x]  # deviations times n
    c2, c3, c4 = (sum(d**k for d in away) for k in (2, 3, 4))
    sign = -1 if c3 < 0 else 1

    def ratio(above, below=1, exponent=0):
        return None if below == 0 else (above, below, exponent)

    def root(above, below, exponent=0, sign=1):
        return None if below == 0 else (above, below, exponent, True, sign)

    yield "mean", lambda a: a.mean(), ratio(total, n, e)
    yield "dc", lambda a: a.dc(), ratio(total, n, e)
    yield "rms", lambda a: a.rms(), root(sum(v * v for v in x), n, e)
    for ddof in DDOFS:
        divisor = n * n * (n - Fraction(ddof))
        above, below = c2 * divisor.denominator, max(divisor.numerator, 0)
        yield f"variance({ddof})", lambda a, d=ddof: a.variance(d), ratio(above, below, 2 * e)
        yield f"std({ddof})", lambda a, d=ddof: a.std(d), root(above, below, e)
    for k, c in ((2, c2), (3, c3), (4, c4)):
        yield f"central({k})", lambda a, k=k: a.central(k), ratio(c, n ** (k + 1), k * e)
    for k in (1, 2, 3, 4):
        raw = sum(v**k for v in x)
        yield f"raw({k})", lambda a, k=k: a.raw(k), ratio(raw, n, k * e)
        for point in POINTS:
            (p,), f = integers([point])
            low = min(e, f)
            y = [(v << (e - low)) - (p << (f - low)) for v in x]
            yield (
                f"raw({k}, {point})",
                lambda a, k=k, p=point: a.raw(k, about=p),
                ratio(sum(v**k for v in y), n, k * low),
            )
    skew = c3**2 * n, c2**3
    yield "skewness", lambda a: a.skewness(), root(*skew, sign=sign)
    yield "standardized(3)", lambda a: a.standardized(3), root(*skew, sign=sign)
    adjusted = skew[0] * n * (n - 1), skew[1] * (n - 2) ** 2 if n >= 3 else 0
    yield "skewness(bias=False)", lambda a: a.skewness(bias=False), root(*adjusted, sign=sign)
    b2, square = c4 * n, c2**2
    yield "standardized(4)", lambda a: a.standardized(4), ratio(b2, square)
    yield "kurtosis(excess=False)", lambda a: a.kurtosis(excess=False), ratio(b2, square)
    yield "kurtosis", lambda a: a.kurtosis(), ratio(b2 - 3 * square, square)
    above = (n - 1) * ((n + 1) * b2 - 3 * (n - 1) * square)
    below = (n - 2) * (n - 3) * square if n >= 4 else 0
    yield "kurtosis(bias=False)", lambda a: a.kurtosis(bias=False), ratio(above, below)
    yield (
        "kurtosis(excess=False, bias=False)",
        lambda a: a.kurtosis(excess=False, bias=False),
        ratio(above + 3 * below, below),
    )
    yield "cumulant(1)", lambda a: a.cumulant(1), ratio(total, n, e)
    yield "cumulant(2)", lambda a: a.cumulant(2), ratio(c2, n**3, 2 * e)
    yield "cumulant(3)", lambda a: a.cumulant(3), ratio(c3, n**4, 3 * e)
    yield "cumulant(4)", lambda a: a.cumulant(4), ratio(n * c4 - 3 * c2**2, n**6, 4 * e)
    below = n * n * (n - 1)
    yield "k_statistic(1)", lambda a: a.k_statistic(1), ratio(total, n, e)
    yield "k_statistic(2)", lambda a: a.k_statistic(2), ratio(c2, below, 2 * e)
    below = below * (n - 2) if n >= 3 else 0
    yield "k_statistic(3)", lambda a: a.k_statistic(3), ratio(c3, below, 3 * e)
    below = below * (n - 3) * n * n if n >= 4 else 0
    fourth = (n + 1) * n * c4 - 3 * (n - 1) * c2**2
    yield "k_statistic(4)", lambda a: a.k_statistic(4), ratio(fourth, below, 4 * e)


def assert_correctly_rounded(readings, accumulator=None):
    accumulator = ms.ExactMoments().update(readings) if accumulator is None else accumulator
    plain = readings.tolist() if isinstance(readings, np.ndarray) else readings
    for name, how, wanted in exact_values(plain):
        got = how(accumulator)
        label = f"{name} of {str(plain)[:300]}"
        if wanted is None:
            assert math.isnan(got), f"{label}: {got!r}, not nan"
        else:
            assert_nearest(got, *wanted, label=label)
    x, e = integers(plain)
    n, unit = len(x), Fraction(2) ** e
    mean = unit * Fraction(sum(x), n)
    central = [sum((n * v - sum(x)) ** k for v in x) * unit**k / n ** (k + 1) for k in (2, 3, 4)]
    assert accumulator.as_fractions() == {
        "count": n, "mean": mean, "central_2": central[0], "central_3": central[1],
        "central_4": central[2],
    }  # fmt: skip


# -- random readings -------------------------------------------------------------------------------


def decades(rng, n):
    """Both signs, from the least subnormal number to near the largest."""
    x = 10.0 ** rng.uniform(-320.0, 308.0, n) * rng.choice([-1.0, 1.0], n)
    return np.where(rng.random(n) < 0.1, 0.0, x)


def cancelling(rng, n):
    far = rng.normal(size=n) * 10.0 ** rng.integers(0, 300)
    return rng.permutation(np.concatenate([far, -far, rng.normal(size=3)]))


def near_powers_of_two(rng, n):
    units = rng.integers(-3, 4, n)
    return (1.0 + np.where(units < 0, units / 2, units) * 2.0**-52) * 2.0 ** rng.integers(-500, 500)


def python_integers(rng, n):
    wide = [int(v) for v in rng.integers(-(2**63), 2**63 - 1, n)]
    return [v * 2 + 1 if v > 0 and i % 3 == 0 else v for i, v in enumerate(wide)]


KINDS = {
    "normal": lambda rng, n: rng.normal(rng.choice([0.0, 5.0, 1e8]), size=n),
    "decades": decades,
    "thirty decades": lambda rng, n: 10.0 ** rng.uniform(-15.0, 15.0, n),
    "cancelling": cancelling,
    "near powers of two": near_powers_of_two,
    "constant": lambda rng, n: np.full(n, decades(rng, 1)[0]),
    "two values": lambda rng, n: rng.choice(decades(rng, 2), n),
    "subnormal": lambda rng, n: rng.integers(-9, 10, n) * LEAST,
    "about the least normal": lambda rng, n: rng.integers(-(2**53), 2**53, n) * LEAST,
    "variance vanishes": lambda rng, n: rng.normal(size=n) * 10.0 ** rng.uniform(-165, -150),
    "fourth power vanishes": lambda rng, n: rng.normal(size=n) * 10.0 ** rng.uniform(-83, -75),
    "variance overflows": lambda rng, n: rng.normal(size=n) * 10.0 ** rng.uniform(153, 155),
    "fourth power overflows": lambda rng, n: rng.normal(size=n) * 10.0 ** rng.uniform(76, 78),
    "largest": lambda rng, n: rng.choice([-LARGEST, LARGEST, 1e308, 1.0], n),
    "few integers": lambda rng, n: rng.integers(0, 4, n),
    "int64": lambda rng, n: rng.integers(-(2**63), 2**63 - 1, n),
    "int64 close together": lambda rng, n: 2**62 + rng.integers(0, 5, n),
    "uint64": lambda rng, n: np.uint64(2**64 - 1) - rng.integers(0, 9, n, np.uint64),
    "python integers": python_integers,
    "integers and floats": lambda rng, n: [2**63 + 1, *python_integers(rng, n), *decades(rng, n)],
    "float32": lambda rng, n: (rng.normal(size=n) * 10.0 ** rng.uniform(-40, 37)).astype("f4"),
    "float16": lambda rng, n: rng.normal(size=n).astype("f2"),
}


@pytest.mark.parametrize("kind", KINDS)
def test_random_readings(kind):
    rng = np.random.default_rng(list(KINDS).index(kind))
    for trial in range(100):
        assert_correctly_rounded(KINDS[kind](rng, 1 + trial % 12))


def test_many_readings():
    rng = np.random.default_rng(5)
    assert_correctly_rounded(rng.normal(1e5, size=1500))
    assert_correctly_rounded(np.exp(rng.normal(size=1000) * 30))
    assert_correctly_rounded(rng.integers(2**62, 2**63 - 1, 1500))


# -- readings made by hand -------------------------------------------------------------------------

BY_HAND = [
    [0.0], [-0.0, 0.0], [LEAST], [-LEAST], [LARGEST], [1e308, 1e308], [LARGEST, LARGEST, -LARGEST],
    [0.0, LEAST], [LEAST, 2 * LEAST], [2 * LEAST, 3 * LEAST], [0.0, 3 * LEAST], [0.0, 5 * LEAST],
    [0.0, 0.0, LEAST], [0.0, 0.0, -LEAST], [LEAST, -LARGEST, LARGEST], [1e-320, 1e308],
    [1.0, 1.0 + 2.0**-52], [1.0 + 2.0**-52, 1.0 + 2.0**-51], [1.0, 1.0 - 2.0**-53],
    [2.0**-1022, 2.0**-1022 - LEAST], [2.0**-537, 0.0], [1.5 * 2.0**-537, 0.0], [2.0**-536, 0.0],
    [2.0**512, 0.0], [2.0**513, 0.0], [2.0**512, -(2.0**512)], [LARGEST, LARGEST - 2.0**970],
    [1e17, 1.0, -1e17, 1.0], [1e16, 1e-16, -1e16], [1e300, 1e-300, -1e300, -1e-300],
    [2**53 + 1], [2**53 + 1, 2**53 + 3], [2**64 - 1], [2**64 - 1, -(2**63)], [-(2**63) + 1, 2**63],
    [2**64 - 1, 2.0**64], [2**62 + 1, 0.5, -(2**62) - 1], [1, 2, 3, 10], [1.0, 2.0, 3.0, 3e-320],
    [2**63 - 1, LEAST, 1e308], [10.0**k for k in range(-320, 309, 40)],
]  # fmt: skip


@pytest.mark.parametrize("number", range(len(BY_HAND)))
def test_readings_made_by_hand(number):
    assert_correctly_rounded(BY_HAND[number])
    assert_correctly_rounded(BY_HAND[number][::-1] * 3)


def test_ties_go_to_even():
    def exact(*readings):
        return ms.ExactMoments().update(list(readings))

    assert exact(0.0, LEAST).mean() == 0.0
    assert exact(LEAST, 2 * LEAST).mean() == 2 * LEAST
    assert exact(1.0, 1.0 + 2.0**-52).mean() == 1.0
    assert exact(1.0 + 2.0**-52, 1.0 + 2.0**-51).mean() == 1.0 + 2.0**-51
    assert exact(0.0, LEAST).std() == 0.0
    assert exact(0.0, 3 * LEAST).std() == 2 * LEAST
    # The tie between the largest double and what would follow it is infinity.
    assert exact(LARGEST).raw(1, about=-(2.0**970)) == INF
    assert exact(LARGEST).raw(1, about=-math.nextafter(2.0**970, 0.0)) == LARGEST
    assert exact(-LARGEST).raw(1, about=2.0**970) == -INF


def test_beyond_the_range_of_doubles():
    unit = ms.ExactMoments().update([-1, 0, 4])
    wide = ms.ExactMoments().update([-(2.0**700), 0.0, 2.0**702])
    assert (wide.mean(), wide.variance(), wide.std()) == (2.0**700, INF, unit.std() * 2.0**700)
    assert (wide.central(3), wide.raw(3, about=1e300), wide.cumulant(4)) == (INF, -INF, -INF)
    narrow = ms.ExactMoments().update([-(2.0**-700), 0.0, 2.0**-698])
    assert (narrow.variance(), narrow.central(3), narrow.cumulant(4)) == (0.0, 0.0, 0.0)
    assert (narrow.mean(), narrow.std()) == (2.0**-700, unit.std() * 2.0**-700)
    assert wide.skewness() == narrow.skewness() == unit.skewness()
    assert wide.kurtosis() == narrow.kurtosis() == unit.kurtosis() == -1.5


@pytest.mark.parametrize("ddof", [1, 0.5, np.int64(1), np.float32(0.5), np.array(1.0), True, -2])
@pytest.mark.parametrize("readings", [[0.1, 0.2, 0.7], [1e-300, 1e300, 3.0], [1, 2**63 - 1]])
def test_any_number_may_be_ddof(readings, ddof):
    x, e = integers(readings)
    n = len(x)
    divisor = n**2 * (n - Fraction(float(ddof)))
    above = sum((n * v - sum(x)) ** 2 for v in x) * divisor.denominator
    exact = ms.ExactMoments().update(readings)
    assert_nearest(exact.variance(ddof), above, divisor.numerator, 2 * e, label="variance")
    assert_nearest(exact.std(ddof), above, divisor.numerator, e, root=True, label="std")


@pytest.mark.parametrize(
    "about", [10**200, -(2**63), np.int64(-(2**63)), np.float32(0.1), 2**80], ids="{:.3g}".format
)
def test_any_number_may_be_the_point(about):
    exact = ms.ExactMoments().update([0.1, 3.0])
    point = Fraction(float(about))
    for k in (1, 2, 3):
        wanted = ((Fraction(0.1) - point) ** k + (3 - point) ** k) / 2
        assert_nearest(exact.raw(k, about=about), wanted.numerator, wanted.denominator, label=k)


def test_what_is_undefined():
    empty = ms.ExactMoments()
    for _, how, _ in exact_values([1.0, 2.0]):
        assert math.isnan(how(empty))
    assert empty.as_fractions() == {
        "count": 0, "mean": None, "central_2": None, "central_3": None, "central_4": None
    }  # fmt: skip
    one = ms.ExactMoments().update(0.3)
    assert (one.variance(), one.std(), one.central(3), one.cumulant(4)) == (0.0,) * 4
    for name in ("skewness", "kurtosis", "crest_factor"):
        assert math.isnan(getattr(one, name)())
    assert math.isnan(one.variance(ddof=1))
    assert math.isnan(one.std(ddof=2))
    for values in ([NAN, 1.0], [INF, 1.0], [-INF], [INF, -INF, 2.0]):
        gaps = ms.ExactMoments(nonfinite="propagate").update(values)
        assert gaps.as_fractions() == {**empty.as_fractions(), "count": len(values)}
        plain = ms.Moments(nonfinite="propagate").update(values)
        for name, how, _ in exact_values([1.0, 2.0]):
            a, b = how(gaps), how(plain)
            assert a == b or (math.isnan(a) and math.isnan(b)), name


# -- data of others --------------------------------------------------------------------------------


def test_outliers_that_cancel():
    (case,) = (c for c in load("field_failures.json") if c["id"] == "cancelling-outliers-mean")
    assert_correctly_rounded(case["data"])
    exact = ms.ExactMoments().update(case["data"])
    assert exact.as_fractions()["mean"] == Fraction(55, 12)
    # The file has 20 digits.
    assert_close(exact.mean(), case["exact"]["mean"], ulps=0.5 + 2.0**-14, label="mean")


ROUNDED_ONCE = {
    "n", "mean", "var", "var_pop", "sd", "sd_pop", "skew_pop", "skew_adj", "kurt_pop",
    "exkurt_pop", "exkurt_adj", "m2", "m3", "m4", "k2", "k3", "k4",
}  # fmt: skip
TAKEN = [(c, k) for c in CASES for k in CASES[c].get("exact", {})]


def repeated(value, times):
    """A reading that came so many times, by doubling."""
    one, whole = ms.ExactMoments().update(value), ms.ExactMoments()
    for digit in bin(times)[:1:-1]:
        whole = whole + one if digit == "1" else whole
        one = one + one
    return whole


@pytest.mark.parametrize(("case", "key"), TAKEN)
def test_exact_values_of_published_data(case, key):
    values, weights, _ = readings_of(case)[key]
    block = CASES[case]["exact"][key]
    exact = ms.ExactMoments().update(values)
    if weights is not None:
        assert np.all(weights == np.floor(weights))
        block = {**block, "n": int(weights.sum())}  # the file counts the lines of its table
        pairs = zip(values.tolist(), weights.astype(int).tolist(), strict=True)
        exact = ms.combine(repeated(*pair) for pair in pairs)
    names = ROUNDED_ONCE & set(block)
    assert {"mean", "var"} & names
    for name in names:
        # Half a unit, and what the 20 digits of the file leave open: 5e-21 is 2**-14 of a unit.
        assert_close(read(exact, name), block[name], ulps=0.5 + 2.0**-14, label=name)
