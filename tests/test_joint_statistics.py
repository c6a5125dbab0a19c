"""Joint moment vectors made from exact rationals: their algebra, and what is read off them.

U is a unit of the last place of 1.0.  Sums enter rounded once; a statistic of degree k is some
2 k operations on them, so 16 units hold everywhere unless a condition number is named.
"""

import json
import math
import pickle
from fractions import Fraction
from itertools import combinations_with_replacement, permutations, product
from math import prod

import numpy as np
import pytest
import scipy.stats
from assertions import assert_close
from published import load, table

import momentstream as ms
from momentstream.algebra import central, joint
from momentstream.statistics.joint import JointStatistics
from momentstream.statistics.joint_summary import JointSummary
from momentstream.statistics.joint_view import JointView

U = 2.0**-52
CASES = {case["id"]: case for case in load("published/check_values.json")["cases"]}


class Held(JointStatistics):
    """The exact moments of rows, rounded once."""

    def __init__(self, rows, weights=None, kind=None, order=4, names=None, scale=0):
        self.rows = np.asarray(rows, float).reshape(len(rows), -1)
        given = [1] * len(rows) if weights is None else weights
        w = [Fraction(float(x)) for x in given]
        exact = [[Fraction(float(x)) / Fraction(2) ** scale for x in row] for row in self.rows]
        total, dim = sum(w), self.rows.shape[1]
        mean = [sum(v * r[j] for v, r in zip(w, exact, strict=True)) / total for j in range(dim)]
        self.centred = [[x - m for x, m in zip(row, mean, strict=True)] for row in exact]
        self.w, self.total, self.exact_mean = w, total, mean
        high = np.array([float(m) for m in mean])
        low = np.array([float(m - Fraction(h)) for m, h in zip(mean, high, strict=True)])
        sums = tuple(
            np.array([float(self.sum_of(a)) for a in combinations_with_replacement(range(dim), k)])
            for k in range(2, order + 1)
        )
        powers = None
        if kind == "reliability":
            powers = np.array([float(sum(v**j for v in w)) for j in (2, 3, 4)])
        vector = joint.JointVector(
            float(total), high, low, np.full(dim, float(scale)), sums, 0.0, powers
        )
        count = int(total) if kind == "frequency" else len(rows)
        ends = self.rows.min(axis=0), self.rows.max(axis=0)
        self.view = JointView(order, dim, names, kind, count, 0, vector, *ends)

    def sum_of(self, which, sign=lambda x: x):
        terms = zip(self.w, self.centred, strict=True)
        return sum(v * prod(sign(c[i]) for i in which) for v, c in terms)

    def _joint(self):
        return self.view


def empty(dim=2, order=4, kind=None):
    held = Held(np.zeros((1, dim)), kind=kind, weights=[1.0] if kind else None, order=order)
    vector = joint.empty(dim, order, kind == "reliability")
    nothing = np.full(dim, np.nan)
    held.view = held.view._replace(readings=0, vector=vector, minimum=nothing, maximum=nothing)
    return held


RNG = np.random.default_rng(20)
# Quarters, so that means and sums have few digits; skewed, and of unlike sizes.
ROWS = np.round(RNG.gamma(2.0, 2.0, (24, 3)) @ [[1, 1, 0], [0, 3, 1], [2, 0, 40]] * 4) / 4
WEIGHTS = RNG.integers(1, 6, 24).astype(float)


def assert_vectors(got, held, units, label):
    """Sums within ``units`` of the sum of their absolute products, means of their spread."""
    got = joint.in_units(got, held.view.vector.scale, 0.0)
    dim = held.view.dim
    for j in range(dim):
        exact = Fraction(float(got.mean[j])) + Fraction(float(got.rest[j])) - held.exact_mean[j]
        spread = math.sqrt(float(held.sum_of((j, j)) / held.total))
        assert abs(float(exact)) <= units * U * spread, f"{label}: mean {j}"
    for k, values in enumerate(got.sums, start=2):
        which = list(combinations_with_replacement(range(dim), k))
        assert_close(
            values,
            [held.sum_of(a) for a in which],
            ulps=units,
            relative_to=[held.sum_of(a, abs) for a in which],
            label=f"{label}: degree {k}",
        )


