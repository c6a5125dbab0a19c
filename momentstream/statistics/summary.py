"""The immutable summary of a set of readings: moments, and all that is read off them."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ..algebra import cumulants as _cumulants
from ..algebra.central import MomentVector, affine, in_units, shift
from ..display.page import table
from ..display.text import columns, label_text, number, one_line
from .feasibility import violated
from .readout import Statistics, View

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from .readout import Value

_ROWS_SHOWN = 10


def scaled_vector(mean, central, weight):
    """The moment vector of a mean and central moments (order 2 on), in units that are safe."""
    central = np.asarray(central, dtype=float)
    degrees = np.arange(2, len(central) + 2).reshape((-1,) + (1,) * np.ndim(mean))
    level = np.frexp(np.abs(mean))[1] * 1.0
    size = np.full(np.shape(mean), -5000.0)
    for degree, values in zip(degrees.ravel(), central, strict=True):
        exponent = np.where(values != 0.0, np.ceil(np.frexp(np.abs(values))[1] / degree), -5000.0)
        size = np.maximum(size, exponent)
    # Units of the spread, as long as the mean has room in them; of the mean where there is none.
    size = np.where(size < -2000.0, level, np.maximum(size, level - 1020.0))
    sums = shift(central, -degrees * size) * weight
    mean = shift(np.asarray(mean, float), -size)
    return MomentVector(np.float64(weight), mean, 0.0 * mean, size, sums)


class Summary(Statistics):
    """What is known of a set of readings: its moments, and every statistic that needs no more.

    Immutable; made by an accumulator's ``summary()``, or from moments known otherwise by
    ``from_central``, ``from_raw``, ``from_cumulants``.  ``str()`` is a table a person reads at a
    glance; in a notebook it shows as one.

    ============  ==================================================================
    reading off   ``mean variance std skewness kurtosis central raw standardized
                  cumulant k_statistic minimum maximum dc rms ac_rms power
                  crest_factor``, properties ``count omitted weight
                  effective_count order shape names``
    transforming  ``affine independent_sum``
    exporting     ``as_dict``
    ============  ==================================================================

    Notes
    -----
    Safe to share between threads; pickles.

    Examples
    --------
    >>> import momentstream as ms
    >>> s = ms.Moments().update([1.0, 2.0, 3.0, 10.0]).summary()
    >>> s.mean(), s.std(ddof=1)
    (4.0, 4.08248290463863)
    """

    __slots__ = ("_data",)
    _data: tuple[View, Any, Any, Any, tuple[str, ...] | None]

    def __init__(self):
        raise TypeError(
            "a Summary is made by summary() of an accumulator, Summary.from_central, "
            "Summary.from_raw or Summary.from_cumulants"
        )

    @classmethod
    def _make(cls, view, *, count, omitted, effective, names=None):
        self = object.__new__(cls)
        object.__setattr__(self, "_data", (view, count, omitted, effective, names))
        return self

    def __setattr__(self, name, value):
        raise AttributeError(f"a Summary is immutable; {name!r} cannot be set")

    def __delattr__(self, name):
        raise AttributeError(f"a Summary is immutable; {name!r} cannot be deleted")

    def __reduce__(self):
        view, count, omitted, effective, names = self._data
        return _restore, (
            tuple(view._replace(vector=tuple(view.vector))),
            count,
            omitted,
            effective,
            names,
        )

    def __copy__(self):
        return self

    def __deepcopy__(self, memo):
        return self

    def __eq__(self, other):
        if not isinstance(other, Summary):
            return NotImplemented
        return _flat(self._data) == _flat(other._data)

    def __hash__(self):
        return hash(_flat(self._data))

    def _view(self):
        return self._data[0]

    # -- making ------------------------------------------------------------------------------

    @classmethod
    def from_central(
        cls, mean: float, central: Sequence[float], count: int | None = None, check: bool = True
    ) -> Summary:
        """A summary of a mean and central moments.

        Parameters
        ----------
        mean : float
        central : sequence of float
            Central moments from the second on.
        count : int, optional
            Number of readings; without it what needs it raises ``ValueError``.
        check : bool, default True
            Refuse moments that nothing can have.

        Raises
        ------
        ValueError
            The moments are not finite or, with ``check``, impossible; it says which inequality
            fails.

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.Summary.from_central(4.0, [12.5, 45.0]).skewness()
        1.0182337649086284
        """
        mean = _finite_number(mean, "mean")
        central = _finite_numbers(central, "central")
        count = _checked_count(count)
        if check:
            broken = violated([1.0, 0.0, *central])
            if broken:
                raise ValueError(
                    f"these cannot be the central moments of anything: they break {broken}; "
                    "check=False takes them as they are"
                )
        return cls._plain(mean, central, count)

    @classmethod
    def _plain(cls, mean, central, count):
        with np.errstate(all="ignore"):
            vector = scaled_vector(mean, central, 1.0 if count is None else float(count))
        view = View(len(central) + 1, (), None, count, vector, np.nan, np.nan)
        effective = None if count is None else float(count)
        return cls._make(view, count=count, omitted=0, effective=effective)

    @classmethod
    def from_raw(
        cls, raw: Sequence[float], count: int | None = None, check: bool = True
    ) -> Summary:
        """A summary of raw moments (about zero), from the first on.

        Raw moments far from zero keep few digits of the spread: central ones keep all.

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.Summary.from_raw([4.0, 28.5]).variance()
        12.5
        """
        raw = _finite_numbers(raw, "raw")
        if not raw:
            raise ValueError("raw must hold at least the first moment, got none")
        central = _in_range(lambda: _cumulants.central_from_raw(raw)[2:], "raw")
        return cls.from_central(raw[0], central, count, check)

    @classmethod
    def from_cumulants(
        cls, cumulants: Sequence[float], count: int | None = None, check: bool = True
    ) -> Summary:
        """A summary of cumulants, from the first (the mean) on.

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.Summary.from_cumulants([3.5, 3.5, 3.5, 3.5]).kurtosis()  # Poisson's law
        0.2857142857142856
        """
        cumulants = _finite_numbers(cumulants, "cumulants")
        if not cumulants:
            raise ValueError("cumulants must hold at least the first, got none")
        central = _in_range(lambda: _cumulants.central_from_cumulants(cumulants[1:]), "cumulants")
        return cls.from_central(cumulants[0], central, count, check)

    # -- transforming ------------------------------------------------------------------------

    def affine(self, scale: float = 1.0, offset: float = 0.0) -> Summary:
        """The summary of ``scale * x + offset``; a negative scale exchanges the extremes.

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.Summary.from_central(20.0, [4.0]).affine(1.8, 32.0).mean()  # to Fahrenheit
        68.0
        """
        view, count, omitted, effective, names = self._data
        changed = affine_view(view, scale, offset)
        return self._make(changed, count=count, omitted=omitted, effective=effective, names=names)

    def independent_sum(self, other: Summary) -> Summary:
        """The moments of X + Y for independent X and Y: their cumulants add.

        The result has no count, and the lower of the two orders.  This is not combining two sets
        of readings into one: that is ``merge`` of accumulators.

        Examples
        --------
        >>> import momentstream as ms
        >>> die = ms.Summary.from_central(3.5, [35 / 12])
        >>> die.independent_sum(die).mean()
        7.0
        """
        if not isinstance(other, Summary):
            raise TypeError(f"independent_sum takes a Summary, got {type(other).__name__}")
        a, b = self._view(), other._view()
        if a.shape != b.shape:
            raise ValueError(f"shapes differ: {a.shape} and {b.shape}")
        order = min(a.order, b.order)
        with np.errstate(all="ignore"):
            scale = np.maximum(a.vector.scale, b.vector.scale)
            parts = []
            for view in (a, b):
                vector = in_units(view.vector, scale, view.vector.weight_scale)
                moments = [m / vector.weight for m in vector.sums[: order - 1]]
                parts.append((vector, _cumulants.cumulants_from_central(moments)))
            (left, left_cumulants), (right, right_cumulants) = parts
            both = [x + y for x, y in zip(left_cumulants, right_cumulants, strict=True)]
            sums = np.array(_cumulants.central_from_cumulants(both), dtype=float)
            sums = sums.reshape((order - 1, *np.shape(left.mean)))
            mean = left.mean + right.mean
            rest = left.rest + right.rest
            weight = np.where((left.weight > 0.0) & (right.weight > 0.0), 1.0, 0.0)
            vector = MomentVector(weight, mean, rest, scale, sums)
        view = View(
            order, a.shape, None, None, vector, a.minimum + b.minimum, a.maximum + b.maximum
        )
        return self._make(view, count=None, omitted=0, effective=None)

    # -- what it is of -----------------------------------------------------------------------

    @property
    def order(self) -> int:
        """The highest moment kept."""
        return self._view().order

    @property
    def shape(self) -> tuple[int, ...]:
        """The shape of one reading."""
        return self._view().shape

    @property
    def names(self) -> tuple[str, ...] | None:
        """The names of the channels, a tuple, or None."""
        return self._data[4]

    @property
    def count(self) -> int | NDArray[np.int64] | None:
        """Number of readings (for frequencies the sum of the weights), or None."""
        return _own(self._data[1])

    @property
    def omitted(self) -> int | NDArray[np.int64]:
        """Number of readings left out as missing."""
        return _own(self._data[2])

    @property
    def weight(self) -> Value | None:
        """The sum of the weights, or None where there is no count."""
        view, count, *_ = self._data
        if count is None:
            return None
        with np.errstate(all="ignore"):
            return self._read(shift(view.vector.weight, view.vector.weight_scale), view)

    @property
    def effective_count(self) -> Value | None:
        """Kish's effective number of readings, W**2 / V2 for reliability weights, or None."""
        return _own(self._data[3])

    # -- exporting ---------------------------------------------------------------------------

    def as_dict(self) -> dict[str, Any]:
        """Plain numbers, ready for JSON.

        Returns
        -------
        dict
            ``order shape names count omitted weight mean variance std skewness kurtosis minimum
            maximum central`` (from the second on), as far as the order goes; what is undefined, or
            beyond the range of doubles, is None.
        """
        fields = {
            "order": self.order,
            "shape": list(self.shape),
            "names": None if self.names is None else list(self.names),
            "count": _json(self.count),
            "omitted": _json(self.omitted),
            "weight": _json(self.weight),
        }
        for name in self._known():
            fields[name] = _json(getattr(self, name)())
        fields["central"] = [_json(self.central(k)) for k in range(2, self.order + 1)]
        return fields

    def _known(self):
        names = ["mean", "variance", "std", "skewness", "kurtosis"]
        least = [1, 2, 2, 3, 4]
        known = [name for name, order in zip(names, least, strict=True) if order <= self.order]
        return [*known, "minimum", "maximum"]

    def _table(self):
        """Header, rows and a note on what is not shown."""
        if self.shape == ():
            rows = [("count", number(self.count))]
            if self.omitted:
                rows.append(("omitted", number(int(self.omitted))))
            if self._view().weights == "reliability":
                rows.append(("weight", number(self.weight)))
                rows.append(("effective count", number(self.effective_count)))
            rows += [(name, number(getattr(self, name)())) for name in self._known()]
            return (), rows, ""
        known = [name for name in self._known() if name != "variance"]
        header = ("channel", "count", *known)
        values = [np.ravel(getattr(self, name)()) for name in known]
        counts = np.ravel(self.count) if self.count is not None else [None] * len(values[0])
        labels = self.names or [
            ", ".join(str(i) for i in place) for place in np.ndindex(*self.shape)
        ]
        rows = [
            (
                label_text(str(label)),
                number(None if count is None else int(count)),
                *(number(float(v[i])) for v in values),
            )
            for i, (label, count) in enumerate(zip(labels, counts, strict=True))
        ]
        hidden = len(rows) - _ROWS_SHOWN
        note = f"{hidden} more channels" if hidden > 0 else ""
        return header, rows[:_ROWS_SHOWN], note

    def __str__(self) -> str:
        header, rows, note = self._table()
        return "\n".join(columns(header, rows) + ([f"... {note}"] if note else []))

    def __repr__(self) -> str:
        if self.shape == ():
            names = [n for n in self._known() if n not in ("variance", "minimum", "maximum")]
            fields = [("count", self.count), *((n, getattr(self, n)()) for n in names)]
            return one_line("Summary", fields)
        return one_line("Summary", [("order", self.order), ("shape", str(self.shape))])

    def _repr_html_(self) -> str:
        header, rows, note = self._table()
        return table(header, rows, note)


