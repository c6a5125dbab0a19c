"""How accumulators of numbers are fed: single floats wait in a list, all else comes by the door."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import MergeError, NonFiniteError
from .base import Accumulator
from .conversion import pack_floats
from .door import STRETCH, Form, stretches
from .stream import Refusal
from .transforms import transformed

if TYPE_CHECKING:
    from typing import Self

FLUSH = 1024  # single floats wait until there are so many


class Fed(Accumulator):
    """Base of accumulators that hold a stream, something with ``feed`` and ``copy``.

    A subclass has ``_new_stream``, calls ``_begin`` when its settings are there, and has an
    ``update`` of its own that deals with single floats and leaves the rest to ``_update``.
    """

    __slots__ = ()

    if TYPE_CHECKING:
        _form: Form
        _must_agree: tuple[str, ...]
        _names: tuple[str, ...] | None
        _nonfinite: str
        _pending: list[float] | None
        _reading: bool
        _settled: Any
        _shape: tuple[int, ...]
        _stream: Any
        _transform: str | None
        _weights: str | None

        def _new_stream(self) -> Any: ...

    def _begin(self):
        """Be empty."""
        self._reading = False  # whether an iterator is being read
        self._settled = None
        self._stream = self._new_stream()
        self._pending = self._none_pending()

    def _none_pending(self) -> list[float] | None:
        # Where something has to be known of every reading at once, none may wait.
        waits = self._shape == () and self._weights is None and self._transform is None
        return [] if waits else None

    def _update(self, values, weights, threads):
        self._idle()
        if type(threads) is not int or threads < 1:
            raise ValueError(f"threads must be an integer of at least 1, got {threads!r}")
        if (weights is None) != (self._weights is None):
            if weights is None:
                raise ValueError(
                    f"weights are missing: this accumulator has weights={self._weights!r}"
                )
            raise ValueError(
                'weights were given to an accumulator without: make it with weights="frequency" '
                'or weights="reliability"'
            )
        self._flush()
        single, parts = stretches(values, weights, self._form)
        if single and self._transform is None:
            self._feed(self._stream, parts, threads)
        else:
            stream = self._stream.copy()
            self._pending, self._reading = None, True
            try:
                self._feed(stream, parts, threads)
            finally:
                self._pending, self._reading = self._none_pending(), False
            self._stream = stream
        self._settled = None
        return self

    def _feed(self, stream, parts, threads):
        done = 0
        for part in parts if self._transform is None else self._transformed(parts):
            try:
                stream.feed(*part, threads)
            except Refusal as refusal:
                raise self._error_of(refusal, done) from None
            done += len(part[0])

    def _idle(self):
        """Refuse a change while an iterator, which may itself feed this accumulator, is read."""
        if self._reading:
            raise RuntimeError(
                "the accumulator is being fed by an iterator that changes it; nothing was taken in"
            )

    def _gate(self, other, verb):
        """Refuse a change by an accumulator that does not fit."""
        self._idle()
        self._same_type(other)
        for name in self._must_agree:
            mine, theirs = getattr(self, name), getattr(other, name)
            # The number of variables may be untold yet.
            told = name != "dim" or None not in (mine, theirs)
            if told and mine != theirs:
                raise MergeError(
                    f"{verb} needs equal {name}: this one has {name}={mine!r}, the other "
                    f"{name}={theirs!r}; make both with the same {name}. Nothing was changed"
                )
        mine, theirs = self._names, other._names
        if mine is not None and theirs is not None and mine != theirs:
            raise MergeError(
                f"{verb} needs equal names: this one has {mine}, the other {theirs}. "
                "Nothing was changed"
            )

    def _transformed(self, parts):
        """The stretches after the transform, cut so that memory stays bounded."""
        for x, low, w in parts:
            rows = max(1, STRETCH // (self._form.size or 1))
            for start in range(0, len(x), rows):
                cut = slice(start, start + rows)
                pair = x[cut], None if low is None else low[cut]
                pair = transformed(*pair, self._transform, self._nonfinite)
                yield (*pair, None if w is None else w[cut])

    def _error_of(self, refusal, done):
        """What the user is told of a refused reading or weight; ``done`` readings came before."""
        row = refusal.row + done
        if refusal.fault is not None:
            return ValueError(
                f"{refusal.fault}, got {refusal.value!r} at {row}; nothing was taken in"
            )
        position: int | tuple[int, ...] = row
        if refusal.column is not None:
            places = np.unravel_index(refusal.column, self._shape)
            position = (row, *(int(place) for place in places))
        what = "reading" if self._transform is None else f"{self._transform} of the reading"
        return NonFiniteError(
            f"{what} at {position} is {refusal.value!r}; nothing was taken in. "
            'nonfinite="omit" leaves such readings out and counts them, "propagate" lets them '
            "through",
            position,
        )

    def _flush(self):
        if self._pending:
            x = pack_floats(self._pending)
            self._stream.feed(x, None, None)
            self._pending = self._none_pending()
            self._settled = None

    def clear(self) -> Self:
        """Forget everything that was fed; returns the accumulator itself."""
        self._idle()
        self._begin()
        return self
