"""The statistics every accumulator and every summary has, read off one moment vector.

Conventions follow NumPy and SciPy: population statistics by default, ``ddof`` and ``bias`` for the
rest.  Undefined is ``nan``; beyond the range of doubles ``inf`` with its sign, below it 0.0.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np

from ..algebra import cumulants as _cumulants
from ..algebra.central import MomentVector, in_units, moved, shift
from ..errors import OrderError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Value = float | NDArray[np.float64]


class View(NamedTuple):
    """What the statistics are read from."""

    order: int
    shape: tuple
    weights: Any  # None, "frequency" or "reliability"
    readings: Any  # number of readings; None where it is not known
    vector: MomentVector
    minimum: Any
    maximum: Any


def checked_degree(k, least=0, name="k"):
    """The order of a moment asked for, as an int."""
    try:
        degree = k.__index__()
    except AttributeError:
        raise TypeError(f"{name} must be an integer, got {k!r}") from None
    if degree < least:
        raise ValueError(f"{name} must be at least {least}, got {degree}")
    return degree


def checked_ddof(ddof):
    """``ddof`` as a Python number."""
    if isinstance(ddof, (int, np.integer, np.bool_)):
        return int(ddof)
    try:
        if isinstance(ddof, (str, bytes)) or np.ndim(ddof):
            raise TypeError
        return float(ddof)
    except TypeError:
        raise TypeError(f"ddof must be a number, got {ddof!r}") from None


def central_moments(view, degree):
    """Central moments of order 0 .. degree in units of ``2**(k * scale)``; nan when empty."""
    weight = np.where(view.vector.weight > 0.0, view.vector.weight, np.nan)
    ones = weight / weight
    return [ones, 0.0 * ones, *(view.vector.sums[: max(degree - 1, 0)] / weight)]


def _variance_divided(view, ddof):
    """The variance in units of ``2**(2 * scale)``."""
    ddof = checked_ddof(ddof)
    v = view.vector
    loss = ddof
    if ddof != 0:
        _need_readings(view, f"ddof={ddof!r}")
    if view.weights == "reliability":
        loss = ddof * v.powers[0] / np.where(v.weight > 0.0, v.weight, np.nan)
        # One reading alone: W - V2 / W is zero, and rounds to something else.
        loss = np.where((view.readings < 2) & (ddof > 0), np.inf, loss)
    divisor = v.weight - loss
    # A divisor that is rounding alone says nothing.
    return v.sums[0] / np.where(divisor > _ROUNDING * v.weight, divisor, np.nan)


def _weight_ratios(view):
    """``v[j]``: the sum of w**j over W**j, for j = 2 .. 4; free of the weights' scale."""
    v = view.vector
    square = v.weight * v.weight
    below = (square, square * v.weight, square * square)
    return [None, None, *(power / w for power, w in zip(v.powers, below, strict=True))]


def _k_statistic_in_units(view, k):
    _need_readings(view, "an unbiased estimate")
    moments = central_moments(view, k)
    if view.weights == "reliability":
        value = _cumulants.weighted_k_statistic(k, _weight_ratios(view), moments)
        return np.where(view.readings >= k, value, np.nan)
    n = view.vector.weight
    value = _cumulants.k_statistic(k, n, moments)
    return np.where(n >= k, value, np.nan)


_NOTHING = 10_000.0
_ROUNDING = 2.0**-49


def _size(values):
    """The exponents of values; far below all others for zero."""
    values = np.abs(np.asarray(values, float))
    return np.where(values > 0.0, np.frexp(values)[1], -_NOTHING)


