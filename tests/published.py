"""Data of published cases as exact numbers, what is read off them, and the exact answer."""

import csv
import json
from fractions import Fraction
from functools import cache
from math import isqrt
from pathlib import Path

import numpy as np
from exact import Exact

import momentstream as ms

DATA = Path(__file__).with_name("data")


@cache
def load(name):
    """The JSON file of this name in ``tests/data``."""
    return json.loads((DATA / name).read_text(encoding="utf-8"))


@cache
def table(name):
    """The columns of a CSV file of published data, as text."""
    text = (DATA / "published" / name).read_text(encoding="utf-8")
    rows = csv.DictReader(line for line in text.splitlines() if not line.startswith("#"))
    columns = {field: [] for field in rows.fieldnames}
    for row in rows:
        for field, entry in row.items():
            columns[field].append(entry)
    return columns


def random_cuts(rng, n, parts):
    """Slices that cut n readings in this many places; some are empty."""
    places = np.sort(rng.integers(0, n + 1, parts - 1)).tolist()
    return [slice(a, b) for a, b in zip([0, *places], [*places, n], strict=True)]


def fed(readings, row_weights=None, **configuration):
    """A new accumulator that took these readings in."""
    accumulator = ms.Moments(**configuration)
    if row_weights is None:
        return accumulator.update(readings)
    return accumulator.update(readings, row_weights)


def merged(readings, cuts, row_weights=None, **configuration):
    """Each slice in an accumulator of its own, combined."""
    return ms.combine(
        fed(readings[cut], None if row_weights is None else row_weights[cut], **configuration)
        for cut in cuts
    )


