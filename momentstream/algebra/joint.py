"""Joint moment vectors: change of centre, combination, removal, linear maps.

The sum of ``w * prod(x_i - mean_i)`` over a multiset of indices is kept once, in the order of
``combinations_with_replacement``.  Each variable has units of its own.  Sources: Pébay, Terriberry,
Kolla & Bennett (2016), "Numerically stable, scalable formulas for parallel and online computation
of higher-order multivariate central moments with arbitrary weights"; multinomial theorem for
projections.
"""

from functools import lru_cache
from itertools import chain, combinations, combinations_with_replacement, permutations
from math import comb, factorial
from typing import Any, NamedTuple

import numpy as np

from .central import MomentVector, _two_product, shift, two_sum

_NOTHING = -10_000
# A sum below this share of the terms that cancelled in it is rounding alone.
_CANCELLED = 2.0**-49
# Units may differ from the size of what they measure by this exponent before they are changed.
_ROOM = 60


class JointVector(NamedTuple):
    """The moment vector of several variables.

    The mean of variable j is ``(mean[j] + rest[j]) * 2**scale[j]``, unevaluated.
    """

    weight: Any  # W, in units of 2**weight_scale
    mean: Any  # shape (d,): leading part
    rest: Any  # shape (d,): what it leaves
    scale: Any  # shape (d,): integers, kept as doubles
    sums: Any  # tuple, packed sums of degree 2 .. p; entry (i, j, ..) in units of
    # 2**(weight_scale + scale[i] + scale[j] + ..)
    weight_scale: Any = 0.0
    powers: Any = None  # sums of w**2, w**3, w**4 in units of 2**(j * weight_scale), or None


# -- packed symmetric arrays ---------------------------------------------------------------------


def size(dim, k):
    """Number of entries of a packed symmetric array of degree k."""
    return comb(dim + k - 1, k)


@lru_cache(maxsize=64)
def indices(dim, k):
    """The indices of every packed entry, in their order; int array of shape (n_k, k)."""
    entries = chain.from_iterable(combinations_with_replacement(range(dim), k))
    return _frozen(np.fromiter(entries, np.intp, k * size(dim, k)).reshape(-1, k))


def place(dim, where):
    """The packed places of entries.

    Parameters
    ----------
    dim : int
    where : int array, shape (..., k)
        Indices of entries, in any order.
    """
    where = np.sort(np.asarray(where, np.intp), axis=-1)
    k = where.shape[-1]
    # Entries after this one: those that agree with it so far and then go higher.
    places = np.full(where.shape[:-1], size(dim, k) - 1)
    for r in range(k):
        later = _combinations_below(dim, k - r)
        places -= later[where[..., r]]
    return places


@lru_cache(maxsize=256)
def _combinations_below(dim, left):
    return _frozen(np.array([comb(dim - 2 - i + left, left) for i in range(dim)], np.intp))


@lru_cache(maxsize=64)
def _diagonal(dim, k):
    return _frozen(place(dim, np.repeat(np.arange(dim)[:, None], k, axis=1)))


def diagonal(packed, dim, k):
    """The entries (i, i, ..): a copy, shape (dim,)."""
    return packed.take(_diagonal(dim, k))


def full(packed, dim, k):
    """The full symmetric array of a packed one: shape ``(dim,) * k``, exactly symmetric."""
    whole = np.empty((dim,) * k)
    columns = indices(dim, k).T
    for order in permutations(range(k)):
        whole[tuple(columns[r] for r in order)] = packed
    return whole


def packed(whole):
    """The packed form of a symmetric array."""
    return whole[tuple(indices(len(whole), np.ndim(whole)).T)]