def _half_power(variance, k):
    """``variance ** (k / 2)``, by a square root that keeps powers of two exact."""
    # Multiplied out: a library's power is not rounded alike at every scale.
    power = np.ones_like(variance)
    for _ in range(k // 2):
        power = power * variance
    return power * np.sqrt(variance) if k % 2 else power


class Statistics:
    """Everything that is read off a moment vector; a base for classes with ``_view()``.

    Scalars are Python floats; channels give arrays of the accumulator's ``shape``.  Reading never
    changes a state.  Each call costs some microseconds, whatever has been fed.
    """

    __slots__ = ()
    _highest_order = 16

    def _view(self) -> View:
        raise TypeError("a class with statistics must say what they are read from")

    def _read(self, value, view):
        if view.shape == ():
            return float(value)
        return np.array(np.broadcast_to(value, view.shape), dtype=np.float64)

    def _need(self, order, name):
        view = self._view()
        if view.order < order:
            highest = self._highest_order
            cure = f"make it with order={order} or higher"
            if order > highest:
                cure = f"the highest is {highest}"
            kept = f"{type(self).__name__} keeps order={view.order}"
            raise OrderError(f"{name} needs order={order}, {kept}; {cure}")
        return view

    # -- level and spread --------------------------------------------------------------------

    def mean(self) -> Value:
        """The arithmetic mean, weighted where there are weights; nan when empty.

        Returns
        -------
        float or ndarray of ``shape``

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.Moments().update([1.0, 2.0, 3.0, 10.0]).mean()
        4.0
        """
        view = self._need(1, "mean()")
        v = view.vector
        with np.errstate(all="ignore"):
            value = np.where(v.weight > 0.0, shift(v.mean + v.rest, v.scale), np.nan)
            return self._read(value, view)

    def variance(self, ddof: float = 0) -> Value:
        """The mean squared deviation from the mean.

        Parameters
        ----------
        ddof : float, default 0
            The divisor is ``W - ddof``, for reliability weights ``W - ddof * V2 / W``; with
            ``ddof=1`` the estimate is unbiased.

        Returns
        -------
        float or ndarray of ``shape``
            nan when empty or where the divisor is not positive; never below zero.

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.Moments().update([1.0, 2.0, 3.0, 10.0]).variance()
        12.5
        """
        view = self._need(2, "variance()")
        with np.errstate(all="ignore"):
            return self._read(shift(_variance_divided(view, ddof), 2 * view.vector.scale), view)

    def std(self, ddof: float = 0) -> Value:
        """The standard deviation: the square root of ``variance(ddof)``.

        It may be finite where the variance is beyond the range of doubles.

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.Moments().update([1e200, 3e200]).std()
        1e+200
        """
        view = self._need(2, "std()")
        with np.errstate(all="ignore"):
            return self._read(
                shift(np.sqrt(_variance_divided(view, ddof)), view.vector.scale), view
            )

    # -- shape -------------------------------------------------------------------------------

    def skewness(self, bias: bool = True) -> Value:
        """The third standardized moment, m3 / m2**1.5.

        Parameters
        ----------
        bias : bool, default True
            False: the adjusted G1 = k3 / k2**1.5 from the unbiased k2 and k3 (Joanes & Gill 1998,
            "Comparing measures of sample skewness and kurtosis"; for reliability weights Rimoldini
            2014).

        Returns
        -------
        float or ndarray of ``shape``
            nan without spread, and for ``bias=False`` with fewer than three readings.

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.Moments().update([1.0, 2.0, 3.0, 10.0]).skewness()
        1.0182337649086284
        """
        view = self._need(3, "skewness()")
        with np.errstate(all="ignore"):
            if bias:
                _, _, second, third = central_moments(view, 3)
            else:
                second = _k_statistic_in_units(view, 2)
                third = _k_statistic_in_units(view, 3)
            return self._read(_defined_ratio(third, _half_power(second, 3), second), view)

    def kurtosis(self, excess: bool = True, bias: bool = True) -> Value:
        """The fourth standardized moment, m4 / m2**2, less 3.

        Parameters
        ----------
        excess : bool, default True
            Subtract 3, the kurtosis of the normal law.
        bias : bool, default True
            False: G2 = k4 / k2**2 from the unbiased k2 and k4 (Joanes & Gill 1998; for reliability
            weights Rimoldini 2014).

        Returns
        -------
        float or ndarray of ``shape``
            nan without spread, and for ``bias=False`` with fewer than four readings.

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.Moments().update([1.0, 2.0, 3.0, 10.0]).kurtosis()
        -0.7696000000000001
        """
        view = self._need(4, "kurtosis()")
        with np.errstate(all="ignore"):
            if bias:
                _, _, second, _, fourth = central_moments(view, 4)
                shifted = 3.0
            else:
                second = _k_statistic_in_units(view, 2)
                fourth = _k_statistic_in_units(view, 4)
                shifted = 0.0
            value = _defined_ratio(fourth, second * second, second)
            return self._read(value - shifted + (0.0 if excess else 3.0), view)

    # -- moments -----------------------------------------------------------------------------

    def central(self, k: int) -> Value:
        """The k-th central moment, M_k / W.

        Parameters
        ----------
        k : int
            0 to the order kept.

        Returns
        -------
        float or ndarray of ``shape``
            nan when empty.

        Raises
        ------
        OrderError
            ``k`` is above the order kept.

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.Moments().update([1.0, 2.0, 3.0, 10.0]).central(3)
        45.0
        """
        k = checked_degree(k)
        view = self._need(k, f"central({k})")
        with np.errstate(all="ignore"):
            return self._read(shift(central_moments(view, k)[k], k * view.vector.scale), view)

    def raw(self, k: int, about: float = 0.0) -> Value:
        """The k-th moment about a point: the mean of ``(x - about)**k``.

        Parameters
        ----------
        k : int
            0 to the order kept.
        about : float, default 0.0

        Returns
        -------
        float or ndarray of ``shape``
            nan when empty.

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.Moments().update([1.0, 2.0, 3.0, 10.0]).raw(2)
        28.5
        """
        k = checked_degree(k)
        view = self._need(max(k, 1), f"raw({k})")
        with np.errstate(all="ignore"):
            value, scale = self._about(view, k, about)
            return self._read(shift(value, k * scale), view)

    @staticmethod
    def _about(view, k, about):
        """The k-th moment about a point, and the scale s it is in units of ``2**(k * s)`` of."""
        v = view.vector
        # Units in which neither the point nor the readings overflow, and none of them vanishes.
        sizes = [_size(v.mean) + v.scale, _size(about)]
        if len(v.sums):
            sizes.append(_size(np.sqrt(v.sums[0] / v.weight)) + v.scale)
        scale = np.maximum.reduce(np.broadcast_arrays(*sizes))
        scale = np.where(scale < -_NOTHING / 2, 0.0, scale)
        units = view._replace(vector=in_units(v, scale, v.weight_scale))
        moments = central_moments(units, k)
        distance = (units.vector.mean - shift(about, -scale)) + units.vector.rest
        return moved(moments[: k + 1], distance)[k], scale

    def standardized(self, k: int) -> Value:
        """The k-th central moment in units of the standard deviation, m_k / m2**(k / 2).

        Returns
        -------
        float or ndarray of ``shape``
            nan without spread.

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.Moments().update([1.0, 2.0, 3.0, 10.0]).standardized(4)
        2.2304
        """
        k = checked_degree(k)
        view = self._need(max(k, 2), f"standardized({k})")
        with np.errstate(all="ignore"):
            moments = central_moments(view, max(k, 2))
            return self._read(
                _defined_ratio(moments[k], _half_power(moments[2], k), moments[2]), view
            )

    def cumulant(self, k: int) -> Value:
        """The k-th cumulant of the readings as they are (divisor W).

        Parameters
        ----------
        k : int
            1 to the order kept.

        Returns
        -------
        float or ndarray of ``shape``
            nan when empty.

        Notes
        -----
        From central moments by recursion (Smith 1995, "A recursive formulation of the old problem
        of obtaining moments from cumulants and vice versa").

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.Moments().update([1.0, 2.0, 3.0, 10.0]).cumulant(4)
        -120.25
        """
        k = checked_degree(k, least=1)
        view = self._need(k, f"cumulant({k})")
        if k == 1:
            return self.mean()
        with np.errstate(all="ignore"):
            value = _cumulants.cumulants_from_central(central_moments(view, k)[2:])[k - 2]
            return self._read(shift(value, k * view.vector.scale), view)

    def k_statistic(self, k: int) -> Value:
        """Fisher's k-statistic: the unbiased estimate of the k-th cumulant.

        Parameters
        ----------
        k : int
            1 to 6; for reliability weights 1 to 4.

        Returns
        -------
        float or ndarray of ``shape``
            nan with fewer than ``k`` readings.

        Notes
        -----
        Fisher (1928); Kenney & Keeping (1951).  Reliability weights: Rimoldini (2014).

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.Moments().update([1.0, 2.0, 3.0, 10.0]).k_statistic(3)
        120.0
        """
        k = checked_degree(k, least=1)
        highest = 4 if self._view().weights == "reliability" else 6
        if k > highest:
            raise ValueError(f"k must be at most {highest} for these readings, got {k}")
        view = self._need(k, f"k_statistic({k})")
        if k == 1:
            return self.mean()
        with np.errstate(all="ignore"):
            return self._read(shift(_k_statistic_in_units(view, k), k * view.vector.scale), view)

    # -- extremes ----------------------------------------------------------------------------

    def minimum(self) -> Value:
        """The least reading; nan when empty or unknown (after ``remove``)."""
        view = self._view()
        return self._read(view.minimum, view)

    def maximum(self) -> Value:
        """The greatest reading; nan when empty or unknown (after ``remove``)."""
        view = self._view()
        return self._read(view.maximum, view)

    # -- the signal engineer's words ---------------------------------------------------------

    def dc(self) -> Value:
        """The mean, as the constant part of a signal."""
        return self.mean()

    def rms(self) -> Value:
        """The root mean square of the whole signal, constant part included: ``sqrt(raw(2))``."""
        view = self._need(2, "rms()")
        with np.errstate(all="ignore"):
            value, scale = self._about(view, 2, 0.0)
            return self._read(shift(np.sqrt(value), scale), view)

    def ac_rms(self) -> Value:
        """The root mean square of the alternating part: ``std()``."""
        return self.std()

    def power(self) -> Value:
        """The mean square of the whole signal: ``raw(2)``."""
        return self.raw(2)

    def crest_factor(self) -> Value:
        """The alternating part's peak over its root mean square.

        ``max(maximum - mean, mean - minimum) / ac_rms()``; nan without spread.

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.Moments().update([-1.0, 1.0, -1.0, 1.0]).crest_factor()
        1.0
        """
        view = self._need(2, "crest_factor()")
        v = view.vector
        with np.errstate(all="ignore"):
            variance = _variance_divided(view, 0)
            above = (shift(view.maximum, -v.scale) - v.mean) - v.rest
            below = (v.mean - shift(view.minimum, -v.scale)) + v.rest
            peak = np.maximum(above, below)
            return self._read(_defined_ratio(peak, np.sqrt(variance), variance), view)


def _defined_ratio(above, below, variance):
    return above / np.where(variance > 0.0, below, np.nan)


def _need_readings(view, what):
    if view.readings is None:
        raise ValueError(f"{what} needs the number of readings; make the Summary with count=")