def affine_view(view, scale, offset):
    """The view of ``scale * x + offset``."""
    scale = _finite_number(scale, "scale")
    offset = _finite_number(offset, "offset")
    with np.errstate(all="ignore"):
        vector = affine(view.vector, scale, offset)
        ends = view.minimum * scale + offset, view.maximum * scale + offset
    if scale < 0.0:
        ends = ends[::-1]
    return view._replace(vector=vector, minimum=ends[0], maximum=ends[1])


def _finite_number(value, name):
    try:
        number = float(value)
    except (TypeError, ValueError):
        raise TypeError(f"{name} must be a number, got {value!r}") from None
    except OverflowError:
        raise ValueError(f"{name} must be within the range of doubles, got {value!r}") from None
    if isinstance(value, (str, bytes, bytearray)):
        raise TypeError(f"{name} must be a number, got {value!r}")
    if not np.isfinite(number):
        raise ValueError(f"{name} must be finite, got {value!r}")
    return number


def _finite_numbers(values, name):
    if not hasattr(values, "__iter__") or isinstance(values, (str, bytes, bytearray)):
        raise TypeError(f"{name} must be a sequence of numbers, got {values!r}")
    return [_finite_number(value, f"{name}[{i}]") for i, value in enumerate(values)]


def _in_range(convert, name):
    """Central moments from others; those of the user are to blame where they have no doubles."""
    try:
        central = [float(m) for m in convert()]
    except OverflowError:
        central = [np.inf]
    if not np.all(np.isfinite(central)):
        raise ValueError(f"{name} give central moments beyond the range of doubles")
    return central


