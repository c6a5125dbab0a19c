"""``JointMoments`` held to its promises: cuts, accuracy, laws, scale.

Sums of products are compared with exact rationals: within 128 u of the sum of the absolute
products, u = 2**-53.  Where another bound stands, the reason stands beside it.
"""

import itertools
import math
import os
import subprocess
import sys
from fractions import Fraction
from math import prod

import numpy as np
import pandas as pd
import polars as pl
import pyarrow as pa
import pytest
from assertions import assert_close
from exact import U, assert_same_state, integers
from published import random_cuts, square_root

import momentstream as ms

BLOCK = 2048
NAN, INF = math.nan, math.inf
NAMES = ("inlet", "outlet", "flow")


def rows_of(n, dim, seed=1, offset=0.0):
    """Skewed, correlated rows; each variable of its own size, ``offset`` of it away."""
    rng = np.random.default_rng(seed)
    mix = np.eye(dim) + rng.uniform(-0.5, 0.5, (dim, dim))
    return (rng.gamma(2.0, 1.0, (n, dim)) @ mix + offset) * 3.0 ** np.arange(dim)


def quarters(n, dim, seed=2):
    """Rows that single precision holds exactly."""
    return np.round(rows_of(n, dim, seed) * 4) / 4


def fed(rows, row_weights=None, order=4, **settings):
    dim = None if hasattr(rows, "__next__") else np.shape(rows)[-1]
    return ms.JointMoments(dim, order, **settings).update(rows, row_weights)


class ExactJoint:
    """Sums of products of deviations of rows, by integers."""

    def __init__(self, rows, weights=None):
        rows = [list(row) for row in rows]
        self.dim = len(rows[0])
        self.w, e = (
            ([1] * len(rows), 0) if weights is None else integers(np.asarray(weights, float))
        )
        self.weight_unit = Fraction(2) ** e
        self.total = sum(self.w)
        self.deviations, self.units, self.mean = [], [], []
        for column in zip(*rows, strict=True):
            x, e = integers(list(column))
            center = sum(q * v for q, v in zip(self.w, x, strict=True))
            self.mean.append(Fraction(center, self.total) * Fraction(2) ** e)
            self.deviations.append([v * self.total - center for v in x])
            self.units.append(Fraction(2) ** e / self.total)
        self.weight = self.total * self.weight_unit

    def sum_of(self, which, sign=lambda x: x):
        """The sum of the products of the deviations of these variables."""
        runs = [self.deviations[j] for j in which]
        total = sum(sign(q * prod(d)) for q, *d in zip(self.w, *runs, strict=True))
        return total * self.weight_unit * prod(self.units[j] for j in which)


def exponents(which, dim):
    return tuple(which.count(j) for j in range(dim))


def assert_sums(got, exact, label, allowed=128, sizes=None):
    """Every sum of products, and the means to 4 u of the spread and a unit of their own."""
    mean = got.mean()
    for j in range(exact.dim):
        spread = float(exact.sum_of((j,), abs) / exact.weight)
        bound = np.spacing(abs(float(exact.mean[j]))) + 4 * float(U) * spread
        assert abs(Fraction(mean[j]) - exact.mean[j]) <= bound, f"{label}: mean {j}"
    for k in range(2, got.order + 1):
        for which in itertools.combinations_with_replacement(range(exact.dim), k):
            ours = Fraction(got.comoment(exponents(which, exact.dim))) * Fraction(got.weight)
            size = exact.sum_of(which, abs) if sizes is None else sizes(which)
            error = abs(ours - exact.sum_of(which))
            assert error <= allowed * U * size, (
                f"{label}: sum {which} is off by {float(error / (U * size))} u"
            )


def assert_same_numbers(a, b):
    for name in ("mean", "covariance", "correlation", "coskewness", "cokurtosis"):
        x, y = getattr(a, name)(), getattr(b, name)()
        assert np.array_equal(x, y, equal_nan=True), name


# -- however the rows are cut ----------------------------------------------------------------------


def frames(rows):
    columns = {name: rows[:, j].copy() for j, name in enumerate(NAMES)}
    yield pd.DataFrame(columns)
    yield pl.DataFrame(columns)
    yield pa.table(columns)
    yield pa.RecordBatch.from_pydict(columns)
    yield pd.DataFrame(columns).astype({"inlet": "float32", "flow": "Float64"})
    yield pd.DataFrame(columns)[["flow", "inlet", "outlet"]]


