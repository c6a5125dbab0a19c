"""The immutable summary: made from moments, transformed, exported, shown."""

import copy
import html.parser
import itertools
import json
import math
import pickle
from fractions import Fraction

import numpy as np
import pytest
from assertions import assert_close
from exact import Exact

import momentstream as ms
from momentstream import Summary

NAN, INF = math.nan, math.inf
D = [1.0, 2.0, 3.0, 10.0]
CENTRAL = [12.5, 45.0, 348.5]
RAW = [4.0, 28.5, 259.0, 2524.5]
CUMULANTS = [4.0, 12.5, 45.0, -120.25]


def of_d(**configuration):
    return ms.Moments(**configuration).update(D).summary()


# -- making --------------------------------------------------------------------------------------


@pytest.mark.parametrize("count", [None, 4])
@pytest.mark.parametrize(
    ("make", "arguments"),
    [
        (Summary.from_central, (4.0, CENTRAL)),
        (Summary.from_raw, (RAW,)),
        (Summary.from_cumulants, (CUMULANTS,)),
    ],
    ids=["central", "raw", "cumulants"],
)
def test_the_running_example_three_ways(make, arguments, count):
    summary = make(*arguments, count=count)
    whole = of_d()
    assert summary.order == 4
    assert summary.shape == ()
    assert summary.names is None
    assert (summary.count, summary.omitted) == (count, 0)
    assert summary.mean() == 4.0
    for k in range(2, 5):
        assert summary.central(k) == CENTRAL[k - 2]
        assert summary.raw(k) == RAW[k - 1]
        assert summary.cumulant(k) == CUMULANTS[k - 1]
    for name in ("variance", "std", "skewness", "kurtosis", "rms", "power"):
        assert getattr(summary, name)() == getattr(whole, name)()
    for name in ("minimum", "maximum", "crest_factor"):
        assert math.isnan(getattr(summary, name)())
    if count is None:
        assert (summary.weight, summary.effective_count) == (None, None)
    else:
        assert (summary.weight, summary.effective_count) == (4.0, 4.0)
        for read in (
            lambda s: s.variance(1), lambda s: s.std(0.5), lambda s: s.skewness(bias=False),
            lambda s: s.kurtosis(bias=False), lambda s: s.k_statistic(2),
            lambda s: s.k_statistic(4),
        ):  # fmt: skip
            assert read(summary) == read(whole)


def test_any_iterable_of_numbers():
    expected = Summary.from_central(4.0, CENTRAL)
    for central in (
        tuple(CENTRAL),
        iter(CENTRAL),
        np.array(CENTRAL),
        [Fraction(v) for v in CENTRAL],
    ):
        assert Summary.from_central(4, central) == expected
    assert Summary.from_central(np.float32(4), [np.float64(v) for v in CENTRAL]) == expected
    assert Summary.from_central(2.0, []).mean() == 2.0
    assert Summary.from_raw([2.0]).order == Summary.from_cumulants([2.0]).order == 1


def test_what_needs_a_count_says_so():
    for summary in (
        Summary.from_central(4.0, CENTRAL),
        Summary.from_raw(RAW),
        Summary.from_cumulants(CUMULANTS),
        of_d().independent_sum(of_d()),
    ):
        for read in (
            lambda s: s.variance(1), lambda s: s.variance(ddof=0.5), lambda s: s.std(ddof=1),
            lambda s: s.skewness(bias=False), lambda s: s.kurtosis(bias=False),
            lambda s: s.k_statistic(2), lambda s: s.k_statistic(4),
        ):  # fmt: skip
            with pytest.raises(ValueError, match="count="):
                read(summary)
        assert summary.k_statistic(1) == summary.mean()


