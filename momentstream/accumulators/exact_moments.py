"""Moments without rounding: any order of readings, any sharding, the same bits.

The bytes (payload of a frame of kind 2; ``momentstream.codec`` describes the frame):

==================  ===============================================================================
type                meaning
==================  ===============================================================================
2 x uint8           order p; nonfinite 0 raise, 1 omit, 2 propagate
5 x uint64          readings counted, readings omitted, NaN, +inf and -inf among the counted
uint16              exponents in use
for each            from the lowest up: int16 e, then for k = 1 .. p the sum of M**k over the
                    readings M * 2**e, two's complement in 8 (k + 1) bytes
uint8               1 if the extremes are known
2 doubles           then the least and the greatest finite reading (+inf, -inf without any)
==================  ===============================================================================

All is little-endian.  A double has the exponent of its last bit, e = -1074 .. 971, and
abs(M) < 2**53; an integer that no double holds has e = 0 and abs(M) < 2**64.  Before the extremes
the bytes depend on the content alone: an exponent whose sums are all zero is not written.
"""

from __future__ import annotations

from fractions import Fraction
from typing import TYPE_CHECKING, Any

import numpy as np

from ..codec import Writer, register
from ..errors import MergeError, StateError
from ..statistics.exact import ExactStatistics, Integers, exact_view
from ..statistics.readout import View
from .described import Described
from .door import Form
from .exact_stream import MOST_COUNTED, ExactStream, Settled, impossible
from .fed import FLUSH, Fed
from .settings import checked_order, choice
from .stream import POLICIES

if TYPE_CHECKING:
    from typing import Self

_COUNTS = ("count", "omitted", "nans", "plus", "minus")
_HIGHEST = 4


