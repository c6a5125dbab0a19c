"""Statistics read off exact integer power sums: each rounded once, to the nearest double."""

from __future__ import annotations

from fractions import Fraction
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from ..algebra.central import MomentVector
from ..algebra.integers import deviations, nearest, nearest_root, sums_about
from .readout import Statistics, View, checked_ddof, checked_degree

if TYPE_CHECKING:
    from typing import Any


class Integers(NamedTuple):
    """Finite readings ``integer * 2**exponent``: their number and the integers' power sums."""

    readings: int
    exponent: int
    sums: list[int]

    @property
    def deviations(self) -> list[int]:
        """D_1 .. D_p (``algebra.integers``)."""
        return deviations(self.readings, self.sums)


class ExactStatistics(Statistics):
    """A base for classes with ``_integers()`` beside ``_view()``.

    ``_integers()`` is None where there are no readings, or where some are not finite: then the
    view says all there is to say.
    """

    __slots__ = ()

    def _integers(self) -> Integers | None:
        raise TypeError("a class with exact statistics must say what they are read from")

    def _whole(self, order, name):
        """The integers and their D_k, or None; an OrderError above the order kept."""
        self._need(order, name)
        found = self._integers()
        return None if found is None else (found, [0, *found.deviations])

    def mean(self) -> float:
        """The arithmetic mean, correctly rounded; nan when empty."""
        found = self._integers()
        if found is None:
            return float(super().mean())
        return nearest(found.sums[0], found.readings, found.exponent)

    def variance(self, ddof: float = 0) -> float:
        """The mean squared deviation from the mean, correctly rounded.

        Parameters
        ----------
        ddof : float, default 0
            The divisor is ``count - ddof``.

        Returns
        -------
        float
            nan when empty or where the divisor is not positive.
        """
        ratio = self._variance_ratio(ddof, "variance()")
        if ratio is None:
            return float(super().variance(ddof))
        above, below, exponent = ratio
        return nearest(above, below, 2 * exponent)

    def std(self, ddof: float = 0) -> float:
        """The square root of ``variance(ddof)``, correctly rounded on its own."""
        ratio = self._variance_ratio(ddof, "std()")
        if ratio is None:
            return float(super().std(ddof))
        return nearest_root(*ratio)

    def _variance_ratio(self, ddof, name):
        ddof = checked_ddof(ddof)
        whole = self._whole(2, name)
        if whole is None or not np.isfinite(float(ddof)):
            return None
        found, d = whole
        divisor = found.readings * (found.readings - Fraction(ddof))
        if divisor <= 0:
            return None
        return d[2] * divisor.denominator, divisor.numerator, found.exponent

    def skewness(self, bias: bool = True) -> float:
        """The third standardized moment, correctly rounded.

        Parameters
        ----------
        bias : bool, default True
            False: the adjusted G1 = k3 / k2**1.5 (Joanes & Gill 1998).

        Returns
        -------
        float
            nan without spread, and for ``bias=False`` with fewer than three readings.
        """
        whole = self._whole(3, "skewness()")
        if whole is None:
            return float(super().skewness(bias))
        found, (_, _, d2, d3, *_) = whole
        n = found.readings
        if d2 == 0 or (not bias and n < 3):
            return float("nan")
        above, below = d3 * d3, d2**3
        if not bias:
            above, below = above * n * (n - 1), below * (n - 2) ** 2
        return nearest_root(above, below, sign=-1 if d3 < 0 else 1)

    def kurtosis(self, excess: bool = True, bias: bool = True) -> float:
        """The fourth standardized moment, less 3, correctly rounded.

        Parameters
        ----------
        excess : bool, default True
            Subtract 3, the kurtosis of the normal law.
        bias : bool, default True
            False: G2 = k4 / k2**2 (Joanes & Gill 1998).

        Returns
        -------
        float
            nan without spread, and for ``bias=False`` with fewer than four readings.
        """
        whole = self._whole(4, "kurtosis()")
        if whole is None:
            return float(super().kurtosis(excess, bias))
        found, (_, _, d2, _, d4) = whole
        n = found.readings
        if d2 == 0 or (not bias and n < 4):
            return float("nan")
        above, below = d4 - 3 * d2 * d2, d2 * d2
        if not bias:
            above = ((n + 1) * above + 6 * below) * (n - 1)
            below *= (n - 2) * (n - 3)
        return nearest(above if excess else above + 3 * below, below)

    def central(self, k: int) -> float:
        """The k-th central moment, correctly rounded; nan when empty.

        Parameters
        ----------
        k : int
            0 to the order kept.
        """
        k = checked_degree(k)
        whole = self._whole(k, f"central({k})")
        if whole is None or k < 2:
            return float(super().central(k))
        found, d = whole
        return nearest(d[k], found.readings**k, k * found.exponent)

    def raw(self, k: int, about: float = 0.0) -> float:
        """The mean of ``(x - about)**k``, correctly rounded; nan when empty.

        Parameters
        ----------
        k : int
            0 to the order kept.
        about : float, default 0.0
        """
        k = checked_degree(k)
        whole = self._whole(max(k, 1), f"raw({k})")
        about = float(about)
        if whole is None or k == 0 or not np.isfinite(about):
            return float(super().raw(k, about))
        found, _ = whole
        point = Fraction(about)
        exponent = min(found.exponent, 1 - point.denominator.bit_length())
        by = found.exponent - exponent
        sums = [value << (j * by) for j, value in enumerate(found.sums[:k], start=1)]
        whole_point = int(point * Fraction(2) ** -exponent)
        total = sums_about(found.readings, sums, whole_point)[k - 1]
        return nearest(total, found.readings, k * exponent)

    def standardized(self, k: int) -> float:
        """The k-th central moment in units of the standard deviation, correctly rounded.

        nan without spread.
        """
        k = checked_degree(k)
        whole = self._whole(max(k, 2), f"standardized({k})")
        if whole is None or k < 3:
            return float(super().standardized(k))
        _, d = whole
        if d[2] == 0:
            return float("nan")
        if k % 2:
            return nearest_root(d[k] ** 2, d[2] ** k, sign=-1 if d[k] < 0 else 1)
        return nearest(d[k], d[2] ** (k // 2))

    def cumulant(self, k: int) -> float:
        """The k-th cumulant of the readings as they are, correctly rounded; nan when empty."""
        k = checked_degree(k, least=1)
        whole = self._whole(k, f"cumulant({k})")
        if whole is None or k == 1:
            return float(super().cumulant(k))
        found, d = whole
        above = d[4] - 3 * d[2] ** 2 if k == 4 else d[k]
        return nearest(above, found.readings**k, k * found.exponent)

    def k_statistic(self, k: int) -> float:
        """Fisher's k-statistic, correctly rounded: the unbiased estimate of the k-th cumulant.

        nan with fewer than ``k`` readings.
        """
        k = checked_degree(k, least=1)
        whole = self._whole(k, f"k_statistic({k})") if k <= 4 else None
        if whole is None or k == 1 or whole[0].readings < k:
            return float(super().k_statistic(k))
        found, d = whole
        n = found.readings
        if k == 2:
            above, below = d[2], n * (n - 1)
        elif k == 3:
            above, below = d[3], n * (n - 1) * (n - 2)
        else:
            above = (n + 1) * d[4] - 3 * (n - 1) * d[2] ** 2
            below = n * n * (n - 1) * (n - 2) * (n - 3)
        return nearest(above, below, k * found.exponent)

    def rms(self) -> float:
        """The root mean square of the whole signal, correctly rounded; nan when empty."""
        whole = self._whole(2, "rms()")
        if whole is None:
            return float(super().rms())
        found, _ = whole
        return nearest_root(found.sums[1], found.readings, found.exponent)


def exact_view(found: Integers, order: int, minimum: float, maximum: float) -> View:
    """The integers as a moment vector: what statistics that are not exact, and summaries, read."""
    n, exponent, sums = found
    if n == 0:
        nothing = MomentVector(np.float64(0.0), np.float64(0.0), np.float64(0.0), 0.0,
                               np.zeros(order - 1))  # fmt: skip
        return View(order, (), None, 0, nothing, minimum, maximum)
    d = [0, *found.deviations]
    mean = nearest(sums[0], n, exponent)
    scale = 0
    if order >= 2 and d[2]:
        # Units near the standard deviation, as long as the mean has room in them.
        scale = (d[2].bit_length() - (n * n).bit_length()) // 2 + exponent
        scale = max(scale, int(np.frexp(mean)[1]) - 1000)
        if abs(scale) < 100:
            scale = 0
    units = exponent - scale
    mean = nearest(sums[0], n, units)
    left = Fraction(sums[0], n) * Fraction(2) ** units - Fraction(mean)
    rest = nearest(left.numerator, left.denominator)
    powers: Any = [nearest(d[k], n ** (k - 1), k * units) for k in range(2, order + 1)]
    vector = MomentVector(np.float64(n), np.float64(mean), np.float64(rest), float(scale),
                          np.array(powers))  # fmt: skip
    return View(order, (), None, n, vector, minimum, maximum)
