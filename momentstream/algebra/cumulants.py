"""Raw moments, central moments and cumulants into one another.

Recursions: Smith (1995), "A recursive formulation of the old problem of obtaining moments from
cumulants and vice versa", The American Statistician (from memory).  k-statistics: Fisher (1928);
Kenney & Keeping (1951).  Reliability weights: Rimoldini (2014), Astronomy and Computing
(re-derived).
"""

from math import comb, prod

import numpy as np

from .central import moved


def central_from_raw(raw):
    """Central moments of order 0 .. p from raw moments of order 1 .. p."""
    return moved([1.0, *raw], -raw[0])


def raw_from_central(mean, central):
    """Raw moments of order 0 .. p from the mean and central moments of order 2 .. p."""
    return moved([1.0, 0.0 * mean, *central], mean)


def cumulants_from_central(central):
    """Cumulants of order 2 .. p from central moments of order 2 .. p, as lists."""
    moments = [1.0, 0.0, *central]
    cumulants = [0.0, 0.0]
    for n in range(2, len(moments)):
        lower = sum(comb(n - 1, j - 1) * cumulants[j] * moments[n - j] for j in range(2, n - 1))
        cumulants.append(moments[n] - lower)
    return cumulants[2:]


def central_from_cumulants(cumulants):
    """Central moments of order 2 .. p from cumulants of order 2 .. p, as lists."""
    moments = [1.0, 0.0]
    kept = [0.0, 0.0, *cumulants]
    for n in range(2, len(kept)):
        lower = sum(comb(n - 1, j - 1) * kept[j] * moments[n - j] for j in range(2, n - 1))
        moments.append(kept[n] + lower)
    return moments[2:]


def k_statistic(k, n, m):
    """The unbiased estimate of the k-th cumulant, k = 2 .. 6, from n readings.

    ``m`` holds central moments (divisor n) by their order.  Meaningless for n < k.
    """
    below = prod(n - j for j in range(1, k))
    if k == 2:
        return n * m[2] / below
    if k == 3:
        return n * n * m[3] / below
    if k == 4:
        return n * n * ((n + 1) * m[4] - 3 * (n - 1) * m[2] * m[2]) / below
    if k == 5:
        return n * n * n * ((n + 5) * m[5] - 10 * (n - 1) * m[2] * m[3]) / below
    return (
        n
        * n
        * (
            (n + 1) * (n * n + 15 * n - 4) * m[6]
            - 15 * (n - 1) ** 2 * (n + 4) * m[2] * m[4]
            - 10 * (n - 1) * (n * n - n + 4) * m[3] * m[3]
            + 30 * n * (n - 1) * (n - 2) * m[2] * m[2] * m[2]
        )
        / below
    )


def weighted_k_statistic(k, v, m):
    """The unbiased estimate of the k-th cumulant, k = 2 .. 4, for reliability weights.

    ``v[j]`` is the sum of w**j over the j-th power of the sum of w, for j = 2 .. 4.
    """
    square = v[2] * v[2]
    if k == 2:
        return m[2] / _beyond_rounding(1 - v[2])
    if k == 3:
        return m[3] / _beyond_rounding(1 - 3 * v[2] + 2 * v[3])
    below = _beyond_rounding(1 - v[2]) * _beyond_rounding(
        1 - 6 * v[2] + 8 * v[3] + 3 * square - 6 * v[4]
    )
    return (
        (1 - 4 * v[3] + 3 * square) * m[4]
        - 3 * (1 - 2 * v[2] + 4 * v[3] - 3 * square) * (m[2] * m[2])
    ) / below


def _beyond_rounding(divisor):
    """A divisor that cancels down from terms of size 1; nan where only their rounding is left."""
    return np.where(divisor > 2.0**-47, divisor, np.nan)