IMPOSSIBLE = {
    "variance": ((0.0, [-1e-9]), ["variance >= 0", "-1e-09"]),
    "fourth": ((0.0, [1.0, 0.0, -3.0]), ["central moment 4 >= 0", "-3"]),
    "sixth": ((0.0, [1.0, 0.0, 3.0, 0.0, -15.0]), ["central moment 6 >= 0"]),
    "no spread": ((0.0, [0.0, 1.0]), ["central moment 3", "variance is 0"]),
    "no spread, fourth": ((0.0, [0.0, 0.0, 1.0]), ["central moment 4", "variance is 0"]),
    "kurtosis": ((0.0, [1.0, 0.0, 0.99]), ["kurtosis >= skewness**2 + 1", "0.99"]),
    "skewed": ((0.0, [1.0, 2.0, 4.99]), ["kurtosis >= skewness**2 + 1", "4.99", "5"]),
    "scaled": ((7.0, [1e-6, 2e-9, 4.99e-12]), ["kurtosis >= skewness**2 + 1"]),
    "Hankel": ((0.0, [1.0, 0.0, 3.0, 0.0, 8.9]), ["Hankel", "order 6"]),
    "Hankel of 8": ((0.0, [1.0, 0.0, 3.0, 0.0, 15.0, 0.0, 70.0]), ["Hankel", "order 8"]),
}


@pytest.mark.parametrize("name", IMPOSSIBLE)
def test_impossible_moments(name):
    arguments, words = IMPOSSIBLE[name]
    with pytest.raises(ValueError, match="check=False") as caught:
        Summary.from_central(*arguments)
    for word in words:
        assert word in str(caught.value)
    taken = Summary.from_central(*arguments, check=False)
    assert [taken.central(k) for k in range(2, taken.order + 1)] == arguments[1]
    str(taken)


@pytest.mark.parametrize(
    ("make", "moments", "words"),
    [
        (Summary.from_raw, [4.0, 15.9], "variance >= 0"),
        (Summary.from_raw, [0.0, 1.0, 2.0, 4.0], "kurtosis >= skewness"),
        (Summary.from_cumulants, [0.0, -1.0], "variance >= 0"),
        (Summary.from_cumulants, [0.0, 1.0, 0.0, -2.1], "kurtosis >= skewness"),
        (Summary.from_cumulants, [0.0, 1.0, 5.0, 0.0], "kurtosis >= skewness"),
    ],
)
def test_impossible_raw_moments_and_cumulants(make, moments, words):
    with pytest.raises(ValueError, match="check=False") as caught:
        make(moments)
    assert words in str(caught.value)
    assert make(moments, check=False).order == len(moments)


def test_laws_on_the_boundary_are_possible():
    """Two points: kurtosis = skewness**2 + 1 exactly; rounding may put it on either side."""
    for p in (0.5, 0.1, 0.25, 1 / 3, 0.9, 1e-3, 1e-9):
        q = 1 - p
        central = [p * q * (q ** (k - 1) + (-1) ** k * p ** (k - 1)) for k in range(2, 9)]
        for top in range(1, 8):
            for scale in (1.0, 1e-30, 1e30, 0.1):
                scaled = [m * scale**k for k, m in enumerate(central[:top], start=2)]
                assert Summary.from_central(p * scale, scaled).order == top + 1


@pytest.mark.parametrize("order", [4, 6, 8, 12, 16])
def test_what_was_measured_is_possible(order):
    """Moments of real readings, few or many, lopsided or not: none may be called impossible."""
    rng = np.random.default_rng(order)
    for n in (1, 2, 3, 4, 5, 8, 30, 1000):
        for x in (
            rng.normal(size=n), rng.exponential(size=n) ** 3, rng.integers(0, 2, n),
            rng.normal(size=n) + 1e6, np.where(np.arange(n) == 0, 1e6, rng.random(n)),
        ):  # fmt: skip
            summary = ms.Moments(order).update(x).summary()
            central = [summary.central(k) for k in range(2, order + 1)]
            again = Summary.from_central(summary.mean(), central, count=n)
            assert [again.central(k) for k in range(2, order + 1)] == central


