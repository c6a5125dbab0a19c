"""Promise 6 for ``ExactMoments``: bad input is refused in plain words, and nothing has changed."""

import itertools
import math
from decimal import Decimal
from fractions import Fraction

import numpy as np
import pytest

import momentstream as ms

NAN, INF = math.nan, math.inf


def started(**configuration):
    """In the middle of its work: sums, wide integers, waiting floats."""
    exact = ms.ExactMoments(**configuration).update(np.sin(np.arange(3000.0)))
    return exact.update([2**63 + 1, 0.0]).update(1.5).update(2.5)


def unchanged(call, error, match=None, **configuration):
    victim, twin = started(**configuration), started(**configuration)
    with pytest.raises(error, match=match) as caught:
        call(victim)
    assert victim.count == twin.count
    assert victim.to_bytes() == twin.to_bytes()
    assert victim.update(0.25).to_bytes() == twin.update(0.25).to_bytes()
    return caught.value


@pytest.mark.parametrize("value", [NAN, INF, -INF])
@pytest.mark.parametrize("place", [0, 5, 4099, 65_536, 269_999])
def test_the_position_of_a_missing_reading(value, place):
    x = np.ones(270_000)
    x[place] = value
    wide = [2**60 + 1] * (place % 5000) + [value, 3, NAN]
    for feed, where in (
        (lambda a: a.update(x), place),
        (lambda a: a.update(x, threads=3), place),
        (lambda a: a.update(x.astype("f4")), place),
        (lambda a: a.update(iter(x.tolist())), place),
        (lambda a: a.update(wide), place % 5000),
        (lambda a: a.update(x[place]), 0),
        (lambda a: a.update(value), 0),
    ):
        error = unchanged(feed, ms.NonFiniteError, rf"at {where} is {value!r}.*omit")
        assert error.position == where
        assert type(error.position) is int


def failing(items, error):
    yield from items
    raise error


REFUSED = [
    ("text", TypeError, "str"), (b"12", TypeError, "bytes"), ({1: 2}, TypeError, "dict"),
    ({1.0}, TypeError, "set"), (None, TypeError, "NoneType"), (1j, TypeError, "complex"),
    (Decimal(1), TypeError, "Decimal"), (Fraction(1, 2), TypeError, "Fraction"),
    (np.longdouble(1), TypeError, "longdouble"), ([1.0, None], TypeError, "NoneType"),
    (np.array(["2020-01-01"], "M8[D]"), TypeError, "datetime"),
    (np.array([1, "a"], object), TypeError, "object"), ([1.0, "a"], TypeError, "str"),
    (2**64, ValueError, r"2\*\*64 - 1"), ([1, -(2**63) - 1], ValueError, "at 1"),
    ([[1.0], [1.0, 2.0]], ValueError, "ragged"), (object(), TypeError, "object"),
]  # fmt: skip


@pytest.mark.parametrize("number", range(len(REFUSED)))
def test_values_that_are_not_taken(number):
    values, error, match = REFUSED[number]
    unchanged(lambda a: a.update(values), error, match)
    if not isinstance(values, (list, np.ndarray)):
        unchanged(lambda a: a.update(iter([0.5] * 9000 + [values])), error)


def test_iterators_that_fail_late():
    class Oops(Exception):
        pass

    ones = itertools.repeat(1.25, 1_000_003)
    unchanged(lambda a: a.update(failing(ones, Oops())), Oops)
    wide = itertools.repeat(2**63 - 1, 20_000)
    unchanged(lambda a: a.update(itertools.chain(wide, [2**64])), ValueError, "at 20000")
    error = unchanged(
        lambda a: a.update(itertools.chain([0.5] * 9001, [NAN])), ms.NonFiniteError, "at 9001"
    )
    assert error.position == 9001
    unchanged(lambda a: a.update(v for v in [1.0] if a.update(2.0)), RuntimeError, "iterator")
    unchanged(lambda a: a.update(v for v in [1.0] if a.merge(a)), RuntimeError, "iterator")
    unchanged(lambda a: a.update(v for v in [1.0] if a.clear()), RuntimeError, "iterator")