@lru_cache(maxsize=32)
def _parts(dim, k):
    """For each entry of degree k, what is left of it at a lower degree.

    A list of pairs (places of the part taken out, places of what is left), each of shape
    (number of ways, n_k): one variable taken out, and for degree 4 two.
    """
    where = indices(dim, k)
    ways = []
    for taken in range(1, k - 1):
        out, left = [], []
        for chosen in combinations(range(k), taken):
            others = [r for r in range(k) if r not in chosen]
            out.append(place(dim, where[:, chosen]))
            left.append(place(dim, where[:, others]))
        ways.append((_frozen(np.array(out)), _frozen(np.array(left))))
    return ways


@lru_cache(maxsize=32)
def _halves(dim, k):
    """Places, at degree 1 or 2, of the first two indices of every entry and of the others."""
    where = indices(dim, k)
    return _frozen(place(dim, where[:, :2])), _frozen(place(dim, where[:, 2:]))


@lru_cache(maxsize=64)
def _multiplicities(dim, k):
    """How often each packed entry stands in the full array."""
    where = indices(dim, k)
    count = np.full(len(where), factorial(k), float)
    # Divided by the factorial of every run of equal indices.
    run = np.ones(len(where))
    for r in range(1, k):
        run = np.where(where[:, r] == where[:, r - 1], run + 1.0, 1.0)
        count /= run
    return _frozen(count)


def _frozen(array):
    array.flags.writeable = False
    return array


# -- units ---------------------------------------------------------------------------------------


def empty(dim, order, weighted=False):
    """The vector of no readings."""
    zeros = np.zeros(dim)
    sums = tuple(np.zeros(size(dim, k)) for k in range(2, order + 1))
    powers = np.zeros(3) if weighted else None
    return JointVector(0.0, zeros, zeros.copy(), zeros.copy(), sums, 0.0, powers)


def in_units(vector, scale, weight_scale):
    """The same vector in other units: one scale a variable."""
    by = vector.scale - scale
    by_weight = vector.weight_scale - weight_scale
    if not np.any(by) and by_weight == 0.0:
        return vector
    dim = len(vector.mean)
    sums = tuple(
        shift(sums, by[indices(dim, k)].sum(axis=1) + by_weight)
        for k, sums in enumerate(vector.sums, start=2)
    )
    powers = vector.powers
    if powers is not None:
        powers = shift(powers, np.arange(2, 5) * by_weight)
    return JointVector(
        shift(vector.weight, by_weight),
        shift(vector.mean, by),
        shift(vector.rest, by),
        scale,
        sums,
        weight_scale,
        powers,
    )


def exponents(values):
    """The exponents of numbers; far below all others for zero, 0 for what is not finite."""
    found = np.where(np.isfinite(values), np.frexp(values)[1], 0)
    return np.where(values == 0.0, _NOTHING, found)


def spreads(vector):
    """The variances (divisor W) in units of ``2**(2 * scale)``; zeros where none are kept."""
    dim = len(vector.mean)
    if not vector.sums or not vector.weight > 0.0:
        return np.zeros(dim)
    return np.maximum(diagonal(vector.sums[0], dim, 2), 0.0) / vector.weight


def standard_units(vector):
    """The same vector in units of the standard deviations, rounded to powers of two.

    A variable without spread keeps its units.
    """
    with np.errstate(all="ignore"):
        found = exponents(np.sqrt(spreads(vector)))
        return in_units(
            vector, vector.scale + np.where(found == _NOTHING, 0, found), vector.weight_scale
        )


def _extents(vector):
    """Exponents of the larger of the means' sizes and the standard deviations, over all units."""
    found = np.maximum(exponents(vector.mean), exponents(np.sqrt(spreads(vector))))
    return np.where(found == _NOTHING, _NOTHING, vector.scale + found)


def _moderate(vector):
    """Whether means and deviations are near 1 in their units, so that no power leaves the range."""
    dim = len(vector.mean)
    if not vector.sums:
        return False
    size = np.maximum(vector.mean**2, diagonal(vector.sums[0], dim, 2) / vector.weight)
    return size.min() > 2.0 ** (-2 * _ROOM) and size.max() < 2.0 ** (2 * _ROOM)