# -- packed arrays -------------------------------------------------------------------------------


@pytest.mark.parametrize("dim", [1, 2, 3, 6])
@pytest.mark.parametrize("k", [1, 2, 3, 4])
def test_packed_arrays_are_every_multiset_once(dim, k):
    where = joint.indices(dim, k)
    assert where.tolist() == [list(a) for a in combinations_with_replacement(range(dim), k)]
    for order in permutations(range(k)):
        assert joint.place(dim, where[:, order]).tolist() == list(range(len(where)))
    whole = joint.full(np.arange(float(len(where))), dim, k)
    assert all(np.array_equal(whole, whole.transpose(order)) for order in permutations(range(k)))
    assert joint.packed(whole).tolist() == list(range(len(where)))
    assert joint.diagonal(joint.packed(whole), dim, k).tolist() == [
        whole[(i,) * k] for i in range(dim)
    ]


# -- algebra -------------------------------------------------------------------------------------


@pytest.mark.parametrize("offset", [0.0, 1e4, 1e8])
@pytest.mark.parametrize("cut", [1, 9, 23])
def test_parts_combine_and_come_apart(offset, cut):
    rows = ROWS + offset
    whole = Held(rows, WEIGHTS, "reliability")
    a = Held(rows[:cut], WEIGHTS[:cut], "reliability").view.vector
    b = Held(rows[cut:], WEIGHTS[cut:], "reliability").view.vector
    together, other = joint.combine(a, b), joint.combine(b, a)
    assert_vectors(together, whole, 16, "combined")
    assert together.weight == sum(WEIGHTS)
    assert together.powers.tolist() == whole.view.vector.powers.tolist()
    for x, y in zip(together.sums, other.sums, strict=True):
        assert x.tobytes() == y.tobytes(), "either way round, the same bits"
    left = joint.remove(whole.view.vector, b)
    for k in range(2, 5):  # to the sums of the whole
        size = [whole.sum_of(i, abs) for i in combinations_with_replacement(range(3), k)]
        exact = joint.in_units(a, whole.view.vector.scale, 0.0).sums[k - 2]
        got = joint.in_units(left, whole.view.vector.scale, 0.0).sums[k - 2]
        assert_close(got, list(exact), ulps=64, relative_to=size, label=f"removed: degree {k}")
    assert np.all(joint.diagonal(left.sums[0], 3, 2) >= 0.0)
    assert joint.remove(a, a).weight == 0.0


def test_empty_parts_and_constants_change_nothing():
    nothing, a = joint.empty(3, 4), Held(ROWS).view.vector
    assert joint.combine(nothing, a) is a
    assert joint.combine(a, nothing) is a
    assert joint.remove(a, nothing) is a
    assert joint.combine(nothing, nothing).weight == 0.0
    assert joint.affine(nothing, np.eye(3), np.ones(3)).weight == 0.0
    level = np.full((5, 2), 10000001.1)
    parts = [Held(level[:2]).view.vector, Held(level).view.vector]
    together = joint.combine(*parts)
    assert not any(np.any(s) for s in together.sums)
    assert together.mean.tolist() == level[0].tolist()