def test_laws_from_their_cumulants_and_raw_moments():
    poisson = Summary.from_cumulants([3.5] * 12)
    assert_close(poisson.skewness(), Fraction(1) / Fraction(math.sqrt(3.5)), ulps=4, label="skew")
    assert_close(poisson.kurtosis(), Fraction(2, 7), ulps=4, relative_to=3, label="kurtosis")
    normal = Summary.from_cumulants([2.0, 9.0] + [0.0] * 14)
    for k in range(2, 17, 2):
        assert normal.standardized(k) == math.prod(range(1, k, 2))
        assert normal.central(k - 1) == 0.0
    exponential = Summary.from_raw([float(math.factorial(k)) for k in range(1, 9)])
    assert (exponential.mean(), exponential.variance()) == (1.0, 1.0)
    assert (exponential.skewness(), exponential.kurtosis()) == (2.0, 6.0)
    assert exponential.cumulant(6) == 120.0


@pytest.mark.parametrize("power", [-170, -120, -60, -20, 20, 60, 120, 150])
@pytest.mark.parametrize("order", [2, 3, 4, 6, 8])
def test_possible_moments_at_any_scale(power, order):
    """No check may overflow, divide by zero or warn; what is representable is kept."""
    standardized = [1.0, 0.0, 3.0, 0.0, 15.0, 0.0, 105.0][: order - 1]
    scale = 10.0**power
    with np.errstate(over="ignore"):
        powers = [float(np.float64(scale) ** k) for k in range(2, order + 1)]
    central = [m * power if m else 0.0 for m, power in zip(standardized, powers, strict=True)]
    if not all(math.isfinite(m) for m in central):
        with pytest.raises(ValueError, match="finite"):
            Summary.from_central(0.0, central)
        return
    summary = Summary.from_central(0.0, central, check=all(central[::2]))
    assert [summary.central(k) for k in range(2, order + 1)] == central


@pytest.mark.parametrize(
    "central",
    [
        [1e200, 0.0, 3e300],
        [1e160, 0.0, 1e308],
        [1e-170, 0.0, 0.0],
        [1e-250, 0.0, 1e-300],
        [5e-324, 0.0, 0.0],
        [1e-120, 0.0, 3e-240, 0.0, 0.0],
        [1e110, 0.0, 3e220, 0.0, 15e300],
    ],
    ids=str,
)
def test_extreme_moments_are_taken_or_refused_in_words(central):
    try:
        summary = Summary.from_central(0.0, central)
    except ValueError as error:
        assert "cannot be the central moments" in str(error)  # noqa: PT017
    else:
        assert summary.variance() == central[0]
    taken = Summary.from_central(0.0, central, check=False)
    assert [taken.central(k) for k in range(2, len(central) + 2)] == central
    taken.kurtosis()
    str(taken)


@pytest.mark.parametrize("mean", [1e20, 1e100, -1e300])
@pytest.mark.parametrize("order", [2, 4, 12])
def test_a_large_mean_does_not_swallow_the_spread(mean, order):
    central = [1.0, 0.0, 3.0, 0.0, 15.0, 0.0, 105.0, 0.0, 945.0, 0.0, 10395.0][: order - 1]
    summary = Summary.from_central(mean, central)
    assert summary.mean() == mean
    assert [summary.central(k) for k in range(2, order + 1)] == central