@pytest.mark.parametrize("order", [1, 2, 3, 4])
def test_containers_layouts_and_dtypes_do_not_matter(order):
    rows = quarters(BLOCK + 77, 3)
    wanted = fed(rows, order=order, names=NAMES)
    wide = np.zeros((len(rows), 6))
    wide[:, ::2] = rows
    ways = [
        rows.tolist(), tuple(map(tuple, rows.tolist())), list(rows), np.asfortranarray(rows),
        rows[::-1].copy()[::-1], wide[:, ::2], rows.astype(np.float32), rows.astype(">f8"),
        np.ma.array(rows), iter(rows.tolist()), iter(rows), (tuple(row) for row in rows.tolist()),
        *frames(rows),
    ]  # fmt: skip
    for way in ways:
        got = ms.JointMoments(3, order, names=NAMES).update(way)
        assert_same_state(got, wanted, f"{type(way)}")
    whole = fed(np.abs(rows) * 4, order=order)
    for dtype in (np.int16, np.int64, np.uint32, np.float16):
        assert_same_state(fed((np.abs(rows) * 4).astype(dtype), order=order), whole, str(dtype))


@pytest.mark.parametrize("dim", [1, 2, 3, 17])
@pytest.mark.parametrize("weights", [None, "frequency", "reliability"])
@pytest.mark.parametrize("policy", ["raise", "omit", "propagate"])
def test_cuts_do_not_matter(dim, weights, policy):
    rng = np.random.default_rng(dim)
    rows = quarters(2 * BLOCK + 300, dim)
    w = None if weights is None else rng.integers(0, 4, len(rows)).astype(float)
    if policy != "raise":
        rows[rng.integers(0, len(rows), 9), rng.integers(0, dim, 9)] = [NAN, INF, -INF] * 3
    order = 4 if dim < 17 else 2
    settings = {"order": order, "weights": weights, "nonfinite": policy}
    whole = fed(rows, w, **settings)
    singles = ms.JointMoments(dim, **settings)
    kinds = (list, tuple, np.array)
    for i, row in enumerate(rows[:600].tolist()):
        singles.update(kinds[i % 3](row), None if w is None else w[i])
    singles.update(rows[600:], None if w is None else w[600:])
    assert_same_state(singles, whole, "one row at a time")
    for step in (1000, BLOCK - 1, BLOCK, BLOCK + 1):
        parts = ms.JointMoments(dim, **settings)
        for i in range(0, len(rows), step):
            parts.update(rows[i : i + step], None if w is None else w[i : i + step])
            parts.copy().covariance()
        assert_same_state(parts, whole, f"chunks of {step}")
    items = iter(rows.tolist())
    read = ms.JointMoments(dim, **settings).update(items, None if w is None else iter(w.tolist()))
    assert_same_state(read, whole, "an iterator")


THREADS = """
import sys, numpy as np, momentstream as ms
rows = np.random.default_rng(3).standard_normal((5000, 40)) + 100.0
print(ms.JointMoments(40, 2).update(rows).to_bytes().hex())
print(ms.JointMoments(6, 4).update(rows[:, :6]).to_bytes().hex())
"""