def _common_units(a, b):
    alike = a.weight_scale == b.weight_scale and np.array_equal(a.scale, b.scale)
    if alike and _moderate(a) and _moderate(b):
        return a, b
    extent = np.maximum(_extents(a), _extents(b))
    scale = np.where(extent == _NOTHING, a.scale, extent)
    weight_scale = a.weight_scale
    if a.weight_scale != b.weight_scale:
        weight_scale = max(
            a.weight_scale + np.frexp(a.weight)[1], b.weight_scale + np.frexp(b.weight)[1]
        )
    return in_units(a, scale, weight_scale), in_units(b, scale, weight_scale)


# -- change of centre ----------------------------------------------------------------------------


def _moved(weight, sums, by, centred=True):
    """Sums about other centres, for several vectors at once.

    Parameters
    ----------
    weight : array, shape (m, 1)
    sums : sequence of arrays, shape (m, n_k)
    by : array, shape (m, d)
        Present centre minus new centre.
    centred : bool
        The present centre is the mean; otherwise the new one is.
    """
    dim = by.shape[1]
    moved: list = []
    products = None
    for k, present in enumerate(sums, start=2):
        if k == 2:
            first, last = indices(dim, 2).T
            products = by.take(first, 1) * by.take(last, 1)
            pure = products
            total = present
        else:
            first, last = _halves(dim, k)
            pure = products.take(first, 1) * (by, products)[k - 3].take(last, 1)
            # In ascending degree of the distance: (k = 4) triples, then pairs.
            total = present
            for taken, (out, left) in enumerate(_parts(dim, k), start=1):
                total = total + _contracted(
                    (by, products)[taken - 1], out, sums[k - taken - 2], left
                )
        # About the mean the first-order sums are zero; about another centre they are W times
        # minus the distance, which takes the term k times away.
        moved.append(total + (1.0 if centred else 1.0 - k) * weight * pure)
    return moved


def _contracted(a, places_a, b, places_b):
    """``sum_r a[:, places_a[r]] * b[:, places_b[r]]``."""
    if places_a.size < 1 << 17:
        return np.einsum("mrn,mrn->mn", a.take(places_a, 1), b.take(places_b, 1))
    return sum(a.take(i, 1) * b.take(j, 1) for i, j in zip(places_a, places_b, strict=True))


def combine(a, b):
    """The vector of both parts together; an empty part changes nothing.

    With delta the distance of the means and f the share of each part's weight, both parts are
    moved to the common mean and added.  The mean starts from the heavier part.
    """
    if not b.weight > 0.0:
        return a
    if not a.weight > 0.0:
        return b
    with np.errstate(all="ignore"):
        a, b = _common_units(a, b)
        # In an order of their own, so that either way round gives the same bits.
        if (b.weight, b.mean.tolist()) > (a.weight, a.mean.tolist()):
            a, b = b, a
        weight = a.weight + b.weight
        delta = (b.mean - a.mean) + (b.rest - a.rest)
        share_a, share_b = a.weight / weight, b.weight / weight
        mean, rest = two_sum(a.mean, a.rest + share_b * delta)
        both = _moved(
            np.array([[a.weight], [b.weight]]),
            [np.stack(pair) for pair in zip(a.sums, b.sums, strict=True)],
            np.stack([-share_b * delta, share_a * delta]),
        )
        sums = tuple(x[0] + x[1] for x in both)
        powers = None if a.powers is None else a.powers + b.powers
    return JointVector(weight, mean, rest, a.scale, sums, a.weight_scale, powers)