@pytest.mark.parametrize("offset", [0.0, 1e8])
@pytest.mark.parametrize("exponent", [0, 980, -980])
def test_linear_maps_commute_with_reading(offset, exponent):
    matrix = np.array([[1.0, -2.0, 0.5], [0.25, 1.0, 0.0]])
    rows = ROWS + offset
    mapped = rows @ matrix.T + [3.0, -7.0]  # exact: few binary digits
    scale = math.ldexp(1.0, exponent)
    held = Held(rows * scale, scale=exponent)
    wanted = Held(mapped * scale, scale=exponent)
    got = joint.affine(held.view.vector, matrix, np.array([3.0, -7.0]) * scale)
    # The terms that are added are up to 50 times what is left of them.
    assert_vectors(got, wanted, 1000, "affine")
    one = joint.project(held.view.vector, matrix[0])
    one = central.in_units(one, float(exponent), 0.0)
    for k, value in enumerate(one.sums, start=2):
        size = wanted.sum_of((0,) * k, abs)
        exact = wanted.sum_of((0,) * k)
        assert_close(value, exact, ulps=1000, relative_to=size, label=f"along: degree {k}")


def test_combinations_that_cancel_have_no_spread():
    rows = np.column_stack([ROWS[:, 0], ROWS[:, 1], 0.3 * ROWS[:, 0] - 0.7 * ROWS[:, 1]])
    found = Held(rows).along([0.3, -0.7, -1.0])
    assert found.std() == 0.0
    assert math.isnan(found.skewness())
    assert math.isnan(found.kurtosis())


def test_subsets_and_permutations_take_entries_as_they_are():
    held = Held(ROWS, names=("a", "b", "c"))
    order = [2, 0, 1]
    permuted = Held(ROWS[:, order])
    got = joint.subset(held.view.vector, order)
    for x, y in zip(got.sums, permuted.view.vector.sums, strict=True):
        assert x.tolist() == y.tolist()
    assert np.array_equal(
        permuted.cokurtosis(), held.cokurtosis()[np.ix_(order, order, order, order)]
    )
    column = ms.Moments().update(ROWS[:, 1])
    marginal = held.marginal("b")
    assert marginal == held.marginal(1) == held.marginal(-2)
    assert_close(marginal.skewness(), column.skewness(), ulps=4, label="skewness of a column")
    assert marginal.kurtosis() == held.cokurtosis()[1, 1, 1, 1] - 3.0
    assert (marginal.minimum(), marginal.maximum()) == (column.minimum(), column.maximum())


# -- statistics ----------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", [None, "frequency", "reliability"])
def test_against_numpy(kind):
    weights = None if kind is None else WEIGHTS
    held = Held(ROWS, weights, kind)
    options = {"frequency": {"fweights": WEIGHTS.astype(int)}, "reliability": {"aweights": WEIGHTS}}
    for ddof in (0, 1):
        wanted = np.cov(ROWS.T, ddof=ddof, **options.get(kind, {}))
        deviations = np.sqrt(np.outer(wanted.diagonal(), wanted.diagonal()))
        assert np.max(np.abs(held.covariance(ddof) - wanted) / deviations) <= 32 * U
    w = np.ones(24) if weights is None else weights
    z = ROWS - np.average(ROWS, axis=0, weights=w)
    z = z / np.sqrt(np.average(z * z, axis=0, weights=w))
    third = np.einsum("n,ni,nj,nk->ijk", w, z, z, z) / w.sum()
    fourth = np.einsum("n,ni,nj,nk,nl->ijkl", w, z, z, z, z) / w.sum()
    assert np.max(np.abs(held.coskewness() - third)) <= 64 * U
    assert np.max(np.abs(held.cokurtosis() - fourth)) <= 256 * U  # entries up to 8
    for exponents in product(range(3), repeat=3):
        if sum(exponents) <= 4:
            which = np.repeat(range(3), exponents)
            exact, size = held.sum_of(which) / held.total, held.sum_of(which, abs) / held.total
            assert_close(
                held.comoment(exponents), exact, ulps=4, relative_to=size, label=str(exponents)
            )
    counts = {None: (24, 24.0), "frequency": (int(WEIGHTS.sum()), WEIGHTS.sum())}
    kish = WEIGHTS.sum() ** 2 / (WEIGHTS**2).sum()
    assert (held.count, held.effective_count) == counts.get(kind, (24, kish))
    assert held.weight == w.sum()