@register(2)
class ExactMoments(Fed, Described, ExactStatistics):
    """Moments of a stream without rounding, each statistic rounded once when it is read.

    The same readings give the same bytes and the same numbers, whatever their order, the number of
    shards and the shape of the tree that combined them; a part that is removed leaves no trace.

    =============  =================================================================
    feeding        ``update``, ``tap``
    combining      ``merge``, ``+``, ``sum(parts)``, ``remove``, ``copy``, ``clear``
    reading        correctly rounded: ``mean variance std skewness kurtosis central
                   raw standardized cumulant k_statistic rms``; from those
                   ``minimum maximum dc ac_rms power crest_factor``, ``summary``;
                   without any rounding: ``as_fractions``
    knowing        ``count omitted weight effective_count order nonfinite``
    saving         ``to_bytes``, ``from_bytes``, pickling, ``momentstream.save``
    =============  =================================================================

    Parameters
    ----------
    order : int, default 4
        The highest moment kept, 1 to 4.
    nonfinite : "raise", "omit" or "propagate", default "raise"
        What a NaN, an infinity, a null or a masked entry does.

    Raises
    ------
    ValueError, TypeError
        An argument is not one of these.

    Notes
    -----
    The state holds, for each binary exponent among the readings, the sums of the powers of the
    integers that the readings are multiples of: 114 bytes an exponent at order 4, some 2.4 kB for
    readings of a normal law.  Some 7 ns a reading; reading a statistic costs tens of microseconds.
    Integers of 64 bits are taken as they are.  ``==`` compares the content, extremes aside.

    Correct rounding is to the nearest double, ties to even, subnormal numbers and overflow
    included.

    Examples
    --------
    >>> import momentstream as ms
    >>> ms.ExactMoments().update([1e17, 1.0, -1e17, 1.0]).mean()
    0.5
    >>> day = ms.ExactMoments().update([0.1, 0.2, 0.3])
    >>> night = ms.ExactMoments().update([0.7, 1e9])
    >>> (day + night).remove(day) == night
    True
    """

    __slots__ = (
        "__weakref__",
        "_form",
        "_nonfinite",
        "_order",
        "_pending",
        "_reading",
        "_settled",
        "_stream",
    )  # fmt: skip

    _highest_order = _HIGHEST
    _shape = ()
    _names = None
    _weights = None
    _transform = None
    _must_agree = ("order",)

    def __init__(self, order: int = 4, *, nonfinite: str = "raise") -> None:
        self._order = checked_order(order, _HIGHEST)
        self._nonfinite = choice("nonfinite", nonfinite, POLICIES)
        self._form = Form((), None)
        self._begin()

    def _new_stream(self):
        return ExactStream(self._order, self._nonfinite)

    def _none_pending(self):
        # Nothing may wait where the next readings may be too many.
        return [] if self._stream.count < MOST_COUNTED - 2 * FLUSH else None

    # -- feeding -----------------------------------------------------------------------------

    def update(self, values: Any, *, threads: int = 1) -> Self:
        """Take readings in, all of them or, if the call raises, none.

        Parameters
        ----------
        values : number, array or iterable
            A number; an array of any real dtype, layout and shape; what pandas, Polars or Arrow
            give; a list or another finite iterable; an iterator of numbers, consumed in bounded
            memory.  Integers of up to 64 bits are taken exactly.
        threads : int, default 1
            Python threads to reduce a large array with.

        Returns
        -------
        ExactMoments
            The accumulator itself.

        Raises
        ------
        NonFiniteError
            A reading is missing and ``nonfinite="raise"``; ``.position`` says where.
        ValueError
            An integer is outside -2**63 .. 2**64 - 1.
        TypeError
            Text, objects, complex numbers, dates, ``None``.

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.ExactMoments().update([2**64 - 1, 2**64 - 3]).variance()
        1.0
        """
        if type(values) is float and threads == 1 and values - values == 0.0:
            pending = self._pending
            if pending is not None:
                pending.append(values)
                if len(pending) == FLUSH:
                    self._flush()
                return self
        return self._update(values, None, threads)

    # -- combining ---------------------------------------------------------------------------

    def merge(self, other: Self) -> Self:
        """Take another accumulator's readings in, as if they had been fed here.

        Parameters
        ----------
        other : ExactMoments
            Of the same order; it is not changed.  Where ``nonfinite`` differs, this one's stays.

        Returns
        -------
        ExactMoments
            The accumulator itself.

        Raises
        ------
        MergeError
            The two do not fit; nothing was changed.

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.ExactMoments().update([1.0, 2.0]).merge(ms.ExactMoments().update([3.0])).mean()
        2.0
        """
        self._gate(other, "merge")
        if other is self:
            other = self.copy()
        part = other._stream
        waiting = list(other._pending or ())
        if self.count + part.count + len(waiting) >= MOST_COUNTED:
            raise MergeError("the count would reach 2**63 - 1 readings; nothing was changed")
        if self.omitted + part.omitted >= MOST_COUNTED:
            raise MergeError("omitted would reach 2**63 - 1 readings; nothing was changed")
        # The order of readings does not matter: what waits there may wait here.
        if waiting and self._pending is not None:
            self._pending += waiting
            if len(self._pending) >= FLUSH:
                self._flush()
        if part.count or part.omitted:
            self._stream.take_in(part)
            if self._none_pending() is None:
                self._flush()
        self._settled = None
        return self

    def remove(self, other: Self) -> Self:
        """Take a part that is in here out again, without a trace.

        Parameters
        ----------
        other : ExactMoments
            What goes; it must have been merged or fed in before.

        Returns
        -------
        ExactMoments
            The accumulator itself; the extremes are unknown (nan) from then on.

        Raises
        ------
        MergeError
            The two do not fit, or the rest would be sums that no readings have; nothing was
            changed.

        Examples
        --------
        >>> import momentstream as ms
        >>> both = ms.ExactMoments().update([0.1, 0.2, 1e300])
        >>> both.remove(ms.ExactMoments().update([1e300])).mean() == 0.15000000000000002
        True
        """
        self._gate(other, "remove")
        total, part = self._settle(), other._settle()
        mine, theirs = self._stream, other._stream
        counts = {name: getattr(mine, name) - getattr(theirs, name) for name in _COUNTS}
        for name, left in counts.items():
            if left < 0:
                raise MergeError(
                    f"more would be removed than there is: {getattr(theirs, name)} readings "
                    f"({name}) from {getattr(mine, name)}; nothing was changed"
                )
        content = {e: list(sums) for e, sums in total.content.items()}
        for e, sums in part.content.items():
            before = content.get(e, [0] * self._order)
            content[e] = [a - b for a, b in zip(before, sums, strict=True)]
        content = {e: content[e] for e in sorted(content) if any(content[e])}
        finite = counts["count"] - counts["nans"] - counts["plus"] - counts["minus"]
        fault = "readings left without a count" if finite < 0 else impossible(finite, content)
        if fault is not None:
            raise MergeError(
                f"what would be left is of no readings ({fault}): the other was never taken in "
                "here. Nothing was changed"
            )
        stream = self._new_stream()
        stream.replace(content)
        for name, left in counts.items():
            setattr(stream, name, left)
        if counts["count"] > 0:
            stream.extremes[:] = mine.extremes if theirs.count == 0 else np.nan
        self._stream = stream
        self._settled = None
        return self

    def copy(self) -> Self:
        """An independent accumulator of the same content."""
        other = self._empty()
        other._pending = list(self._pending or ())
        other._stream = self._stream.copy()
        other._settled = self._settled
        return other

    def _empty(self):
        return type(self)(self._order, nonfinite=self._nonfinite)

    # -- reading -----------------------------------------------------------------------------

    @property
    def count(self) -> int:
        """Readings taken in."""
        return self._stream.count + len(self._pending or ())

    @property
    def omitted(self) -> int:
        """Readings left out as missing."""
        return self._stream.omitted

    @property
    def weight(self) -> float:
        """The count, as a float."""
        return float(self.count)

    @property
    def effective_count(self) -> float:
        """The count, as a float."""
        return float(self.count)

    def as_fractions(self) -> dict[str, int | Fraction | None]:
        """Count, mean and central moments without any rounding.

        Returns
        -------
        dict
            ``count`` (int), ``mean`` and ``central_2`` to the order kept (``fractions.Fraction``;
            None where there are no readings, or some are not finite).

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.ExactMoments(2).update([0, 1, 1]).as_fractions()
        {'count': 3, 'mean': Fraction(2, 3), 'central_2': Fraction(2, 9)}
        """
        result: dict[str, int | Fraction | None] = {"count": self.count}
        found = self._integers()
        names = ["mean", *(f"central_{k}" for k in range(2, self._order + 1))]
        if found is None:
            return result | dict.fromkeys(names)
        unit = Fraction(2) ** found.exponent
        result["mean"] = unit * Fraction(found.sums[0], found.readings)
        for k, d in enumerate(found.deviations[1:], start=2):
            result[f"central_{k}"] = unit**k * Fraction(d, found.readings**k)
        return result

    # -- state -------------------------------------------------------------------------------

    def _settle(self):
        self._flush()
        if self._settled is None:
            self._settled = Settled(self._stream.content(), self._order)
        return self._settled

    def _integers(self):
        settled = self._settle()
        stream = self._stream
        if stream.count == 0 or stream.finite < stream.count:
            return None
        return Integers(stream.count, settled.exponent, settled.sums)

    def _view(self) -> View:
        settled = self._settle()
        if settled.view is None:
            settled.view = self._view_of(settled)
        return settled.view

    def _view_of(self, settled):
        stream = self._stream
        if stream.count == 0:
            return exact_view(Integers(0, 0, [0] * self._order), self._order, np.nan, np.nan)
        least, most = stream.extremes.tolist()
        least = -np.inf if stream.minus else np.inf if stream.plus and least > most else least
        most = np.inf if stream.plus else -np.inf if stream.minus and most < least else most
        if stream.nans:
            least = most = np.nan
        if stream.finite == stream.count:
            return exact_view(self._integers(), self._order, least, most)
        mean = np.nan if stream.nans or (stream.plus and stream.minus) else np.inf
        view = exact_view(Integers(stream.count, 0, [0] * self._order), self._order, least, most)
        vector = view.vector._replace(
            mean=np.float64(-mean if stream.minus else mean),
            sums=np.full(self._order - 1, np.nan),
        )
        return view._replace(vector=vector)

    def __eq__(self, other: object) -> bool:
        if type(other) is not type(self):
            return NotImplemented
        return self._content_bytes() == other._content_bytes()

    __hash__ = None  # type: ignore[assignment]

    # -- bytes -------------------------------------------------------------------------------

    def _content_bytes(self):
        writer = Writer()
        self._write_content(writer)
        return writer.payload()

    def _write_content(self, writer):
        content, stream = self._settle().content, self._stream
        writer.pack("BB", self._order, POLICIES.index(self._nonfinite))
        writer.pack("5Q", *(getattr(stream, name) for name in _COUNTS))
        writer.pack("H", len(content))
        for exponent, sums in content.items():
            writer.pack("h", exponent)
            for k, value in enumerate(sums, start=1):
                writer.whole(value, 8 * (k + 1))

    def _write(self, writer, resume):
        self._write_content(writer)
        known = not np.isnan(self._stream.extremes[0])
        writer.pack("B", known)
        if known:
            writer.doubles(self._stream.extremes)

    @classmethod
    def _from_payload(cls, reader, flags):
        order, policy = reader.unpack("BB")
        if not (1 <= order <= _HIGHEST and policy < len(POLICIES)):
            raise StateError("state holds settings that do not exist")
        counts = dict(zip(_COUNTS, reader.unpack("5Q"), strict=True))
        (bins,) = reader.unpack("H")
        content = {}
        for _ in range(bins):
            (exponent,) = reader.unpack("h")
            if not -1074 <= exponent <= 971:
                raise StateError(f"state holds an exponent that no double has: {exponent}")
            content[exponent] = [reader.whole(8 * (k + 1)) for k in range(1, order + 1)]
        (known,) = reader.unpack("B")
        extremes = reader.doubles((2,)) if known else np.full(2, np.nan)
        finite = counts["count"] - counts["nans"] - counts["plus"] - counts["minus"]
        if max(counts.values()) >= MOST_COUNTED or finite < 0:
            raise StateError("state holds counts that cannot be")
        fault = impossible(finite, content)
        if fault is None and not _possible_extremes(extremes, known, finite, counts["count"]):
            fault = f"extremes that {finite} finite readings cannot have"
        if fault is not None:
            raise StateError(f"state is of no readings: {fault}")
        self = cls(order, nonfinite=POLICIES[policy])
        stream = self._stream
        if content:
            stream.replace(content)
        stream.extremes[:] = extremes
        for name, value in counts.items():
            setattr(stream, name, value)
        return self


def _possible_extremes(extremes, known, finite, count):
    if not known:
        return count > 0
    least, most = extremes.tolist()
    if finite == 0:
        return (least, most) == (np.inf, -np.inf)
    return -np.inf < least <= most < np.inf