BAD = {
    "mean text": (lambda: Summary.from_central("1", [1.0]), TypeError, ["mean", "'1'"]),
    "mean bytes": (lambda: Summary.from_central(b"1", [1.0]), TypeError, ["mean", "b'1'"]),
    "mean None": (lambda: Summary.from_central(None, [1.0]), TypeError, ["mean", "None"]),
    "mean complex": (lambda: Summary.from_central(1j, [1.0]), TypeError, ["mean", "1j"]),
    "mean array": (lambda: Summary.from_central([1.0, 2.0], [1.0]), TypeError, ["mean"]),
    "mean nan": (lambda: Summary.from_central(NAN, [1.0]), ValueError, ["mean", "finite", "nan"]),
    "central inf": (lambda: Summary.from_central(0, [1, INF]), ValueError, ["central[1]", "inf"]),
    "central text": (lambda: Summary.from_central(0, ["1"]), TypeError, ["central[0]", "'1'"]),
    "central one": (lambda: Summary.from_central(0, 1.0), TypeError, ["central", "1.0"]),
    "central None": (lambda: Summary.from_central(0, None), TypeError, ["central", "None"]),
    "raw none": (lambda: Summary.from_raw([]), ValueError, ["raw", "at least"]),
    "raw nan": (lambda: Summary.from_raw([1.0, NAN]), ValueError, ["raw[1]", "nan"]),
    "raw one": (lambda: Summary.from_raw(5.0), TypeError, ["raw", "5.0"]),
    "raw too large": (lambda: Summary.from_raw([1e200, 1e300]), ValueError, ["raw"]),
    "cumulants none": (lambda: Summary.from_cumulants([]), ValueError, ["cumulants", "at least"]),
    "cumulants text": (lambda: Summary.from_cumulants(["x"]), TypeError, ["cumulants[0]", "'x'"]),
    "cumulants one": (lambda: Summary.from_cumulants(2.0), TypeError, ["cumulants", "2.0"]),
    "cumulants too large": (
        lambda: Summary.from_cumulants([0.0, 1e160, 0.0, 0.0]), ValueError, ["cumulants"]
    ),
    "count 0": (lambda: Summary.from_central(0, [1], count=0), ValueError, ["count", "1", "0"]),
    "count -1": (lambda: Summary.from_raw([0, 1], count=-1), ValueError, ["count", "1", "-1"]),
    "count 2.0": (lambda: Summary.from_central(0, [1], count=2.0), TypeError, ["count", "2.0"]),
    "count text": (lambda: Summary.from_cumulants([0], count="2"), TypeError, ["count", "'2'"]),
    "itself": (lambda: Summary(), TypeError, ["summary()", "from_central"]),
    "affine text": (lambda: of_d().affine("2"), TypeError, ["scale", "'2'"]),
    "affine nan": (lambda: of_d().affine(2, NAN), ValueError, ["offset", "nan"]),
    "sum of what": (lambda: of_d().independent_sum(3), TypeError, ["Summary", "int"]),
    "sum of shapes": (
        lambda: of_d().independent_sum(ms.Moments(shape=2).summary()), ValueError, ["()", "(2,)"]
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", BAD)
def test_bad_arguments(name):
    call, error, words = BAD[name]
    with pytest.raises(error) as caught:
        call()
    for word in words:
        assert word in str(caught.value)


# -- transforming --------------------------------------------------------------------------------


def test_affine_keeps_what_is_known():
    summary = (
        ms.Moments(names=["a", "b"], nonfinite="omit").update([[1.0, NAN], [3.0, 5.0]]).summary()
    )
    mapped = summary.affine(-2.0, 1.0)
    assert mapped.names == ("a", "b")
    assert mapped.count.tolist() == [2, 1]
    assert mapped.omitted.tolist() == [0, 1]
    assert mapped.mean().tolist() == [-3.0, -9.0]
    assert mapped.minimum().tolist() == [-5.0, -9.0]
    assert mapped.maximum().tolist() == [-1.0, -9.0]
    assert summary.mean().tolist() == [2.0, 5.0]
    logs = ms.Moments(transform="log").update([1.0, math.e]).summary()
    assert logs.affine(2.0).mean() == 1.0


def test_independent_sums_are_convolution():
    """Two dice, three dice …: against every outcome counted out."""
    die = ms.Moments(8).update(range(1, 7)).summary()
    total = die
    for dice in range(2, 5):
        total = total.independent_sum(die)
        outcomes = [sum(eyes) for eyes in itertools.product(range(1, 7), repeat=dice)]
        exact = Exact(outcomes, None, 8)
        assert total.mean() == 3.5 * dice
        assert (total.minimum(), total.maximum()) == (dice, 6 * dice)
        for k in range(2, 9):
            assert_close(total.central(k), exact.central(k), ulps=64,
                         relative_to=exact.absolute(k) / len(outcomes), label=k)  # fmt: skip
        assert (total.count, total.weight, total.effective_count) == (None, None, None)


def test_independent_sums_of_any_two():
    a, b = of_d(order=6), ms.Moments(4).update([-1.0, 0.0, 7.5]).summary()
    both = a.independent_sum(b)
    assert both == b.independent_sum(a)
    assert both.order == 4
    values = [x + y for x in D for y in (-1.0, 0.0, 7.5)]
    exact = Exact(values)
    for k in range(2, 5):
        assert_close(both.central(k), exact.central(k), ulps=32,
                     relative_to=exact.absolute(k) / 12, label=k)  # fmt: skip
    weighted = ms.Moments(weights="reliability").update(D, [1, 2, 1, 0.5]).summary()
    assert weighted.independent_sum(a).mean() == weighted.mean() + 4.0
    far = Summary.from_central(1e300, [1e300]).independent_sum(Summary.from_central(1e-300, [1.0]))
    assert (far.mean(), far.variance()) == (1e300, 1e300)
    constant = Summary.from_central(3.0, [0.0, 0.0, 0.0])
    assert of_d().independent_sum(constant).central(4) == 348.5


def test_independent_sums_of_channels_and_of_nothing():
    x = np.array([[1.0, 4.0], [2.0, 0.0], [6.0, 3.0]])
    summary = ms.Moments(shape=2).update(x).summary()
    both = summary.independent_sum(summary)
    for j in range(2):
        alone = ms.Moments().update(x[:, j]).summary()
        assert both.central(3)[j] == alone.independent_sum(alone).central(3)
    empty = ms.Moments().summary()
    for nothing in (empty.independent_sum(empty), of_d().independent_sum(empty)):
        for name in ("mean", "variance", "skewness", "minimum"):
            assert math.isnan(getattr(nothing, name)()), name


# -- immutable -----------------------------------------------------------------------------------

MADE = {
    "scalar": of_d(),
    "order 1": of_d(order=1),
    "order 16": of_d(order=16),
    "empty": ms.Moments().summary(),
    "elsewhere": Summary.from_central(4.0, CENTRAL),
    "sum": of_d().independent_sum(of_d()),
    "channels": ms.Moments(shape=(2, 2)).update(np.arange(12.0).reshape(3, 2, 2)).summary(),
    "names": ms.Moments(names=["a", "b"], nonfinite="omit").update([[1, NAN], [2, 3]]).summary(),
    "frequency": ms.Moments(weights="frequency").update(D, [1, 2, 3, 4]).summary(),
    "reliability": ms.Moments(3, weights="reliability", shape=2)
    .update([[1.0, 2.0], [3.0, 5.0]], [0.5, 2.0])
    .summary(),
    "propagated": ms.Moments(nonfinite="propagate").update([1.0, INF]).summary(),
}


@pytest.mark.parametrize("name", MADE)
def test_a_summary_cannot_be_changed(name):
    summary = MADE[name]
    before, fingerprint, text = pickle.dumps(summary), hash(summary), str(summary)
    for attribute in ("count", "_data", "note"):
        with pytest.raises(AttributeError):
            setattr(summary, attribute, 5)
    with pytest.raises(AttributeError):
        del summary._data
    if summary.shape:
        known = [summary.count, summary.omitted, summary.weight, summary.effective_count]
        for value in (*known, summary.mean(), summary.minimum(), summary.maximum(), summary.std()):
            try:
                value[...] = 77
            except ValueError:
                assert not value.flags.writeable
    summary.as_dict()["central"].append(5)
    assert pickle.dumps(summary) == before
    assert hash(summary) == fingerprint
    assert str(summary) == text


@pytest.mark.parametrize("protocol", range(pickle.HIGHEST_PROTOCOL + 1))
@pytest.mark.parametrize("name", MADE)
def test_summaries_travel(name, protocol):
    summary = MADE[name]
    back = pickle.loads(pickle.dumps(summary, protocol))
    assert back == summary
    assert hash(back) == hash(summary)
    assert str(back) == str(summary)
    assert back.as_dict() == summary.as_dict()
    assert back.names == summary.names
    assert copy.copy(summary) == copy.deepcopy(summary) == summary


def test_equality():
    for (a, first), (b, second) in itertools.product(MADE.items(), repeat=2):
        assert (first == second) == (a == b), (a, b)
    assert of_d() == ms.Moments().update(D[:2]).merge(ms.Moments().update(D[2:])).summary()
    assert of_d() != ms.Moments().update(D)
    assert (of_d() == 4.0, of_d() != None) == (False, True)  # noqa: E711
    assert Summary.from_central(4.0, CENTRAL) != Summary.from_central(4.0, CENTRAL, count=4)
    assert len({of_d(), of_d(), of_d(order=3)}) == 2


def test_a_summary_is_of_its_moment():
    moments = ms.Moments().update(D)
    summary = moments.summary()
    text = str(summary)
    moments.update([1e6] * 10_000).merge(ms.Moments().update(D))
    assert str(summary) == text
    assert summary == of_d()
    moments.remove(ms.Moments().update(D)).clear()
    assert summary.count == 4
    channels = ms.Moments(shape=2).update([[1.0, 2.0], [3.0, 5.0]])
    summary = channels.summary()
    text = str(summary)
    channels.update(np.ones((5000, 2))).merge(channels)
    assert str(summary) == text


# -- exporting and showing -----------------------------------------------------------------------


@pytest.mark.parametrize("name", MADE)
def test_as_dict_is_ready_for_json(name):
    summary = MADE[name]
    exported = summary.as_dict()
    assert json.loads(json.dumps(exported, allow_nan=False)) == exported
    assert exported["order"] == summary.order
    assert exported["shape"] == list(summary.shape)
    assert exported["names"] == (None if summary.names is None else list(summary.names))
    assert len(exported["central"]) == summary.order - 1
    for field, least in (
        ("mean", 1),
        ("variance", 2),
        ("std", 2),
        ("skewness", 3),
        ("kurtosis", 4),
    ):
        assert (field in exported) == (summary.order >= least)
        if field in exported:
            wanted = np.asarray(getattr(summary, field)())
            got = np.array(exported[field], dtype=float)  # None becomes nan
            assert np.array_equal(got, np.where(np.isfinite(wanted), wanted, NAN), equal_nan=True)


def test_as_dict_beyond_the_range_of_doubles():
    exported = ms.Moments().update([1e200, 3e200]).summary().as_dict()
    assert exported["std"] == 1e200
    assert json.loads(json.dumps(exported, allow_nan=False)) == exported


def test_as_dict_says_plain_numbers():
    assert of_d().as_dict() == {
        "order": 4,
        "shape": [],
        "names": None,
        "count": 4,
        "omitted": 0,
        "weight": 4.0,
        "mean": 4.0,
        "variance": 12.5,
        "std": math.sqrt(12.5),
        "skewness": 1.0182337649086284,
        "kurtosis": of_d().kurtosis(),
        "minimum": 1.0,
        "maximum": 10.0,
        "central": CENTRAL,
    }
    assert type(MADE["names"].as_dict()["count"][0]) is int


def test_the_table_at_a_glance():
    lines = str(of_d()).splitlines()
    assert [line.split() for line in lines] == [
        ["count", "4"],
        ["mean", "4"],
        ["variance", "12.5"],
        ["std", "3.53553"],
        ["skewness", "1.01823"],
        ["kurtosis", "-0.7696"],
        ["minimum", "1"],
        ["maximum", "10"],
    ]
    assert len({len(line) for line in lines}) == 1  # numbers end in one column
    assert "1,000,000" in str(ms.Moments().update(np.ones(1_000_000)).summary())
    assert "unknown" in str(Summary.from_central(0.0, [1.0]))


HOSTILE = [
    "<script>alert(1)</script>", "a\nb", "a\r\nb\u2028c", "c&d", "'single'", '"double"', "e\tf",
    "\x1b[31mred", "\u202eright to left", "long " * 60, "", "<b", "&lt;", "\x00", "</td></table>",
]  # fmt: skip


@pytest.mark.parametrize("name", [*MADE, "hostile", "many", "wide"])
def test_a_table_has_at_most_14_lines(name):
    summary = {
        **MADE,
        "hostile": ms.Moments(names=HOSTILE).update(np.arange(30.0).reshape(2, 15)).summary(),
        "many": ms.Moments(shape=(30, 40)).update(np.ones((2, 30, 40))).summary(),
        "wide": ms.Moments(16, weights="reliability", nonfinite="omit")
        .update([1e300, -1e-300, NAN], [1, 2, 3])
        .summary(),
    }[name]
    lines = str(summary).splitlines()
    assert 1 <= len(lines) <= 14
    assert all(line == line.rstrip() for line in lines)
    assert max(map(len, lines)) <= 160
    assert not any(ord(c) < 32 or c in "\x7f\u2028\u202e" for line in lines for c in line)
    assert len(repr(summary).splitlines()) == 1


def test_a_table_of_many_channels_says_how_many_are_left_out():
    text = str(ms.Moments(shape=1000).update(np.ones((2, 1000))).summary())
    assert "990 more" in text
    few = str(ms.Moments(names=["inlet", "outlet"]).update([[1.0, 2.0]]).summary())
    assert "more" not in few
    assert [line.split()[0] for line in few.splitlines()[1:]] == ["inlet", "outlet"]


class Cells(html.parser.HTMLParser):
    def __init__(self):
        super().__init__()
        self.tags, self.cells = [], []

    def handle_starttag(self, tag, attributes):
        self.tags.append(tag)
        if tag in ("th", "td"):
            self.cells.append("")

    def handle_data(self, data):
        if self.cells:
            self.cells[-1] += data


def parsed(page):
    cells = Cells()
    cells.feed(page)
    cells.close()
    return cells


def test_html_escapes_everything():
    names = HOSTILE[:10]
    moments = ms.Moments(names=names).update(np.arange(20.0).reshape(2, 10))
    for source in (moments, moments.summary()):
        page = source._repr_html_()
        assert set(parsed(page).tags) <= {"table", "caption", "thead", "tbody", "tr", "th", "td"}
        assert "<script" not in page
        assert "alert(1)" in page
        assert "'single'" not in page
        assert '"double"' not in page


@pytest.mark.parametrize("name", MADE)
def test_html_shows_what_the_text_shows(name):
    summary = MADE[name]
    shown = " ".join(parsed(summary._repr_html_()).cells).split()
    for word in str(summary).split():
        assert word in shown or word in ("...", "more", "channels"), word


def test_repr_is_one_line_with_the_numbers_wanted():
    text = repr(of_d())
    for part in ("Summary(", "count=4", "mean=4", "std=3.53553", "skewness=1.01823"):
        assert part in text
    assert repr(ms.Moments().update(D)) == (
        "Moments(order=4, count=4, mean=4, std=3.53553, skewness=1.01823, kurtosis=-0.7696)"
    )
    hostile = ms.Moments(names=HOSTILE).update(np.ones((2, 15)))
    assert len(repr(hostile).splitlines()) == 1
    assert "count=3" in repr(ms.Moments(shape=2).update(np.ones((3, 2))))
    gaps = ms.Moments(nonfinite="omit").update([1.0, NAN])
    assert "omitted=1" in repr(gaps)
