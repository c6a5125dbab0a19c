"""Moments of a stream of readings, or of many streams side by side."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ..codec import CONTINUED, register
from ..errors import MergeError
from ..statistics.readout import View, checked_degree
from ..statistics.summary import affine_view, scaled_vector
from .described import Described
from .door import Form
from .fed import FLUSH, Fed
from .given import checked_moments, guard
from .moments_payload import MOST_COUNTED, WEIGHTS, read_payload, write_payload
from .rows import removed_rows, rows_of, vector_of
from .settings import checked_order, checked_shape, choice
from .stream import POLICIES, Stream
from .transforms import TRANSFORMS

if TYPE_CHECKING:
    from collections.abc import Sequence
    from typing import Self

    from numpy.typing import ArrayLike


@register(1)
class Moments(Fed, Described):
    """Count, mean and central moments of everything that was fed, in one pass and bounded memory.

    =============  =================================================================
    feeding        ``update``, ``tap``
    combining      ``merge``, ``+``, ``sum(parts)``, ``remove``, ``affine``, ``copy``,
                   ``clear``
    reading        ``mean variance std skewness kurtosis central raw standardized
                   cumulant k_statistic minimum maximum dc rms ac_rms power
                   crest_factor``, ``summary``, ``channel``
    knowing        ``count omitted weight effective_count order shape names weights
                   nonfinite transform``
    saving         ``to_bytes``, ``from_bytes``, pickling, ``momentstream.save``
    =============  =================================================================

    Parameters
    ----------
    order : int, default 4
        The highest moment kept, 1 to 16.
    shape : int or tuple of int, default ()
        The shape of one reading; its channels are read each on its own.
    names : sequence of str, optional
        Names of the channels of one axis; they give the shape, and a data frame's columns are
        matched by them.
    weights : None, "frequency" or "reliability", default None
        Readings come with weights: how many times each occurred, or how far it is to be trusted.
    nonfinite : "raise", "omit" or "propagate", default "raise"
        What a NaN, an infinity, a null or a masked entry does.
    transform : None, "log", "reciprocal" or "abs", default None
        Keep the moments of log x, 1 / x or abs(x); a reading outside the domain is missing.

    Raises
    ------
    ValueError, TypeError
        An argument is not one of these.

    Notes
    -----
    However the readings are cut into calls, the result is the same to the last bit.  Order 4 keeps
    about 120 bytes of state, and while it is fed one block of 8192 readings (for channels up to
    2048 rows).  One accumulator belongs to one thread at a time; different ones may be fed at once,
    and the compiled parts run without the interpreter lock.  ``==`` compares settled states bit
    for bit, nan equal to nan.

    Examples
    --------
    >>> import momentstream as ms
    >>> morning = ms.Moments().update([4.1, 4.3, 4.2])
    >>> evening = ms.Moments().update(x / 10 for x in (39, 41))
    >>> day = morning + evening
    >>> day.count, round(day.mean(), 3), round(day.std(ddof=1), 4)
    (5, 4.12, 0.1483)
    """

    __slots__ = (
        "__weakref__",
        "_form",
        "_names",
        "_nonfinite",
        "_order",
        "_pending",
        "_reading",
        "_settled",
        "_shape",
        "_stream",
        "_transform",
        "_weights",
    )  # fmt: skip

    _must_agree = ("order", "shape", "weights", "transform")

    def __init__(
        self,
        order: int = 4,
        *,
        shape: int | tuple[int, ...] = (),
        names: Sequence[str] | None = None,
        weights: str | None = None,
        nonfinite: str = "raise",
        transform: str | None = None,
    ) -> None:
        self._order = checked_order(order)
        self._shape, self._names = checked_shape(shape, names)
        self._weights = choice("weights", weights, WEIGHTS)
        self._nonfinite = choice("nonfinite", nonfinite, POLICIES)
        self._transform = choice("transform", transform, TRANSFORMS)
        self._form = Form(self._shape, self._names, self._weights)
        self._begin()

    def _new_stream(self):
        return Stream(self._order, self._weights, self._form.size, self._nonfinite)

    # -- feeding -----------------------------------------------------------------------------

    def update(self, values: Any, weights: Any = None, *, threads: int = 1) -> Self:
        """Take readings in, all of them or, if the call raises, none.

        Parameters
        ----------
        values : number, array or iterable
            A number; an array of any real dtype, layout and shape, read in C order; what pandas,
            Polars or Arrow give; a list or another finite iterable; an iterator of numbers,
            consumed in bounded memory.  With ``shape`` a reading of that shape or a chunk
            ``(n, *shape)``, a data frame, or an iterator of readings.
        weights : number, array or iterator, optional
            With ``weights=`` declared: one entry a reading, or one number for all.  A reading of
            weight zero is left out and not counted.
        threads : int, default 1
            Python threads to reduce a large array with; the result is the same to the bit.

        Returns
        -------
        Moments
            The accumulator itself.

        Raises
        ------
        NonFiniteError
            A reading is missing and ``nonfinite="raise"``; ``.position`` says where.
        ValueError
            A shape, a weight or an integer beyond 64 bits does not fit.
        TypeError
            Text, objects, complex numbers, dates, ``None``.

        Notes
        -----
        About 1.3 times the time of ``numpy.sum`` for large arrays, 0.15 microseconds a float.

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.Moments().update(range(1, 5)).update(10.0).count
        5
        """
        if type(values) is float and weights is None and threads == 1 and values - values == 0.0:
            pending = self._pending
            if pending is not None:
                pending.append(values)
                if len(pending) == FLUSH:
                    self._flush()
                return self
        return self._update(values, weights, threads)

    # -- combining ---------------------------------------------------------------------------

    def merge(self, other: Self) -> Self:
        """Take another accumulator's readings in, as if they had been fed here.

        Parameters
        ----------
        other : Moments
            Of the same order, shape, names, weights and transform; it is not changed.  Where
            ``nonfinite`` differs, this one's stays.  Parts without names merge with named ones.

        Returns
        -------
        Moments
            The accumulator itself.

        Raises
        ------
        MergeError
            The two do not fit; nothing was changed.

        Notes
        -----
        A few microseconds, whatever was fed.

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.Moments().update([1.0, 2.0]).merge(ms.Moments().update([3.0, 10.0])).mean()
        4.0
        """
        self._gate(other, "merge")
        part = other._settle()
        self._check_room(part)
        self._stream.take_in(part)
        if self._names is None and other._names is not None:
            self._names = other._names
            self._form = Form(self._shape, self._names, self._weights)
        self._settled = None
        return self

    def _check_room(self, part):
        """Refuse a merge whose counts no 64-bit integer holds."""
        most = int(part.tally.max())
        if most < 2**61 and self._weights != "frequency" and int(self._stream.tally.max()) < 2**61:
            return
        total = self._settle().tally.astype(object) + part.tally
        if total.max() >= MOST_COUNTED:
            raise MergeError("the count would pass 2**63 - 1 readings; nothing was changed")

    def remove(self, other: Self) -> Self:
        """Take a part that is in here out again.

        Parameters
        ----------
        other : Moments
            What goes; it must have been merged or fed in before.

        Returns
        -------
        Moments
            The accumulator itself, settled; the extremes are unknown (nan) from then on.

        Raises
        ------
        MergeError
            The two do not fit, or more would go than there is; nothing was changed.

        Notes
        -----
        Not exact: the error is 64 units of the last place of the power sums of the *total*, so that
        little is known of a small rest.  A rest of one reading has no spread.

        Examples
        --------
        >>> import momentstream as ms
        >>> day = ms.Moments().update([1.0, 2.0, 3.0, 10.0])
        >>> day.remove(ms.Moments().update([3.0, 10.0])).mean()
        1.5
        """
        self._gate(other, "remove")
        total, part = self._settle(), other._settle()
        left = total.tally - part.tally
        if np.any(left[..., :2] < 0):
            which = 0 if np.any(left[..., 0] < 0) else 1
            raise MergeError(
                f"more would be removed than there is: {_counts(part.tally, which)} "
                f"{('readings', 'omitted readings')[which]} from {_counts(total.tally, which)}; "
                "nothing was changed"
            )
        with np.errstate(all="ignore"):
            rows = removed_rows(total.row, part.row, left, self._stream)
        self._replace(rows, left)
        extremes = self._stream.extremes
        touched = np.asarray(part.tally[..., 0] > 0)
        extremes[...] = total.extremes
        extremes[touched] = np.nan
        extremes[np.asarray(left[..., 0] == 0)] = (np.inf, -np.inf)
        return self

    def affine(self, scale: float = 1.0, offset: float = 0.0) -> Moments:
        """A new accumulator of ``scale * x + offset``.

        Parameters
        ----------
        scale, offset : float
            A negative scale exchanges the extremes.

        Returns
        -------
        Moments
            Settled; it can be merged and fed.

        Raises
        ------
        ValueError
            The accumulator has a transform (``summary().affine(...)`` exists), or a number is not
            finite.

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.Moments().update([10.0, 20.0]).affine(1.8, 32.0).mean()
        59.0
        """
        if self._transform is not None:
            raise ValueError(
                f"affine has no meaning on an accumulator with transform={self._transform!r}: "
                "summary().affine(...) maps the moments of the transformed readings"
            )
        settled = self._settle()
        changed = affine_view(self._view(), scale, offset)
        other = self._empty()
        with np.errstate(all="ignore"):
            rows = rows_of(changed.vector, other._stream)
            empty = settled.row[..., 3] == 0.0
            rows = np.where(np.asarray(empty)[..., None], settled.row, rows)
        other._replace(rows, settled.tally)
        ends = np.stack([np.asarray(changed.minimum), np.asarray(changed.maximum)], axis=-1)
        ends = np.where(
            np.asarray(empty)[..., None], settled.extremes, ends.reshape(settled.extremes.shape)
        )
        other._stream.extremes[...] = ends + 0.0
        return other

    def copy(self) -> Self:
        """An independent accumulator that continues bit for bit as this one would."""
        self._flush()
        other = self._empty()
        other._stream = self._stream.copy()
        other._settled = self._settled
        return other

    def channel(self, which: int | tuple[int, ...] | str) -> Moments:
        """The moments of one channel, as an accumulator of its own.

        Parameters
        ----------
        which : int, tuple of int, or str
            A place in ``shape``, or a name.

        Returns
        -------
        Moments
            Settled, of shape ``()``.

        Raises
        ------
        KeyError, IndexError, ValueError
            There is no such channel.

        Examples
        --------
        >>> import momentstream as ms
        >>> pair = ms.Moments(names=["inlet", "outlet"]).update([[4.0, 3.0], [6.0, 3.5]])
        >>> pair.channel("inlet").mean()
        5.0
        """
        place = self._place_of(which)
        settled = self._settle()
        other = Moments(
            self._order,
            weights=self._weights,
            nonfinite=self._nonfinite,
            transform=self._transform,
        )
        other._replace(settled.row[place], settled.tally[place])
        other._stream.extremes[...] = settled.extremes[place]
        return other

    def _place_of(self, which):
        if self._shape == ():
            raise ValueError("this accumulator has no channels: its shape is ()")
        if isinstance(which, str):
            if self._names is None or which not in self._names:
                raise KeyError(f"no channel is named {which!r}; the names are {self._names}")
            return self._names.index(which)
        places = which if isinstance(which, tuple) else (which,)
        places = tuple(checked_degree(i, -(2**62), "channel") for i in places)
        if len(places) != len(self._shape):
            raise IndexError(
                f"a channel of shape {self._shape} has {len(self._shape)} indices, got {which!r}"
            )
        for place, length in zip(places, self._shape, strict=True):
            if not -length <= place < length:
                raise IndexError(f"channel {which!r} is outside shape {self._shape}")
        places = tuple(i % length for i, length in zip(places, self._shape, strict=True))
        return int(np.ravel_multi_index(places, self._shape))

    @classmethod
    def from_central(
        cls,
        mean: ArrayLike,
        central: Sequence[ArrayLike],
        *,
        count: int,
        minimum: ArrayLike = np.nan,
        maximum: ArrayLike = np.nan,
    ) -> Self:
        """An accumulator from moments computed elsewhere; it can be merged and fed.

        Parameters
        ----------
        mean : float or array
            An array gives channels of its shape.
        central : sequence
            Central moments (divisor ``count``) from the second on; their number gives the order.
        count : int
            Number of readings, at least 1.
        minimum, maximum : float or array, default nan
            Extremes, if known.

        Returns
        -------
        Moments

        Raises
        ------
        ValueError, TypeError
            Moments are not finite, an even one is negative, or the count is no count.

        Examples
        --------
        >>> import momentstream as ms
        >>> ms.Moments.from_central(4.0, [12.5, 45.0], count=4).skewness()
        1.0182337649086284
        """
        level, moments, ends = checked_moments(mean, central, count, minimum, maximum)
        self = cls(len(moments) + 1, shape=level.shape)
        stream = self._stream
        lead = stream.tally.shape[:-1]
        moments = [values.reshape(lead) for values in moments]
        if stream.order != self._order:
            moments.append(guard(moments, level.reshape(lead)))
        with np.errstate(all="ignore"):
            vector = scaled_vector(level.reshape(lead), moments, float(count))
            tally = np.zeros_like(stream.tally)
            tally[..., 0] = count
            self._replace(rows_of(vector, stream), tally)
        self._stream.extremes[...] = np.stack([end.reshape(lead) for end in ends], axis=-1) + 0.0
        return self

    # -- state -------------------------------------------------------------------------------

    def _settle(self):
        self._flush()
        if self._settled is None:
            self._settled = self._stream.settle()
        return self._settled

    def _view(self):
        settled = self._settle()
        if settled.view is None:
            settled.view = self._view_of(settled)
        return settled.view

    def _view_of(self, settled):
        shape = self._shape
        tally = settled.tally.reshape((*shape, 4))
        extremes = settled.extremes.reshape((*shape, 2))
        # Empty is nan, as unknown is.
        seen = np.isfinite(extremes) | (tally[..., :1] > 0)
        ends = np.where(seen, extremes, np.nan)
        readings = tally[..., 0]
        return View(
            self._order,
            shape,
            self._weights,
            readings,
            vector_of(settled.row, self._stream.order, self._weights, shape),
            ends[..., 0],
            ends[..., 1],
        )

    def _empty(self):
        return Moments(
            self._order,
            shape=self._shape,
            names=self._names,
            weights=self._weights,
            nonfinite=self._nonfinite,
            transform=self._transform,
        )

    def _replace(self, rows, tally):
        """Become a settled state of these vectors and counts."""
        self._begin()
        self._stream.table[..., 0, :] = rows
        self._stream.tally[...] = tally

    # -- bytes -------------------------------------------------------------------------------

    def _write(self, writer, resume):
        self._flush()
        write_payload(writer, self, None if resume else self._settle())

    @classmethod
    def _from_payload(cls, reader, flags):
        return read_payload(cls, reader, bool(flags & CONTINUED))


def _counts(tally, which):
    return int(tally[which]) if tally.ndim == 1 else tally[:, which].tolist()