def test_projections_against_scipy():
    direction = np.array([1.0, -0.25, 0.125])
    found, line = Held(ROWS).along(direction), ROWS @ direction
    tolerance = {"rel": 1e-12}  # condition of the cancellation, some 100, with 4 k operations
    assert found.mean() == pytest.approx(line.mean(), **tolerance)
    assert found.std(ddof=1) == pytest.approx(line.std(ddof=1), **tolerance)
    assert found.skewness() == pytest.approx(scipy.stats.skew(line), **tolerance)
    assert found.kurtosis() == pytest.approx(scipy.stats.kurtosis(line), **tolerance)
    assert found.count == 24
    assert math.isnan(found.minimum())


@pytest.mark.parametrize("exponent", [997, -1000])
def test_scales_leave_dimensionless_statistics_bit_for_bit(exponent):
    each = np.array([exponent, 0, -exponent])
    plain, scaled = Held(ROWS), Held(ROWS)
    vector = scaled.view.vector._replace(scale=each.astype(float))
    scaled.view = scaled.view._replace(vector=vector)
    for name in ("correlation", "coskewness", "cokurtosis"):
        assert getattr(plain, name)().tobytes() == getattr(scaled, name)().tobytes()
    assert plain.mardia() == scaled.mardia()
    covariance = scaled.covariance()
    beyond = math.inf if exponent > 0 else 0.0
    assert covariance[0, 0] == beyond
    assert covariance[2, 2] == (0.0 if exponent > 0 else math.inf)
    assert covariance[0, 2] == plain.covariance()[0, 2]
    a, b = plain.regress(1, [0]), scaled.regress(1, [0])
    assert b.coefficients[0] == math.ldexp(a.coefficients[0], -exponent)
    assert a.intercept == b.intercept
    assert a.r_squared == b.r_squared


def test_laws_of_correlation_and_covariance():
    rows = np.column_stack([ROWS, 0.1 * ROWS[:, 0] + 1e8, np.full(24, 3.3)])
    held = Held(rows)
    correlation = held.correlation()
    assert np.nanmax(np.abs(correlation)) <= 1.0
    assert correlation.diagonal()[:4].tolist() == [1.0] * 4
    assert np.isnan(correlation[4]).all()
    assert np.isnan(correlation[:, 4]).all()
    covariance = held.covariance()
    assert np.array_equal(covariance, covariance.T)
    variances, axes = held.principal_axes()
    assert np.all(variances >= 0.0)
    assert np.all(np.diff(variances) <= 0.0)
    size = variances[0]
    assert np.max(np.abs(axes * variances @ axes.T - covariance)) <= 32 * U * size
    assert np.max(np.abs(axes.T @ axes - np.eye(5))) <= 16 * U
    assert np.all(axes[np.abs(axes).argmax(axis=0), range(5)] > 0.0)
    assert np.linalg.eigvalsh(covariance)[0] >= -16 * U * size


# -- published and exact values ------------------------------------------------------------------


def published(case, **options):
    columns = {k: np.array(v, float) for k, v in table(f"{case}.csv").items()}
    return Held(np.column_stack(list(columns.values())), names=tuple(columns), **options)


@pytest.mark.parametrize(
    ("case", "file"), [("cork-mardia", "cork"), ("longley-corr", "longley"), ("gum-h2", "gum_h2")]
)
def test_published_matrices(case, file):
    held = published(file, order=4 if case == "cork-mardia" else 2)
    found = {"cov": held.covariance(ddof=1), "corr": held.correlation()}
    taken = 0
    for entry in CASES[case]["statistics"]:
        if entry["stat"] in found:
            i, j = (held.view.names.index(name) for name in entry["columns"])
            value = found[entry["stat"]][i, j]
        elif entry["stat"].startswith("mardia"):
            measures = held.mardia()
            value = measures.skewness if "b1" in entry["stat"] else measures.kurtosis
        else:
            continue
        assert value == pytest.approx(float(entry["value"]), rel=float(entry["rel_tol"])), entry
        taken += 1
    assert taken == {"cork-mardia": 12, "longley-corr": 21, "gum-h2": 3}[case]