def remove(total, part):
    """What ``total`` was before ``part`` went in; no weight left gives the empty vector.

    Differences of sums: the error is relative to the sums of ``total``.  Even sums of one variable
    below zero become zero, and a variable without a positive second sum has no others.
    """
    if not part.weight > 0.0:
        return total
    with np.errstate(all="ignore"):
        total, part = _common_units(total, part)
        dim = len(total.mean)
        weight = total.weight - part.weight
        if not weight > 0.0:
            return empty(dim, len(total.sums) + 1, total.powers is not None)
        distance = (part.mean - total.mean) + (part.rest - total.rest)
        offset = -(part.weight * distance) / weight
        about_total = _moved(
            np.array([[part.weight]]), [s[None] for s in part.sums], distance[None]
        )
        left = [(a - b[0])[None] for a, b in zip(total.sums, about_total, strict=True)]
        sums = [s[0] for s in _moved(np.array([[weight]]), left, -offset[None], centred=False)]
        if sums:
            _without(sums, dim, diagonal(sums[0], dim, 2) <= 0.0)
            for k in range(4, len(sums) + 2, 2):
                where = _diagonal(dim, k)
                sums[k - 2][where] = np.maximum(sums[k - 2][where], 0.0)
        mean, rest = two_sum(total.mean, total.rest + offset)
        powers = None if total.powers is None else np.maximum(total.powers - part.powers, 0.0)
    return JointVector(weight, mean, rest, total.scale, tuple(sums), total.weight_scale, powers)


def _without(sums, dim, constant):
    """Take every sum that has a constant variable in it to zero, in place."""
    if np.any(constant):
        for k, values in enumerate(sums, start=2):
            values[constant[indices(dim, k)].any(axis=1)] = 0.0


# -- linear maps ---------------------------------------------------------------------------------


def subset(vector, chosen):
    """The vector of some of the variables, in the order given; no arithmetic."""
    chosen = np.asarray(chosen, np.intp)
    dim = len(vector.mean)
    sums = tuple(
        values[place(dim, chosen[indices(len(chosen), k)])]
        for k, values in enumerate(vector.sums, start=2)
    )
    return vector._replace(
        mean=vector.mean[chosen], rest=vector.rest[chosen], scale=vector.scale[chosen], sums=sums
    )


def _mapped_mean(vector, fraction, exponent, offset):
    """Units, coefficients and mean of ``matrix @ x + offset``, for ``vector`` in standard units.

    The mean is summed with what every product and sum leaves, so that a spread far below the level
    of the readings keeps its digits.
    """
    own, own_exponent = np.frexp(vector.mean)
    exponent = np.where(fraction == 0.0, _NOTHING, exponent + vector.scale)
    spread = np.where((fraction != 0.0) & (spreads(vector) > 0.0), exponent, _NOTHING)
    level = np.where((fraction != 0.0) & (own != 0.0), exponent + own_exponent, _NOTHING)
    scale = spread.max(axis=1, initial=_NOTHING)
    top = np.maximum(level.max(axis=1, initial=_NOTHING), exponents(offset))
    scale = np.where(scale < _NOTHING / 2, np.where(top < _NOTHING / 2, 0, top), scale)
    # Units of the spread, as long as the mean has room in them.
    scale = np.maximum(scale, top - 1000) + 0.0
    by = exponent - scale[:, None]
    own_rest = shift(vector.rest, -own_exponent)
    product, error = _two_product(fraction, own)
    product = shift(product, by + own_exponent)
    error = shift(error + fraction * own_rest, by + own_exponent)
    mean, rest = np.zeros(len(scale)), np.zeros(len(scale))
    for term, left in zip(product.T, error.T, strict=True):
        mean, lost = two_sum(mean, term)
        rest = rest + (lost + left)
    mean, lost = two_sum(mean, shift(offset, -scale))
    mean, rest = two_sum(mean, lost + rest)
    # Adding zero: no negative zeros.
    return scale, shift(fraction, by), mean + 0.0, rest + 0.0


