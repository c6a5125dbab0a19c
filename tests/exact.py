"""Moments by rational arithmetic, and promise 5 held against them.

A double is an integer times a power of two.  Brought to one power of two, readings are integers,
and so are all sums of their powers about the mean: Python's integers add them without rounding.
"""

from fractions import Fraction

import numpy as np
from assertions import assert_close, unit_of_last_place

U = Fraction(1, 2**53)  # half a unit of the last place of 1.0: sums are held to the stricter one
BLOCK = 8192  # readings a stream reduces at a time
CHANNEL_BLOCK = 2048  # rows, of up to 1024 channels


def integers(readings):
    """Integers m and an exponent e: the readings are m * 2**e, exactly."""
    if isinstance(readings, np.ndarray) and readings.dtype.kind == "f":
        fraction, exponent = np.frexp(readings.reshape(-1).astype(np.float64))
        whole = np.ldexp(fraction, 53).astype(np.int64).tolist()
        exponent = np.where(fraction == 0.0, 5000, exponent - 53).tolist()
    else:
        items = readings.reshape(-1).tolist() if isinstance(readings, np.ndarray) else readings
        pairs = [item.as_integer_ratio() for item in items]
        whole = [above for above, _ in pairs]
        exponent = [1 - below.bit_length() for _, below in pairs]
    lowest = min(exponent, default=0)
    return [m << (e - lowest) if m else 0 for m, e in zip(whole, exponent, strict=True)], lowest


class Exact:
    """Weight, mean and power sums about the mean of readings, as Fractions.

    Parameters
    ----------
    readings : array or list of int and float, not empty
    weights : likewise, or None
    order : int

    Attributes
    ----------
    weight, mean : Fraction
    sums : list of Fraction
        Sums of w * (x - mean)**k for k = 0 .. order.
    distances : ndarray
        abs(x - mean), each rounded once: only tolerances are taken from them.
    """

    def __init__(self, readings, weights=None, order=4):
        x, exponent = integers(readings)
        w, weight_exponent = ([1] * len(x), 0) if weights is None else integers(weights)
        weight_unit = Fraction(2) ** weight_exponent
        total = sum(w)
        center = sum(q * v for q, v in zip(w, x, strict=True))
        self.readings, self.weights = x, [q * weight_unit for q in w]
        self.weighted = weights is not None
        self.unit = Fraction(2) ** exponent
        self.weight = total * weight_unit
        self.mean = Fraction(center, total) * self.unit
        deviations = [v * total - center for v in x]  # of a mean that is a fraction of total
        terms = w
        self.sums = [self.weight]
        for k in range(1, order + 1):
            terms = [q * d for q, d in zip(terms, deviations, strict=True)]
            self.sums.append(sum(terms) * weight_unit * self.unit**k / total**k)
        scale = self.unit / total
        self.distances = np.array(
            [abs(d) * scale.numerator / scale.denominator for d in deviations]
        )
        self._float_weights = np.array([float(q) for q in self.weights])

    def absolute(self, k, farther=0.0):
        """The sum of w * (abs(x - mean) + farther)**k, to some 15 digits."""
        return float(np.sum(self._float_weights * (self.distances + farther) ** k))

    def central(self, k):
        return self.sums[k] / self.weight

    def power_of_weights(self, k):
        return sum(w**k for w in self.weights)

    def mean_of(self, part):
        """The mean of some of the readings (a slice or indices); None where they have no weight."""
        if not isinstance(part, slice):
            x, w = [self.readings[i] for i in part], [self.weights[i] for i in part]
        else:
            x, w = self.readings[part], self.weights[part]
        weight = sum(w)
        return (
            sum(q * v for q, v in zip(w, x, strict=True)) * self.unit / weight if weight else None
        )

    def farthest_mean(self, parts):
        """D of promise 5: the largest distance of a block's or part's mean from the whole mean."""
        means = [self.mean_of(part) for part in parts]
        return float(max((abs(m - self.mean) for m in means if m is not None), default=0))


def blocks_of(start, stop, size=BLOCK):
    """The blocks in which a stream takes the readings ``start`` to ``stop``, as slices."""
    return [slice(first, min(first + size, stop)) for first in range(start, stop, size)]


def assert_promise_5(accumulator, exact, parts, label):
    """Mean and power sums as accurate as promise 5 words it.

    ``parts`` are the blocks and merged parts, as slices or indices.
    """
    assert_mean(accumulator.mean(), exact, label)
    assert_close(
        accumulator.weight, exact.weight, ulps=64 if exact.weighted else 0, label=f"{label}: weight"
    )
    weight = Fraction(accumulator.weight)
    order = accumulator.order
    farthest = exact.farthest_mean(parts) if order > 4 else 0.0
    for k in range(2, order + 1):
        size = exact.absolute(k, farthest if k > 4 else 0.0)
        assert_sum(Fraction(accumulator.central(k)) * weight, exact.sums[k], k, size, label)


def assert_sum(got, exact, k, size, label):
    """A power sum within 64 u (from order 9 on 128 u) of a size, u = 2**-53.

    A unit of the last place of ``size`` is u to 2u times it: this is the stricter reading.
    """
    allowed = 64 if k < 9 else 128
    unit = U * Fraction(size)
    assert abs(got - exact) <= allowed * unit, (
        f"{label}: power sum {k} is off by {float(abs(got - exact) / unit) if unit else got} u, "
        f"{allowed} allowed"
    )


def assert_mean(mean, exact, label):
    """Within a unit of its own last place plus 4u times the mean absolute deviation."""
    allowed = unit_of_last_place(exact.mean) + 4 * U * Fraction(exact.absolute(1)) / exact.weight
    error = abs(Fraction(mean) - exact.mean)
    assert error <= allowed, (
        f"{label}: mean {mean!r} is off by {float(error / allowed):.3g} times what is allowed"
    )


def assert_same_state(got, wanted, label):
    """Equal to the last bit: what is read off, and what is carried on."""
    assert got.to_bytes() == wanted.to_bytes(), f"{label}: settled state {got!r}, not {wanted!r}"
    assert got.to_bytes(resume=True) == wanted.to_bytes(resume=True), f"{label}: working state"