def test_heights_and_fingers():
    columns = {k: np.array(v, float) for k, v in table("macdonell.csv").items()}
    rows = np.column_stack([columns["height"], columns["finger"]])
    held = Held(rows, columns["freq"], "frequency", order=2)
    covariance = held.covariance()
    heights, fingers = covariance[0, 0] - 1 / 12, covariance[1, 1] - 0.01 / 12  # Sheppard
    assert held.count == 3000
    assert round(covariance[0, 1] / math.sqrt(heights * fingers), 4) == 0.6608
    assert held.mean().round(4).tolist() == [65.5355, 11.5474]


@pytest.mark.parametrize("body", ["rod", "box", "triangle", "sphere"])
def test_inertia_of_bodies(body):
    columns = table("equimomental_bodies.csv")
    own = [i for i, name in enumerate(columns["body"]) if name == body]
    rows = [[float(columns[axis][i]) for axis in "xyz"] for i in own]
    held = Held(rows, [float(columns["mass"][i]) for i in own], "reliability", order=2)
    for entry in CASES["mechanics-bodies"]["statistics"]:
        if entry["body"] == body and entry["stat"][0] in "IP":
            about = entry["about"]
            about = None if isinstance(about, str) else [float(x) for x in about]
            tensor = held.inertia_tensor(about)
            i, j = ("xyz".index(axis) for axis in entry["stat"][1:])
            value = -tensor[i, j] if entry["stat"][0] == "P" else tensor[i, j]
            wanted = float(entry["value"])
            assert_close(value, wanted, ulps=4, relative_to=wanted or 1.0, label=str(entry))
    with pytest.raises(ValueError, match="needs 3 variables, there are 2"):
        Held([[1.0, 2.0]]).inertia_tensor()


def solved(matrix, right):
    """Linear equations in rationals."""
    rows = [[*row, b] for row, b in zip(matrix, right, strict=True)]
    for i in range(len(rows)):
        pivot = next(r for r in range(i, len(rows)) if rows[r][i])
        rows[i], rows[pivot] = rows[pivot], rows[i]
        rows[i] = [x / rows[i][i] for x in rows[i]]
        for r in range(len(rows)):
            if r != i:
                rows[r] = [x - rows[r][i] * y for x, y in zip(rows[r], rows[i], strict=True)]
    return [row[-1] for row in rows]


@pytest.mark.parametrize("offset", [0.0, 1e6])
def test_longley_regression_against_exact_least_squares(offset):
    held = published("longley", order=2)
    held = Held(held.rows + offset, names=held.view.names, order=2)
    found = held.regress("TOTEMP")
    x = [[Fraction(1), *map(Fraction, row[:6])] for row in held.rows.tolist()]
    y = [Fraction(value) for value in held.rows[:, 6].tolist()]
    normal = [[sum(r[i] * r[j] for r in x) for j in range(7)] for i in range(7)]
    beta = solved(normal, [sum(r[i] * v for r, v in zip(x, y, strict=True)) for i in range(7)])
    residuals = [
        v - sum(b * c for b, c in zip(beta, r, strict=True)) for r, v in zip(x, y, strict=True)
    ]
    variance = sum(e * e for e in residuals) / 9
    errors = [
        math.sqrt(variance * solved(normal, [Fraction(i == j) for j in range(7)])[i])
        for i in range(7)
    ]
    # Condition of the correlation matrix: 1.2e4, so 12 digits are left.
    exact = pytest.approx([float(b) for b in beta[1:]], rel=1e-11)
    assert found.coefficients.tolist() == exact
    assert found.intercept == pytest.approx(float(beta[0]), rel=1e-11)
    assert found.residual_variance == pytest.approx(float(variance), rel=1e-11)
    assert [found.intercept_error, *found.coefficient_errors] == pytest.approx(errors, rel=1e-11)
    if offset == 0.0:  # certified
        certified = [
            15.0618722713733, -0.0358191792925910, -2.02022980381683, -1.03322686717359,
            -0.0511041056535807, 1829.15146461355,
        ]  # fmt: skip
        assert found.coefficients.tolist() == pytest.approx(certified, rel=1e-11)
        assert found.intercept == pytest.approx(-3482258.63459582, rel=1e-11)
        assert math.sqrt(found.residual_variance) == pytest.approx(304.854073561965, rel=1e-11)
        assert found.r_squared == pytest.approx(0.995479004577296, rel=1e-13)