def affine(vector, matrix, offset):
    """The vector of ``matrix @ x + offset``.

    A new variable whose variance is rounding alone, where the terms have cancelled, is constant.

    Parameters
    ----------
    vector : JointVector
    matrix : array, shape (new dim, dim)
    offset : array, shape (new dim,)
    """
    matrix = np.asarray(matrix, float)
    offset = np.broadcast_to(np.asarray(offset, float), len(matrix))
    if not vector.weight > 0.0:
        return empty(len(matrix), len(vector.sums) + 1, vector.powers is not None)
    with np.errstate(all="ignore"):
        vector = standard_units(vector)
        dim = len(vector.mean)
        fraction, exponent = np.frexp(matrix)
        scale, factor, mean, rest = _mapped_mean(vector, fraction, exponent, offset)
        sums = []
        for k, values in enumerate(vector.sums, start=2):
            whole = full(values, dim, k)
            for _ in range(k):
                whole = np.tensordot(whole, factor, axes=(0, 1))
            sums.append(packed(whole))
        if sums:
            sizes = np.abs(factor)
            terms = np.einsum("ij,jk,ik->i", sizes, np.abs(full(vector.sums[0], dim, 2)), sizes)
            variances = diagonal(sums[0], len(matrix), 2)
            _without(sums, len(matrix), variances <= _CANCELLED * terms)
            for k in range(4, len(sums) + 2, 2):
                where = _diagonal(len(matrix), k)
                sums[k - 2][where] = np.maximum(sums[k - 2][where], 0.0)
        sums = tuple(values + 0.0 for values in sums)
    return vector._replace(mean=mean, rest=rest, scale=scale, sums=sums)


def project(vector, direction):
    """The moment vector of the combination ``direction @ x``.

    ``M_p = sum over multisets a of p! / prod(a!) * v**a * C_a``.  Where the terms have cancelled to
    rounding alone nothing is left: no spread, or no third moment, and then the least fourth moment
    that can be.

    Parameters
    ----------
    vector : JointVector
    direction : array, shape (dim,)

    Returns
    -------
    MomentVector
        Of one combination: scalars, ``sums`` of shape (p - 1,).
    """
    with np.errstate(all="ignore"):
        vector = standard_units(vector)
        dim = len(vector.mean)
        fraction, exponent = np.frexp(np.asarray(direction, float)[None])
        scale, factor, mean, rest = _mapped_mean(vector, fraction, exponent, np.zeros(1))
        sums, terms = np.zeros(len(vector.sums)), np.zeros(len(vector.sums))
        for k, values in enumerate(vector.sums, start=2):
            parts = _multiplicities(dim, k) * factor[0][indices(dim, k)].prod(axis=1) * values
            sums[k - 2], terms[k - 2] = parts.sum(), np.abs(parts).sum()
        _settle_cancelled(sums, _CANCELLED * terms, vector.weight)
    return MomentVector(
        vector.weight, mean[0], rest[0], scale[0], sums, vector.weight_scale, vector.powers
    )


def _settle_cancelled(sums, rounding, weight):
    """Take what is rounding alone out of the sums of a combination, in place."""
    if not len(sums):
        return
    if sums[0] <= rounding[0]:
        sums[:] = 0.0
        return
    if len(sums) > 1 and abs(sums[1]) <= rounding[1]:
        sums[1] = 0.0
    if len(sums) > 2:
        # Pearson's inequality: kurtosis is at least skewness squared and one.
        sums[2] = np.maximum(sums[2], sums[0] * (sums[0] / weight) + sums[1] * (sums[1] / sums[0]))


def marginal(vector, which):
    """The moment vector of one variable; no arithmetic."""
    dim = len(vector.mean)
    sums = [s[_diagonal(dim, k)[which]] for k, s in enumerate(vector.sums, start=2)]
    return MomentVector(
        vector.weight,
        vector.mean[which],
        vector.rest[which],
        vector.scale[which],
        np.array(sums, float),
        vector.weight_scale,
        vector.powers,
    )