def test_threads_of_linear_algebra_do_not_matter():
    printed = []
    for count in "12":
        names = ("OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "OMP_NUM_THREADS")
        result = subprocess.run(
            [sys.executable, "-c", THREADS], capture_output=True, text=True, check=True,
            env={**os.environ, **dict.fromkeys(names, count)},
        )  # fmt: skip
        printed.append(result.stdout)
    assert printed[0] == printed[1]
    assert len(printed[0]) > 13_000


# -- accuracy --------------------------------------------------------------------------------------


@pytest.mark.parametrize("dim", [1, 2, 3, 4])
@pytest.mark.parametrize("offset", [0.0, 1e4, 1e8])
def test_sums_against_exact_rationals(dim, offset):
    rows = rows_of(BLOCK + 452, dim, seed=dim, offset=offset)
    exact = ExactJoint(rows)
    assert_sums(fed(rows), exact, "whole")
    rng = np.random.default_rng(4)
    parts = [fed(rows[cut]) for cut in random_cuts(rng, len(rows), 9)]
    assert_sums(ms.combine(parts), exact, "combined")
    while len(parts) > 1:  # a random tree
        a, b = rng.choice(len(parts), 2, replace=False)
        parts[a] = parts[a] + parts[b]
        del parts[b]
    assert_sums(parts[0], exact, "random tree")


def test_numpy_agrees():
    rows = rows_of(3000, 4)
    got = fed(rows)
    d = (rows - rows.mean(0)) / rows.std(0)
    n = len(rows)
    # n rows summed without blocks: NumPy's own error is some log2(n) to sqrt(n) units of 1.
    close = {"rtol": 1e-12, "atol": 1e-12}
    np.testing.assert_allclose(got.covariance(ddof=1), np.cov(rows.T), **close)
    np.testing.assert_allclose(got.correlation(), np.corrcoef(rows.T), **close)
    np.testing.assert_allclose(got.coskewness(), np.einsum("ni,nj,nk->ijk", d, d, d) / n, **close)
    fourth = np.einsum("ni,nj,nk,nl->ijkl", d, d, d, d) / n
    np.testing.assert_allclose(got.cokurtosis(), fourth, **close)


@pytest.mark.parametrize("offset", [0.0, 1e4, 1e8])
def test_marginals_are_moments_of_the_column(offset):
    rows = rows_of(5000, 3, offset=offset)
    got = fed(rows)
    for j in range(3):
        column = ms.Moments().update(rows[:, j])
        marginal = got.marginal(j)
        # Both are within a few units; blocks of unlike length round in unlike order.
        for name, units in (("mean", 2), ("variance", 8), ("skewness", 16), ("kurtosis", 32)):
            ours, theirs = getattr(marginal, name)(), getattr(column, name)()
            assert_close(ours, theirs, ulps=units, label=f"{name} of {j}")
        assert (marginal.minimum(), marginal.maximum()) == (column.minimum(), column.maximum())
        assert marginal.count == column.count


# -- laws ------------------------------------------------------------------------------------------


@pytest.mark.parametrize("sizes", [(1, 1), (5, 300), (BLOCK, 3 * BLOCK), (2 * BLOCK + 9, 7000)])
def test_merging_either_way_round_gives_the_same_bits(sizes):
    a, b = (fed(rows_of(n, 3, seed=n, offset=i * 7.0)) for i, n in enumerate(sizes))
    kept = a.to_bytes(resume=True), b.to_bytes(resume=True)
    assert (a + b).to_bytes() == (b + a).to_bytes()
    assert sum([a, b]) == ms.combine([a, b]) == a + b
    assert kept == (a.to_bytes(resume=True), b.to_bytes(resume=True))
    empty = ms.JointMoments(3, 4)
    assert (a + empty) == a == (empty + a)


def test_remove():
    rows = rows_of(4000, 3, offset=1e4)
    part, total = fed(rows[:1500]), fed(rows)
    all_rows = ExactJoint(rows)
    left = total.copy().remove(part)
    assert left.count == 2500
    # Errors are relative to the total; the parts' means differ from its by little.
    assert_sums(left, ExactJoint(rows[1500:]), "left", sizes=lambda w: all_rows.sum_of(w, abs))
    assert np.isnan(left.minimum()).all()
    assert part.copy().remove(part) == ms.JointMoments(3, 4)
    one = fed(rows[:3]).remove(fed(rows[:2]))
    assert one.count == 1
    assert np.all(one.covariance() == 0.0)
    with pytest.raises(ms.MergeError, match="more would be removed"):
        part.remove(total)


def test_subsets_and_permutations():
    rows = rows_of(2500, 4)
    whole = fed(rows, names=list("abcd"))
    for places in ([3, 1], [2], [3, 0, 2, 1]):
        part, direct = whole.subset(places), fed(rows[:, places])
        assert part.names == tuple("abcd"[i] for i in places)
        assert part == whole.subset(list(part.names))
        assert_sums(part, ExactJoint(rows[:, places]), "subset")
        assert np.array_equal(part.mean(), direct.mean())
        assert np.array_equal(part.minimum(), direct.minimum())
    assert_same_numbers(whole.subset([1, 0, 3, 2]).subset([1, 0, 3, 2]), whole)
    permuted = fed(rows[:, [3, 0, 2, 1]])
    # Which two are multiplied first changes with the order: a few roundings of the products.
    assert_sums(whole.subset([3, 0, 2, 1]), ExactJoint(rows[:, [3, 0, 2, 1]]), "permuted")
    np.testing.assert_array_equal(
        permuted.covariance(), whole.covariance()[np.ix_(*[[3, 0, 2, 1]] * 2)]
    )


@pytest.mark.parametrize("offset", [0, 2**20])
def test_linear_maps_commute_with_reading(offset):
    rows = quarters(1500, 3) + offset
    matrix = np.array([[1.0, -2.0, 0.5], [0.0, 3.0, 0.0]])
    moved = rows @ matrix.T + [5.0, -1.0]  # exact: few digits
    got, exact, before = fed(rows).affine(matrix, [5.0, -1.0]), ExactJoint(moved), ExactJoint(rows)

    def size(which):  # a sum over the rows of matrix: its terms cancel only after they are added
        return sum(
            Fraction(float(abs(prod(matrix[i, j] for i, j in zip(which, inner, strict=True)))))
            * before.sum_of(inner, abs)
            for inner in itertools.product(range(3), repeat=len(which))
        )

    assert_sums(got, exact, "affine", sizes=size)
    assert (got.minimum()[1], got.maximum()[1]) == (moved[:, 1].min(), moved[:, 1].max())
    assert np.isnan(got.minimum()[0])
    along = fed(rows).along(matrix[0])
    assert_close(along.variance(), got.covariance()[0, 0], ulps=64, label="along")


# -- scale and constants ---------------------------------------------------------------------------


@pytest.mark.parametrize(
    "powers", [(990, 990, 990), (-980, -980, -980), (970, 0, -970), (-90, 60, 95)]
)
def test_powers_of_two_leave_pure_numbers_bit_for_bit(powers):
    rows = rows_of(BLOCK + 200, 3)
    scaled = np.ldexp(rows, powers)
    wanted = fed(rows)
    for got in (
        fed(scaled), fed(scaled[:900]).update(scaled[900:]),
        fed(rows).affine(np.diag(np.ldexp(1.0, powers))),
    ):  # fmt: skip
        for name in ("correlation", "coskewness", "cokurtosis"):
            assert np.array_equal(getattr(got, name)(), getattr(wanted, name)()), name
        assert np.array_equal(got.mean(), np.ldexp(wanted.mean(), powers))
    halves = fed(scaled[:900]) + fed(scaled[900:])
    plain = fed(rows[:900]) + fed(rows[900:])
    assert np.array_equal(halves.cokurtosis(), plain.cokurtosis())
    # Parts without a spread of their own: only the distances of their means have a size.
    for sizes in ([1] * 5, [2, 1, 1], [1, 3]):
        places = np.cumsum(sizes)[:-1]
        single, wanted = (
            ms.combine(fed(part) for part in np.split(given[: sum(sizes)], places))
            for given in (scaled, rows)
        )
        assert np.array_equal(single.correlation(), wanted.correlation())
        assert np.array_equal(single.cokurtosis(), wanted.cokurtosis())
    steps = np.repeat(scaled[:3], BLOCK, axis=0)
    assert np.array_equal(
        fed(steps).cokurtosis(), fed(np.repeat(rows[:3], BLOCK, axis=0)).cokurtosis()
    )


@pytest.mark.parametrize("size", [1e300, 1e-300, 1e-160])
def test_other_scales_keep_every_digit(size):
    rows = rows_of(200, 2) * size
    exact, got = ExactJoint(rows), fed(rows)
    for j, k in ((0, 0), (0, 1), (1, 1)):
        wanted = exact.sum_of((j, k)) / exact.weight
        if size == 1e-160:
            # Near the least doubles, a covariance is right to a unit of its own last place there.
            assert abs(Fraction(got.covariance()[j, k]) - wanted) <= Fraction(1, 2**1074)
        else:
            assert got.covariance()[j, k] == ((INF if wanted > 0 else -INF) if size > 1 else 0.0)
    both = exact.sum_of((0, 1))
    root = square_root(both**2 / (exact.sum_of((0, 0)) * exact.sum_of((1, 1))))
    wanted = root if both > 0 else -root
    assert_close(got.correlation()[0, 1], wanted, ulps=4, relative_to=1, label="correlation")


@pytest.mark.parametrize(
    "value", [0.0, 0.1, -14.62, 1e300, 1e-310, 6523763181031200.0, 2.0**53 - 1]
)
def test_constants_are_constant(value):
    rows = quarters(3 * BLOCK + 5, 3)
    rows[:, 1] = value
    parts = [fed(part) for part in np.array_split(rows, 7)]
    for got in (fed(rows), ms.combine(parts), fed(rows[:1]), fed(iter(rows[:50].tolist()))):
        assert got.mean()[1] == value
        assert np.all(got.covariance()[1] == 0.0)
        assert np.all(got.covariance()[:, 1] == 0.0)
        assert np.isnan(got.correlation()[1]).all()
        assert np.isnan(got.coskewness()[1]).all()
        assert np.isnan(got.cokurtosis()[1]).all()
    assert got.marginal(1).variance() == 0.0


def test_what_mathematics_forbids_never_appears():
    rng = np.random.default_rng(8)
    for n in (2, 3, 50, 3000):
        x = rng.standard_normal(n) + 1e8
        rows = np.stack([x, 2 * x, -x, x + 1e-7 * rng.standard_normal(n)], axis=1)
        for got in (fed(rows), ms.combine(fed(part) for part in np.array_split(rows, 2))):
            assert np.nanmax(np.abs(got.correlation())) <= 1.0
            values = np.linalg.eigvalsh(got.covariance())
            assert values[0] >= -128 * float(U) * values[-1]
            assert got.correlation()[0, 1] == 1.0
            assert got.correlation()[0, 2] == -1.0
