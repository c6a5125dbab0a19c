"""The statistics of several variables together, read off one joint moment vector."""

from __future__ import annotations

from math import nan
from typing import TYPE_CHECKING

import numpy as np

from ..algebra import joint as algebra
from ..algebra.central import shift
from ..errors import OrderError
from . import joint_view as _of
from .joint_view import JointView, Mardia, Regression, place_of, places_of
from .readout import View, checked_degree
from .summary import Summary

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

    Which = int | str

_HIGHEST_ORDER = 4


class JointStatistics:
    """Everything that is read off a joint moment vector; a base for classes with ``_joint()``.

    Reading never changes a state; results are fresh arrays.
    """

    __slots__ = ()

    def _joint(self) -> JointView:
        raise TypeError("a class with joint statistics must say what they are read from")

    def _need(self, order, name):
        view = self._joint()
        if view.order < order:
            cure = f"make it with order={order} or higher"
            if order > _HIGHEST_ORDER:
                cure = f"the highest is {_HIGHEST_ORDER}"
            kept = f"{type(self).__name__} keeps order={view.order}"
            raise OrderError(f"{name} needs order={order}, {kept}; {cure}")
        return view

    # -- how much has been read --------------------------------------------------------------

    @property
    def count(self) -> int:
        """Number of rows taken in; for frequencies the sum of the weights."""
        return self._joint().readings

    @property
    def omitted(self) -> int:
        """Number of rows left out because an entry was missing."""
        return self._joint().omitted

    @property
    def weight(self) -> float:
        """The sum of the weights (without weights: the count)."""
        v = self._joint().vector
        with np.errstate(all="ignore"):
            return float(shift(v.weight, v.weight_scale))

    @property
    def effective_count(self) -> float:
        """How many rows of equal weight would tell as much (Kish): W**2 / V2 for reliability
        weights, else the weight; 0 when empty."""
        with np.errstate(all="ignore"):
            return _of.effective(self._joint())

    # -- level and spread --------------------------------------------------------------------

    def mean(self) -> NDArray[np.float64]:
        """The mean of every variable.

        Returns
        -------
        ndarray, shape (dim,)
            In the units of the readings; nan when empty.

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.JointMoments(2).update([[1.0, 2.0], [3.0, 6.0]]).mean()
        array([2., 4.])
        """
        v = self._joint().vector
        with np.errstate(all="ignore"):
            empty = 0.0 if v.weight > 0.0 else nan
            return shift(v.mean + v.rest, v.scale) + empty

    def covariance(self, ddof: float = 0) -> NDArray[np.float64]:
        """The covariance matrix.

        Parameters
        ----------
        ddof : float, default 0
            The divisor is ``W - ddof``, for reliability weights ``W - ddof * V2 / W``; with
            ``ddof=1`` the estimate is unbiased.

        Returns
        -------
        ndarray, shape (dim, dim)
            Exactly symmetric, in products of the readings' units.  nan when empty or where the
            divisor is not positive; beyond the range of doubles inf with its sign, below it 0.

        Raises
        ------
        OrderError
            Only means are kept.

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.JointMoments(2).update([[1.0, 2.0], [3.0, 6.0]]).covariance()
        array([[1., 2.],
               [2., 4.]])
        """
        view = self._need(2, "covariance()")
        v = view.vector
        with np.errstate(all="ignore"):
            by = v.scale[algebra.indices(view.dim, 2)].sum(axis=1)
            values = shift(v.sums[0] / _of.divisor(view, ddof), by)
            return algebra.full(values, view.dim, 2)

    def correlation(self) -> NDArray[np.float64]:
        """Pearson's correlation matrix.

        Returns
        -------
        ndarray, shape (dim, dim)
            Exactly symmetric, within -1 .. 1, with ones on the diagonal; the rows and columns of
            a variable without spread are nan, all are when empty.

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.JointMoments(2).update([[1.0, 2.0], [3.0, 6.0]]).correlation()
        array([[1., 1.],
               [1., 1.]])
        """
        view = self._need(2, "correlation()")
        with np.errstate(all="ignore"):
            return _of.correlation(algebra.standard_units(view.vector))[0]

    # -- shape -------------------------------------------------------------------------------

    def coskewness(self) -> NDArray[np.float64]:
        """The standardized mixed third moments, E[z_i z_j z_k] with z = (x - mean) / std.

        Returns
        -------
        ndarray, shape (dim, dim, dim)
            Exactly symmetric; its diagonal holds the skewnesses.  nan wherever a variable without
            spread takes part, and when empty.

        Examples
        --------
        >>> import momentstream as ms
        >>> rows = [[0.0, 0.0], [0.0, 1.0], [0.0, 2.0], [4.0, 1.0]]
        >>> ms.JointMoments(2, order=3).update(rows).coskewness()[0, 0, 0].round(6)
        np.float64(1.154701)
        """
        view = self._need(3, "coskewness()")
        with np.errstate(all="ignore"):
            values = _of.standardized(algebra.standard_units(view.vector), 3)
            return algebra.full(values, view.dim, 3)

    def cokurtosis(self) -> NDArray[np.float64]:
        """The standardized mixed fourth moments, E[z_i z_j z_k z_l] with z = (x - mean) / std.

        Returns
        -------
        ndarray, shape (dim, dim, dim, dim)
            Exactly symmetric; its diagonal holds the kurtoses, 3 for a normal law (3 is not taken
            away).  nan wherever a variable without spread takes part, and when empty.

        Examples
        --------
        >>> import momentstream as ms
        >>> rows = [[0.0, 0.0], [0.0, 1.0], [0.0, 2.0], [4.0, 1.0]]
        >>> ms.JointMoments(2, order=4).update(rows).cokurtosis()[1, 1, 1, 1]
        np.float64(2.0)
        """
        view = self._need(4, "cokurtosis()")
        with np.errstate(all="ignore"):
            values = _of.standardized(algebra.standard_units(view.vector), 4)
            return algebra.full(values, view.dim, 4)

    def comoment(self, exponents: Sequence[int]) -> float:
        """One central mixed moment: the mean of ``prod((x_j - mean_j) ** exponents[j])``.

        Parameters
        ----------
        exponents : sequence of int
            One for each variable, 0 or more; their sum is at most the order kept.

        Returns
        -------
        float
            nan when empty.

        Raises
        ------
        OrderError
            The exponents add up to more than the order kept.
        ValueError
            Not one exponent for each variable, or a negative one.

        Examples
        --------
        >>> import momentstream as ms
        >>> rows = [[0.0, 0.0], [0.0, 1.0], [0.0, 2.0], [4.0, 1.0]]
        >>> ms.JointMoments(2, order=4).update(rows).comoment((2, 2))
        0.5
        """
        powers = [checked_degree(k, name="an exponent") for k in exponents]
        dim = self._joint().dim
        if len(powers) != dim:
            raise ValueError(f"exponents must be {dim}, one for each variable, got {len(powers)}")
        degree = sum(powers)
        view = self._need(degree, f"comoment({tuple(powers)})")
        v = view.vector
        if not v.weight > 0.0:
            return nan
        if degree < 2:
            return 1.0 - degree
        where = np.repeat(np.arange(dim), powers)
        with np.errstate(all="ignore"):
            value = v.sums[degree - 2][algebra.place(dim, where)] / v.weight
            return float(shift(value, v.scale[where].sum()))

    def mardia(self) -> Mardia:
        """Mardia's multivariate skewness and kurtosis, with the covariance of divisor W.

        Returns
        -------
        Mardia
            ``skewness`` b1, ``kurtosis`` b2, ``skewness_statistic`` n b1 / 6 with
            ``skewness_pvalue`` by the chi-square law with dim (dim + 1) (dim + 2) / 6 degrees of
            freedom (takes SciPy, when read), ``kurtosis_statistic`` (b2 - dim (dim + 2)) /
            sqrt(8 dim (dim + 2) / n) with two-sided ``kurtosis_pvalue`` by the normal law.  n is
            ``effective_count``.  All nan for a covariance that is singular to rounding.

        Notes
        -----
        Mardia (1970), "Measures of multivariate skewness and kurtosis with applications",
        Biometrika 57.  The laws are those of many readings: no small-sample correction is made.
        Costs some dim**5 operations.

        Examples
        --------
        >>> import momentstream as ms
        >>> rows = [[0.0, 0.0], [2.0, 0.0], [0.0, 2.0], [4.0, 6.0]]
        >>> found = ms.JointMoments(2, order=4).update(rows).mardia()
        >>> round(found.skewness, 6), round(found.kurtosis, 6)
        (1.586667, 4.573333)
        """
        view = self._need(4, "mardia()")
        dim = view.dim
        degrees = dim * (dim + 1) * (dim + 2) // 6
        with np.errstate(all="ignore"):
            vector = algebra.standard_units(view.vector)
            lower = _of.factor(_of.correlation(vector)[0])
            if lower is None:
                return Mardia(nan, nan, nan, nan, degrees)
            white = np.linalg.solve(lower, np.eye(dim))
            third = algebra.full(_of.standardized(vector, 3), dim, 3)
            for _ in range(3):
                third = np.tensordot(third, white, axes=(0, 1))
            skewness = float(np.sum(third * third))
            precision = (white.T @ white).ravel()
            fourth = algebra.full(_of.standardized(vector, 4), dim, 4).reshape(dim * dim, dim * dim)
            kurtosis = float(precision @ fourth @ precision)
            n = _of.effective(view)
            normal = dim * (dim + 2.0)
            return Mardia(
                skewness,
                kurtosis,
                n * skewness / 6.0,
                float((kurtosis - normal) / np.sqrt(8.0 * normal / n)),
                degrees,
            )

    # -- one variable, one direction ---------------------------------------------------------

    def marginal(self, which: int | str) -> Summary:
        """The summary of one variable, to the order kept.

        Parameters
        ----------
        which : int or str
            An index, or a name.

        Returns
        -------
        Summary

        Raises
        ------
        KeyError, IndexError
            There is no such variable.

        Examples
        --------
        >>> import momentstream as ms
        >>> pair = ms.JointMoments(None, names=["inlet", "outlet"])
        >>> pair.update([[4.0, 3.0], [6.0, 3.5]]).marginal("outlet").mean()
        3.25
        """
        view = self._joint()
        i = place_of(view, which)
        vector = algebra.marginal(view.vector, i)
        ends = float(view.minimum[i]), float(view.maximum[i])
        return self._summary_of(view, vector, *ends)

    def along(self, direction: ArrayLike) -> Summary:
        """The summary of a linear combination of the variables, to the order kept.

        Parameters
        ----------
        direction : array of shape (dim,)
            The coefficients.

        Returns
        -------
        Summary
            Of ``direction @ x``; its extremes are unknown, nan.  Where the variables cancel and
            what is left of the spread is rounding alone, there is no spread.

        Examples
        --------
        >>> import momentstream as ms
        >>> pair = ms.JointMoments(2).update([[4.0, 3.0], [6.0, 3.5]])
        >>> pair.along([1.0, -1.0]).mean()  # the drop in pressure
        1.75
        """
        view = self._joint()
        direction = _of.finite_array(direction, (view.dim,), "direction")
        vector = algebra.project(view.vector, direction)
        return self._summary_of(view, vector, nan, nan)

    @staticmethod
    def _summary_of(view, vector, least, most):
        own = View(view.order, (), view.weights, view.readings, vector, least, most)
        return Summary._make(
            own, count=view.readings, omitted=view.omitted, effective=_of.effective(view)
        )

    # -- least squares -----------------------------------------------------------------------

    def regress(self, target: Which, on: Which | Sequence[Which] | None = None) -> Regression:
        """Least squares of one variable on others, from the second moments.

        Parameters
        ----------
        target : int or str
            The variable explained: an index, or a name.
        on : int, str or sequence of them, optional
            The variables it is explained by; all others if not given.

        Returns
        -------
        Regression
            ``coefficients`` and their standard errors ``coefficient_errors``, shape (p,);
            ``intercept``, ``intercept_error``; ``residual_variance``, the weighted sum of squared
            residuals over n - p - 1 (the divisor of ``covariance(ddof=p + 1)``, nan where it is
            not positive); ``r_squared``, nan for a target without spread.  All nan where the
            variables regressed on determine one another to rounding, or one has no spread.

        Raises
        ------
        KeyError, IndexError
            There is no such variable.
        ValueError
            A variable is named twice, or explains itself.

        Notes
        -----
        Solved by the Cholesky factor of the correlation matrix, so scales do not matter.  The
        standard errors are the classical ones, for residuals of one variance; with reliability
        weights n is the effective count, which holds for weights independent of the readings.

        Examples
        --------
        >>> import momentstream as ms
        >>> rows = [[0.0, 1.0], [1.0, 3.0], [2.0, 5.0], [3.0, 7.0]]
        >>> line = ms.JointMoments(2).update(rows).regress(1)
        >>> line.coefficients, line.intercept
        (array([2.]), 1.0)
        """
        view = self._need(2, "regress()")
        y = place_of(view, target)
        others = [i for i in range(view.dim) if i != y] if on is None else places_of(view, on)
        if y in others or len(set(others)) < len(others):
            raise ValueError(
                f"each variable can be named once, the target among them: target={target!r}, "
                f"on={on!r}"
            )
        with np.errstate(all="ignore"):
            return self._regression(view, y, others)

    @staticmethod
    def _regression(view, y, others):
        p = len(others)
        vector = algebra.standard_units(algebra.subset(view.vector, [*others, y]))
        correlation, deviation = _of.correlation(vector)
        lower = _of.factor(correlation[:p, :p])
        unknown = np.full(p, nan)
        spread = deviation[p]
        if lower is None or not view.vector.weight > 0.0 or not np.isfinite(spread):
            return Regression(unknown, nan, nan, nan, unknown.copy(), nan)
        white = np.linalg.solve(lower, np.eye(p))
        explained = white @ correlation[:p, p] if spread > 0.0 else np.zeros(p)
        ratio = 1.0 / deviation[:p]
        slope = (white.T @ explained) * (spread * ratio)
        by = vector.scale[p] - vector.scale[:p]
        coefficients = shift(slope, by) + 0.0
        # By way of the mean of what is left, which keeps its digits at any level.
        own = vector._replace(scale=0.0 * vector.scale)
        residual = algebra.project(own, np.append(-slope, 1.0))
        intercept = shift(residual.mean + residual.rest, residual.scale + vector.scale[p])
        r_squared = min(float(explained @ explained), 1.0)
        share = 1.0 - r_squared
        if p and share <= (p + 1) * _of.ROUNDING:
            share = 0.0
        divisor = _of.divisor(view, p + 1) if view.readings > p + 1 else nan
        variance = share * spread * spread * (vector.weight / divisor)
        # In units of the target: the factor of the inverse covariance's diagonal.
        n = _of.effective(view)
        inflation = np.sqrt(np.sum(white * white, axis=0)) * ratio
        errors = shift(np.sqrt(variance / n) * inflation, by)
        level = white @ ((vector.mean[:p] + vector.rest[:p]) * ratio)
        intercept_error = np.sqrt(variance / n) * np.hypot(1.0, np.sqrt(level @ level))
        return Regression(
            coefficients,
            float(intercept),
            float(shift(variance, 2 * vector.scale[p])),
            r_squared if spread > 0.0 else nan,
            errors,
            float(shift(intercept_error, vector.scale[p])),
        )

    # -- axes and bodies ---------------------------------------------------------------------

    def principal_axes(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """The variances along the principal axes of the covariance, and the axes.

        Returns
        -------
        variances : ndarray, shape (dim,)
            Largest first, divisor W; never below zero.  They are right to rounding relative to the
            largest.
        axes : ndarray, shape (dim, dim)
            Orthonormal columns, in the order of ``variances``; the largest component of each is
            positive.  Both are nan when empty, or where a covariance is not finite.

        Examples
        --------
        >>> import momentstream as ms
        >>> body = ms.JointMoments(2).update([[-2.0, 0.0], [2.0, 0.0], [0.0, -1.0], [0.0, 1.0]])
        >>> body.principal_axes()[0]
        array([2. , 0.5])
        """
        view = self._need(2, "principal_axes()")
        dim = view.dim
        with np.errstate(all="ignore"):
            vector = algebra.standard_units(view.vector)
            moments, variance = _of.moments(vector)
            if not np.all(np.isfinite(moments[0])):
                return np.full(dim, nan), np.full((dim, dim), nan)
            known = vector.scale[variance > 0.0]
            common = known.max() if len(known) else 0.0
            by = (vector.scale - common)[algebra.indices(dim, 2)].sum(axis=1)
            values, axes = np.linalg.eigh(algebra.full(shift(moments[0], by), dim, 2))
            values, axes = np.maximum(values[::-1], 0.0), axes[:, ::-1]
            largest = np.argmax(np.abs(axes), axis=0)
            axes = axes * np.where(axes[largest, np.arange(dim)] < 0.0, -1.0, 1.0) + 0.0
            return shift(values, 2 * common), axes

    def inertia_tensor(self, about: ArrayLike | None = None) -> NDArray[np.float64]:
        """The inertia tensor of weighted points in three dimensions.

        ``sum of w (|r|**2 1 - r r^T)``, r from the centre of mass or from a point.

        Parameters
        ----------
        about : array of shape (3,), optional
            The point; the centre of mass if not given.

        Returns
        -------
        ndarray, shape (3, 3)
            In units of weight times length squared; off the diagonal minus the products of
            inertia.  nan when empty.

        Raises
        ------
        ValueError
            There are not three variables.

        Notes
        -----
        About another point by the parallel-axis theorem (Steiner).

        Examples
        --------
        >>> import momentstream as ms
        >>> points = [[-1.0, 0.0, 0.0], [0.0, 0.0, 0.0], [1.0, 0.0, 0.0]]
        >>> rod = ms.JointMoments(3, weights="reliability").update(points, [1.0, 4.0, 1.0])
        >>> rod.inertia_tensor().diagonal()
        array([0., 2., 2.])
        """
        view = self._need(2, "inertia_tensor()")
        if view.dim != 3:
            raise ValueError(f"an inertia tensor needs 3 variables, there are {view.dim}")
        if about is not None:
            about = _of.finite_array(about, (3,), "about")
        v = view.vector
        if not v.weight > 0.0:
            return np.full((3, 3), nan)
        with np.errstate(all="ignore"):
            sizes = [v.scale + algebra.exponents(np.sqrt(algebra.spreads(v)))]
            if about is not None:
                sizes += [v.scale + algebra.exponents(v.mean), algebra.exponents(about)]
            largest = max(float(np.max(s)) for s in sizes)
            common = largest if largest > -5000.0 else 0.0
            units = algebra.in_units(v, np.full(3, common), v.weight_scale)
            products = algebra.full(units.sums[0], 3, 2)
            if about is not None:
                distance = (units.mean - shift(about, -common)) + units.rest
                products += units.weight * np.outer(distance, distance)
            square = products.diagonal()
            tensor = 0.0 - products
            tensor[np.diag_indices(3)] = [
                square[1] + square[2],
                square[0] + square[2],
                square[0] + square[1],
            ]
            return shift(tensor, 2 * common + v.weight_scale)

    # -- extremes ----------------------------------------------------------------------------

    def minimum(self) -> NDArray[np.float64]:
        """The least reading of every variable, shape (dim,); nan when empty or unknown."""
        return np.array(self._joint().minimum, dtype=float)

    def maximum(self) -> NDArray[np.float64]:
        """The greatest reading of every variable, shape (dim,); nan when empty or unknown."""
        return np.array(self._joint().maximum, dtype=float)
