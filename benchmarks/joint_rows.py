"""What joint moments cost: measurements for the table of ``compare.py``."""

import functools
from timeit import Timer

import numpy as np
from turns import in_turn

import momentstream as ms

VALUES = 16 * 10**6  # of one array at most: 128 MB, and numpy.cov takes as much again
EINSUM_ROWS = 1000


@functools.cache
def correlated(n, dim):
    """Correlated rows, each variable with a mean of its own."""
    rng = np.random.default_rng(7)
    rows = rng.standard_normal((min(n, VALUES // dim), dim))
    rows += rows[:, :1]
    rows += np.arange(dim)
    return rows


def rows_of(scale, dim):
    return correlated(scale.readings // 10, dim)


def updating(rows, order):
    return lambda: ms.JointMoments(rows.shape[1], order).update(rows)


def against_cov(dim, result):
    """How many times longer ``numpy.cov`` takes."""

    def measure(scale):
        rows = rows_of(scale, dim)
        timers = [Timer(updating(rows, 2)), Timer(lambda: np.cov(rows, rowvar=False))]
        ours, theirs = in_turn(timers, budget=scale.seconds / 2)
        correlated.cache_clear()
        return result(
            theirs.least / ours.least,
            theirs.median / ours.median,
            {"update": ours.least, "cov": theirs.least},
        )

    return measure


def nanoseconds_a_row(dim, order, result):
    def measure(scale):
        rows = rows_of(scale, dim)
        (own,) = in_turn([Timer(updating(rows, order))], budget=scale.seconds / 2)
        n = len(rows)
        correlated.cache_clear()
        return result(own.least / n * 1e9, own.median / n * 1e9, {"update": own.least})

    return measure


def against_einsum(dim, result):
    """How many times longer the one-shot ``numpy.einsum`` takes a row; it gets few of them."""

    def measure(scale):
        rows = rows_of(scale, dim)
        few = rows[:EINSUM_ROWS]

        def fourth():
            d = few - few.mean(axis=0)
            return np.einsum("ni,nj,nk,nl->ijkl", d, d, d, d) / len(d)

        timers = [Timer(updating(rows, 4)), Timer(fourth)]
        ours, theirs = in_turn(timers, budget=scale.seconds / 2)
        times = {"update": ours.least / len(rows), "einsum": theirs.least / len(few)}
        correlated.cache_clear()
        shares = len(rows) / len(few)
        return result(
            theirs.least / ours.least * shares, theirs.median / ours.median * shares, times
        )

    return measure


def merging(dim, order, result):
    """Microseconds of one ``a.merge(b)`` of many in a row."""

    def part(seed):
        rows = np.random.default_rng(seed).standard_normal((12_345, dim))
        return ms.JointMoments(dim, order).update(rows)

    def measure(scale):
        timer = Timer("a.merge(b)", "a = part(1); b = part(2)", globals={"part": part})
        (own,) = in_turn([timer], calls=1000, budget=scale.seconds / 2)
        return result(own.least * 1e6, own.median * 1e6, {"merge": own.least})

    return measure


def one_row(dim, order, result):
    """Microseconds of one ``update`` with a list of floats."""

    def measure(scale):
        timer = Timer(
            "m.update(row)", "m = make(dim, order); row = [4.25] * dim",
            globals={"make": ms.JointMoments, "dim": dim, "order": order},
        )  # fmt: skip
        (own,) = in_turn([timer], calls=scale.items // 10, budget=scale.seconds / 2)
        return result(own.least * 1e6, own.median * 1e6, {"update": own.least})

    return measure
