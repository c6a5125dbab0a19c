"""What joint statistics are read from, what some of them return, and the steps they share."""

from __future__ import annotations

from dataclasses import dataclass
from math import erfc, nan, sqrt
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np

from ..algebra import joint as algebra
from ..algebra.central import shift
from ..algebra.joint import JointVector
from .laws import chi_square_survival
from .readout import checked_ddof, checked_degree

if TYPE_CHECKING:
    from numpy.typing import NDArray

# A divisor below this share of the weight is rounding alone.
ROUNDING = 2.0**-49
# What others leave of a variable's variance is rounding alone below this share, by variable: a
# second moment is right to some 128 units of the last place.
_SINGULAR = 2.0**-45


class JointView(NamedTuple):
    """What the statistics are read from."""

    order: int
    dim: int
    names: tuple[str, ...] | None
    weights: Any  # None, "frequency" or "reliability"
    readings: int  # number of readings; for frequencies the sum of the weights
    omitted: int
    vector: JointVector
    minimum: Any  # shape (dim,)
    maximum: Any


@dataclass(frozen=True, slots=True)
class Mardia:
    """Mardia's multivariate skewness and kurtosis, and how unusual they are for normal readings."""

    skewness: float  # b1
    kurtosis: float  # b2; dim * (dim + 2) for the normal law
    skewness_statistic: float  # n b1 / 6: chi-square for normal readings
    kurtosis_statistic: float  # (b2 - dim (dim + 2)) / sqrt(8 dim (dim + 2) / n): standard normal
    degrees_of_freedom: int  # of the chi-square law

    @property
    def skewness_pvalue(self) -> float:
        """The chance of a larger ``skewness_statistic``; takes SciPy, the extra ``stats``."""
        if self.skewness_statistic != self.skewness_statistic:
            return nan
        return chi_square_survival(self.skewness_statistic, self.degrees_of_freedom)

    @property
    def kurtosis_pvalue(self) -> float:
        """The chance of a ``kurtosis_statistic`` farther from zero, two-sided."""
        return erfc(abs(self.kurtosis_statistic) / sqrt(2.0))


class Regression(NamedTuple):
    """Least squares of one variable on others."""

    coefficients: NDArray[np.float64]  # one for each variable regressed on, in their order
    intercept: float
    residual_variance: float  # divisor n - p - 1
    r_squared: float
    coefficient_errors: NDArray[np.float64]  # standard errors
    intercept_error: float


def place_of(view, which):
    """The index of a variable given by index or name."""
    if isinstance(which, str):
        if view.names is None or which not in view.names:
            raise KeyError(f"no variable is named {which!r}; the names are {view.names}")
        return view.names.index(which)
    place = checked_degree(which, -(2**62), "variable")
    if not -view.dim <= place < view.dim:
        raise IndexError(f"variable {place} is out of range: there are {view.dim}")
    return place % view.dim


def places_of(view, which):
    """The indices of several variables, each given by index or name, or of one."""
    if isinstance(which, str) or (np.ndim(which) == 0 and not hasattr(which, "__iter__")):
        which = [which]
    return [place_of(view, w) for w in which]


def finite_array(values, shape, name):
    """A float array of this shape."""
    try:
        array = np.array(values, dtype=float)
    except (TypeError, ValueError):
        raise TypeError(f"{name} must be numbers, got {values!r}") from None
    if array.shape != shape:
        raise ValueError(f"{name} must have shape {shape}, got {array.shape}")
    if not np.all(np.isfinite(array)):
        raise ValueError(f"{name} must be finite, got {values!r}")
    return array


def effective(view):
    """Kish's effective number of readings, W**2 / V2; for other weights the weight."""
    v = view.vector
    if not v.weight > 0.0:
        return 0.0
    if view.weights != "reliability":
        return float(shift(v.weight, v.weight_scale))
    return float(v.weight * v.weight / v.powers[0])


def divisor(view, ddof):
    """``W - ddof``, or ``W - ddof * V2 / W``, in the weight's units; nan where not positive."""
    ddof = checked_ddof(ddof)
    v = view.vector
    if not v.weight > 0.0:
        return nan
    if view.weights == "reliability":
        # One reading alone: W - V2 / W is zero, and rounds to something else.
        loss = np.inf if view.readings < 2 and ddof > 0 else ddof * (v.powers[0] / v.weight)
    else:
        loss = shift(float(ddof), -v.weight_scale)
    left = float(v.weight - loss)
    return left if left > ROUNDING * v.weight else nan


def moments(vector):
    """Packed central moments of degree 2 on, and the variances; nan when empty."""
    weight = vector.weight if vector.weight > 0.0 else nan
    central = [values / weight for values in vector.sums]
    dim = len(vector.mean)
    return central, np.maximum(algebra.diagonal(central[0], dim, 2), 0.0)


def standardized(vector, k):
    """The packed standardized moments of degree k; ``vector`` in standard units."""
    central, variance = moments(vector)
    variance = np.where(variance > 0.0, variance, np.nan)
    # In order of size, so that permuting the variables permutes the bits.
    own = np.sort(variance[algebra.indices(len(vector.mean), k)], axis=1).T
    below = np.sqrt(own[0] * own[1])
    if k == 3:
        below = below * np.sqrt(own[2])
    if k == 4:
        below = below * np.sqrt(own[2] * own[3])
    return central[k - 2] / below


def correlation(vector):
    """The full correlation matrix, and the deviations; ``vector`` in standard units."""
    dim = len(vector.mean)
    _, variance = moments(vector)
    values = algebra.full(np.clip(standardized(vector, 2), -1.0, 1.0), dim, 2)
    values[np.diag_indices(dim)] = np.where(variance > 0.0, values.diagonal() * 0.0 + 1.0, np.nan)
    return values, np.sqrt(variance)


def factor(matrix):
    """The lower triangular factor of a correlation matrix; None where it is singular."""
    dim = len(matrix)
    if not np.all(np.isfinite(matrix)):
        return None
    try:
        lower = np.linalg.cholesky(matrix)
    except np.linalg.LinAlgError:
        return None
    # The square of a pivot: the share of a variance that those before leave unexplained.
    return lower if np.all(lower.diagonal() ** 2 > dim * _SINGULAR) else None