def _checked_count(count):
    if count is None:
        return None
    try:
        value = count.__index__()
    except AttributeError:
        raise TypeError(f"count must be an integer, got {count!r}") from None
    if value < 1:
        raise ValueError(f"count must be at least 1, got {value}")
    return value


def _own(value):
    """A value nobody can change the summary through."""
    return value.copy() if isinstance(value, np.ndarray) else value


def _json(value):
    """Python numbers and lists; None for what JSON has no number for: nan and infinities."""
    if value is None:
        return None
    if np.ndim(value) == 0:
        value = value.item() if hasattr(value, "item") else value
        return None if isinstance(value, float) and not np.isfinite(value) else value
    return [_json(part) for part in value]


def _flat(data):
    """A hashable form, nan equal to nan."""
    if isinstance(data, tuple):
        return tuple(_flat(part) for part in data)
    if isinstance(data, (np.ndarray, np.generic, float)):
        array = np.asarray(data, dtype=float)
        return array.shape, np.where(np.isnan(array), np.nan, array).tobytes()
    return data


def _restore(view, count, omitted, effective, names):
    order, shape, weights, readings, vector, least, most = view
    view = View(order, shape, weights, readings, MomentVector(*vector), least, most)
    return Summary._make(view, count=count, omitted=omitted, effective=effective, names=names)