def test_mardia_check_value_and_laws():
    found = Held([[0, 0], [2, 0], [0, 2], [4, 6]]).mardia()
    assert round(found.skewness, 6) == 1.586667
    assert round(found.kurtosis, 6) == 4.573333
    assert found.skewness_statistic == pytest.approx(4 * found.skewness / 6, rel=1e-15)
    law = scipy.stats.chi2(found.degrees_of_freedom)
    assert found.skewness_pvalue == pytest.approx(law.sf(found.skewness_statistic), rel=1e-13)
    wanted = 2 * scipy.stats.norm.sf(abs(found.kurtosis_statistic))
    assert found.kurtosis_pvalue == pytest.approx(wanted, rel=1e-13)
    mapped = Held(ROWS @ [[1, 2, 0], [0, 1, 3], [0, 0, 4]] + 5.0).mardia()
    held = Held(ROWS).mardia()
    assert mapped.skewness == pytest.approx(held.skewness, rel=1e-11)  # condition, some 1e3
    assert mapped.kurtosis == pytest.approx(held.kurtosis, rel=1e-11)


# -- what is not defined, and what is refused ----------------------------------------------------


@pytest.mark.parametrize("kind", [None, "frequency", "reliability"])
def test_empty_is_nan(kind):
    held = empty(3, kind=kind)
    arrays = [held.mean(), held.covariance(), held.covariance(1), held.correlation()]
    arrays += [held.coskewness(), held.cokurtosis(), *held.principal_axes()]
    arrays += [held.inertia_tensor(), held.inertia_tensor([0, 0, 0]), held.minimum()]
    assert all(np.isnan(a).all() for a in arrays)
    assert math.isnan(held.comoment((1, 1, 0)))
    assert math.isnan(held.mardia().kurtosis_pvalue)
    assert math.isnan(held.along([1, 2, 3]).mean())
    assert all(np.isnan(x).all() for x in held.regress(0))
    assert (held.count, held.weight, held.effective_count) == (0, 0.0, 0.0)
    assert "0 rows" in str(JointSummary._make(held.view))


def test_singular_covariances_are_nan():
    rows = np.column_stack([ROWS, ROWS @ [0.3, -0.7, 0.1], np.arange(24.0)])
    held = Held(rows)
    measures = held.mardia()
    fields = ("skewness", "kurtosis", "skewness_statistic", "kurtosis_statistic")
    assert all(math.isnan(getattr(measures, name)) for name in fields)
    assert math.isnan(measures.skewness_pvalue)
    assert all(np.isnan(x).all() for x in held.regress(4))
    assert all(np.isnan(x).all() for x in Held([[1.0, 2.0], [1.0, 3.0]]).regress(1))
    line = held.regress(3, [0, 1, 2])  # the others determine it
    assert line.coefficients.tolist() == pytest.approx([0.3, -0.7, 0.1], rel=1e-12)
    assert line.residual_variance == 0.0
    assert line.r_squared == pytest.approx(1.0, abs=8 * U)
    assert math.isnan(Held([[1.0, 2.0], [2.0, 5.0]]).regress(1).residual_variance)
    level = Held([[1.0, 2.0], [2.0, 2.0], [4.0, 2.0]]).regress(1)
    assert (level.coefficients[0], level.intercept) == (0.0, 2.0)
    assert math.isnan(level.r_squared)
    assert np.isnan(Held(ROWS).covariance(ddof=24)).all()
    assert np.isnan(Held([[1.0, 2.0]], [3.0], "reliability").covariance(ddof=1)).all()