def square_root(value):
    """The root of a Fraction, to 200 bits."""
    if value == 0:
        return Fraction(0)
    bits = 400 - value.numerator.bit_length() + value.denominator.bit_length()
    shift = max(bits, 0) // 2
    return Fraction(isqrt((value.numerator << 2 * shift) // value.denominator), 1 << shift)


def read(accumulator, name):
    """A statistic by its name in ``check_values.json``; n there is the count of readings."""
    n = accumulator.count
    if name in _READ:
        return _READ[name](accumulator, n)
    if name[0] == "m":
        return accumulator.central(int(name[1:]))
    if name[0] == "k":
        return accumulator.k_statistic(int(name[1:]))
    raise KeyError(name)


_READ = {
    "n": lambda a, n: n,
    "sum_w": lambda a, n: a.weight,
    "mean": lambda a, n: a.mean(),
    "var": lambda a, n: a.variance(ddof=1),
    "var_pop": lambda a, n: a.variance(),
    "sd": lambda a, n: a.std(ddof=1),
    "sd_pop": lambda a, n: a.std(),
    "sem": lambda a, n: a.std(ddof=1) / n**0.5,
    "skew_pop": lambda a, n: a.skewness(),
    "skew_adj": lambda a, n: a.skewness(bias=False),
    "skew_nm1": lambda a, n: a.central(3) * n / ((n - 1) * a.std(ddof=1) ** 3),
    "kurt_pop": lambda a, n: a.kurtosis(excess=False),
    "kurt_nm1": lambda a, n: a.central(4) * n / ((n - 1) * a.variance(ddof=1) ** 2),
    "exkurt_pop": lambda a, n: a.kurtosis(),
    "exkurt_adj": lambda a, n: a.kurtosis(bias=False),
}


class Reference(Exact):
    """The statistics of readings by exact arithmetic, and what their rounding errors scale with.

    Parameters
    ----------
    readings, weights : sequence
        Doubles or integers, taken to the last bit.
    kind : None, "frequency" or "reliability"
        What the weights mean; it decides the unbiased estimates.
    order : int
    """

    def __init__(self, readings, weights=None, kind=None, order=8):
        super().__init__(readings, weights, order)
        self.kind = kind
        self.count = self.weight if kind == "frequency" else len(self.readings)
        self._equal_weights = weights is None
        self._known = {}

    def value(self, name):
        """The exact statistic, a Fraction; "undefined" where there is none."""
        return self._kept(name, lambda: self._value(name, self.central, signed=True))

    def size(self, name):
        """The statistic with every sum taken of absolute values and every minus made a plus.

        Each operation in doubles is off by half a unit of its last place at most, so this is what
        errors in the statistic are measured in.
        """
        return self._kept(
            f"size of {name}", lambda: self._value(name, self.absolute_central, signed=False)
        )

    def _kept(self, name, compute):
        if name not in self._known:
            self._known[name] = compute()
        return self._known[name]

    @property
    def weight_ratios(self):
        return [self.power_of_weights(j) / self.weight**j for j in range(5)]

    def absolute_central(self, k):
        """The mean of abs(x - mean)**k, exactly."""
        if k % 2 == 0:
            return self.central(k)
        return self._kept(f"absolute {k}", lambda: self._absolute_central(k))

    def _absolute_central(self, k):
        center = self.mean / self.unit
        above, below = center.numerator, center.denominator
        if self._equal_weights:
            total = sum(abs(below * x - above) ** k for x in self.readings)
        else:
            pairs = zip(self.weights, self.readings, strict=True)
            total = sum(w * abs(below * x - above) ** k for w, x in pairs)
        return total * (self.unit / below) ** k / self.weight

    def _value(self, name, m, signed):
        spread = self.central(2)
        if name == "mean":
            return self.mean if signed else abs(self.mean) + m(1)
        if name in ("n", "sum_w"):
            return Fraction(self.count if name == "n" else self.weight)
        if name.startswith("m"):
            return m(int(name[1:]))
        if name.startswith("k") and name[1:].isdigit():
            return self._k_statistic(int(name[1:]), m, signed)
        if name in ("var_pop", "sd_pop"):
            return m(2) if name == "var_pop" else square_root(m(2))
        if name in ("var", "sd"):
            value = self._k_statistic(2, m, signed)
            return value if name == "var" or value == "undefined" else square_root(value)
        if spread == 0:
            return "undefined"
        if name == "skew_pop":
            return m(3) / square_root(spread) / spread
        if name in ("kurt_pop", "exkurt_pop"):
            excess = 3 if name == "exkurt_pop" and signed else 0
            return m(4) / spread**2 - excess
        order = {"skew_adj": 3, "exkurt_adj": 4}[name]
        value, variance = self._k_statistic(order, m, signed), self.value("var")
        if value == "undefined":
            return value
        return value / variance / (square_root(variance) if order == 3 else variance)

    def _k_statistic(self, k, m, signed):
        if self.count < k:
            return "undefined"
        sign = -1 if signed else 1
        if self.kind == "reliability":
            return self._weighted_k_statistic(k, m, sign)
        n = self.count
        below = 1
        for j in range(1, k):
            below *= n - j
        if k == 1:
            return self.mean
        if k == 2:
            above = n * m(2)
        elif k == 3:
            above = n**2 * m(3)
        elif k == 4:
            above = n**2 * ((n + 1) * m(4) + sign * 3 * (n - 1) * m(2) ** 2)
        elif k == 5:
            above = n**3 * ((n + 5) * m(5) + sign * 10 * (n - 1) * m(2) * m(3))
        else:
            above = n**2 * (
                (n + 1) * (n**2 + 15 * n - 4) * m(6)
                + sign * 15 * (n - 1) ** 2 * (n + 4) * m(2) * m(4)
                + sign * 10 * (n - 1) * (n**2 - n + 4) * m(3) ** 2
                + 30 * n * (n - 1) * (n - 2) * m(2) ** 3
            )
        return Fraction(above) / below

    def _weighted_k_statistic(self, k, m, sign):
        v = self.weight_ratios
        if k == 1:
            return self.mean
        if k == 2:
            parts, below, wide = m(2), 1 - v[2], 1 + v[2]
        elif k == 3:
            parts, below = m(3), 1 - 3 * v[2] + 2 * v[3]
            wide = 1 + 3 * v[2] + 2 * v[3]
        else:
            parts = (1 + sign * 4 * v[3] + 3 * v[2] ** 2) * m(4) + sign * 3 * m(2) ** 2 * (
                1 + sign * 2 * v[2] + 4 * v[3] + sign * 3 * v[2] ** 2
            )
            below = (1 - v[2]) * (1 - 6 * v[2] + 8 * v[3] + 3 * v[2] ** 2 - 6 * v[4])
            wide = (1 + v[2]) * (1 + 6 * v[2] + 8 * v[3] + 3 * v[2] ** 2 + 6 * v[4])
        if sign < 0:
            return parts / below
        # The divisor cancels too: its relative error goes into the value.
        return parts / below + abs(self._weighted_k_statistic(k, self.central, -1)) * wide / below