def test_arguments():
    for order, error in ((0, ValueError), (5, ValueError), (-1, ValueError), (2.0, TypeError),
                         ("4", TypeError), (None, TypeError), (True, TypeError)):  # fmt: skip
        with pytest.raises(error, match="order must be an integer from 1 to 4"):
            ms.ExactMoments(order)
    for policy, error in (("ignore", ValueError), (None, ValueError), (3, TypeError)):
        with pytest.raises(error, match="nonfinite must be one of"):
            ms.ExactMoments(nonfinite=policy)
    with pytest.raises(TypeError):
        ms.ExactMoments(4, "omit")
    for threads in (0, -1, 1.5, "2", None):
        unchanged(lambda a, t=threads: a.update([1.0], threads=t), ValueError, "threads")
        unchanged(lambda a, t=threads: a.update(1.0, threads=t), ValueError, "threads")
    unchanged(lambda a: a.update([1.0], [2.0]), TypeError, "positional")
    for ddof in ("1", [1], 1j, None):
        unchanged(lambda a, d=ddof: a.variance(d), TypeError, "ddof")
        unchanged(lambda a, d=ddof: a.std(d), TypeError, "ddof")
    for name, least in (("central", 0), ("raw", 0), ("standardized", 0), ("cumulant", 1),
                        ("k_statistic", 1)):  # fmt: skip
        unchanged(lambda a, n=name: getattr(a, n)(1.5), TypeError, "k must be an integer")
        unchanged(lambda a, n=name, k=least - 1: getattr(a, n)(k), ValueError, "k must be at least")


@pytest.mark.parametrize("order", [1, 2, 3, 4])
def test_statistics_above_the_order(order):
    needs = {"variance": 2, "std": 2, "rms": 2, "power": 2, "ac_rms": 2, "crest_factor": 2,
             "skewness": 3, "kurtosis": 4}  # fmt: skip
    for name, least in needs.items():
        if least > order:
            match = f"needs order={least}, ExactMoments keeps order={order}"
            unchanged(lambda a, n=name: getattr(a, n)(), ms.OrderError, match, order=order)
        else:
            assert math.isfinite(getattr(started(order=order), name)())
    for name in ("central", "raw", "cumulant", "k_statistic", "standardized"):
        error = unchanged(
            lambda a, n=name: getattr(a, n)(order + 1),
            ms.OrderError,
            f"order={order + 1}",
            order=order,
        )
        # The cure named is one that there is.
        assert order < 4 or "make it with order=5" not in str(error)


def test_what_does_not_fit_is_not_merged():
    for other, match in (
        (ms.ExactMoments(3), "order=4, the other order=3"), (ms.Moments(), "got Moments"),
        (5, "int"), (None, "NoneType"),
    ):  # fmt: skip
        unchanged(lambda a, o=other: a.merge(o), ms.MergeError, match)
        unchanged(lambda a, o=other: a.remove(o), ms.MergeError, match)
    with pytest.raises(ms.MergeError, match="order"):
        ms.combine([ms.ExactMoments(), ms.ExactMoments(2)])
    with pytest.raises(ms.MergeError, match="got Moments"):
        ms.ExactMoments() + ms.Moments()
    # Policies may differ; the left one's stays.
    both = started(nonfinite="omit") + started()
    assert (both.nonfinite, both.count) == ("omit", 2 * started().count)


NEVER_THERE = [
    [9.0], [1e300], [0.5, 0.5], [2**63 + 3], [5e-324], [0.0, 0.0], [1.0] * 4000, [-1.5], [3.0],
]  # fmt: skip


@pytest.mark.parametrize("number", range(len(NEVER_THERE)))
def test_what_was_never_there_is_not_removed(number):
    x = [1.5, 2.5, 2**63 + 1, 0.0]
    victim, twin = (ms.ExactMoments().update(x) for _ in range(2))
    with pytest.raises(ms.MergeError, match="changed"):
        victim.remove(ms.ExactMoments().update(NEVER_THERE[number]))
    assert victim.to_bytes() == twin.to_bytes()
    assert victim.minimum() == 0.0


def test_readings_that_would_leave_a_negative_variance_are_not_removed():
    # Four readings are left of the count, and of the sums all eight.
    victim, twin = (ms.ExactMoments().update([1.0, 2.0] * 4) for _ in range(2))
    with pytest.raises(ms.MergeError, match="changed"):
        victim.remove(ms.ExactMoments().update([0.0] * 4))
    assert victim.to_bytes() == twin.to_bytes()


def test_more_than_there_is_is_not_removed():
    for policy, values, part, match in (
        ("raise", [1.0, 2.0], [1.0, 2.0, 1.0], "3 readings"),
        ("omit", [1.0, NAN], [NAN, NAN], "omitted"),
        ("propagate", [1.0, NAN], [INF], "plus"),
        ("propagate", [1.0, INF], [-INF], "minus"),
        ("propagate", [1.0, INF], [NAN], "nans"),
        ("propagate", [NAN, 1.0], [1.0, 1.0], "no readings"),
    ):
        victim, twin = (ms.ExactMoments(nonfinite=policy).update(values) for _ in range(2))
        with pytest.raises(ms.MergeError, match=match):
            victim.remove(ms.ExactMoments(nonfinite=policy).update(part))
        assert victim.to_bytes() == twin.to_bytes()