@pytest.mark.parametrize(
    ("call", "error", "message"),
    [
        (lambda h: h.coskewness(), ms.OrderError, "needs order=3, Held keeps order=2"),
        (lambda h: h.cokurtosis(), ms.OrderError, "make it with order=4"),
        (lambda h: h.comoment((2, 1, 0)), ms.OrderError, "make it with order=3"),
        (lambda h: h.comoment((2, 3, 0)), ms.OrderError, "the highest is 4"),
        (lambda h: h.comoment((1, 1)), ValueError, "exponents must be 3"),
        (lambda h: h.comoment((1, -1, 0)), ValueError, "at least 0, got -1"),
        (lambda h: h.mardia(), ms.OrderError, "make it with order=4"),
        (lambda h: h.marginal("d"), KeyError, "no variable is named 'd'"),
        (lambda h: h.marginal(3), IndexError, "variable 3 is out of range: there are 3"),
        (lambda h: h.along([1.0, 2.0]), ValueError, r"shape \(3,\), got \(2,\)"),
        (lambda h: h.along([1.0, 2.0, math.nan]), ValueError, "must be finite"),
        (lambda h: h.along("abc"), TypeError, "must be numbers, got 'abc'"),
        (lambda h: h.regress(0, [0, 1]), ValueError, "each variable can be named once"),
        (lambda h: h.regress(0, [1, "b"]), ValueError, "each variable can be named once"),
        (lambda h: h.inertia_tensor([1.0]), ValueError, "about must have shape"),
    ],
)
def test_what_is_refused(call, error, message):
    with pytest.raises(error, match=message):
        call(Held(ROWS, names=("a", "b", "c"), order=2))


# -- the summary ---------------------------------------------------------------------------------


def test_summary_is_a_value():
    view = Held(ROWS, names=("a", "b<", "c$")).view
    summary = JointSummary._make(view)
    again = pickle.loads(pickle.dumps(summary))
    assert again == summary
    assert hash(again) == hash(summary)
    before = summary.covariance()
    view.vector.sums[0][:] = 0.0
    summary.mean()[:] = 9.0
    assert np.array_equal(summary.covariance(), before)
    with pytest.raises(AttributeError, match="immutable"):
        summary.order = 3
    plain = json.loads(json.dumps(summary.as_dict(), allow_nan=False))
    assert plain["covariance"] == before.tolist()
    assert plain["skewness"] == [summary.marginal(i).skewness() for i in range(3)]
    text = str(summary)
    assert text.startswith("24 rows\nvariable")
    assert "kurtosis" in text
    assert "b&lt;" in summary._repr_html_()
    assert "b<" not in summary._repr_html_()


def test_wide_summaries_are_shortened():
    rows = RNG.integers(0, 9, (5, 30)).astype(float)
    text = str(JointSummary._make(Held(rows, order=2).view))
    assert "... 20 more variables" in text
    assert max(map(len, text.splitlines())) <= 120
    assert len(text.splitlines()) <= 24
    only_means = str(JointSummary._make(Held(rows[:, :2], order=1).view))
    assert "correlation" not in only_means


def test_plot_shows_names_and_values():
    import matplotlib

    matplotlib.use("Agg")
    import matplotlib.pyplot as plt

    summary = JointSummary._make(Held(ROWS, names=("a", "b", "c$x$")).view)
    figure, ax = plt.subplots()
    assert summary.plot(ax) is ax
    figure.canvas.draw()
    assert [label.get_text() for label in ax.get_xticklabels()] == ["a", "b", r"c\$x\$"]
    assert len(ax.texts) == 9
    assert ax.images[0].get_clim() == (-1.0, 1.0)
    plt.close(figure)
    plt.close(summary.plot().figure)
