"""What an accumulator tells of itself: how it was made, what it counted, how it prints."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ..algebra.central import shift
from ..display.text import one_line
from ..statistics.readout import Statistics
from ..statistics.summary import Summary

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..statistics.readout import Value


class Configured:
    """How an accumulator was made."""

    __slots__ = ()

    if TYPE_CHECKING:
        _order: int
        _names: tuple[str, ...] | None
        _weights: str | None
        _nonfinite: str

    @property
    def order(self) -> int:
        """The highest moment kept."""
        return self._order

    @property
    def names(self) -> tuple[str, ...] | None:
        """The names of the channels, a tuple, or None."""
        return self._names

    @property
    def weights(self) -> str | None:
        """The kind of weights: None, "frequency" or "reliability"."""
        return self._weights

    @property
    def nonfinite(self) -> str:
        """What a missing reading does: "raise", "omit" or "propagate"."""
        return self._nonfinite


class Described(Configured, Statistics):
    """The properties of an accumulator that has a settled state, and its texts."""

    __slots__ = ()

    if TYPE_CHECKING:
        _shape: tuple[int, ...]
        _transform: str | None

        def _settle(self) -> Any: ...

    @property
    def shape(self) -> tuple[int, ...]:
        """The shape of one reading."""
        return self._shape

    @property
    def transform(self) -> str | None:
        """What is done to readings first: None, "log", "reciprocal" or "abs"."""
        return self._transform

    @property
    def count(self) -> int | NDArray[np.int64]:
        """Readings taken in, an int, or array of ``shape``; of frequencies the sum."""
        return self._whole_number(self._settle().tally[..., 0])

    @property
    def omitted(self) -> int | NDArray[np.int64]:
        """Readings left out as missing.  int, or array of ``shape``."""
        return self._whole_number(self._settle().tally[..., 1])

    @property
    def weight(self) -> Value:
        """The sum of the weights (without weights: the count).  float, or array of ``shape``."""
        view = self._view()
        with np.errstate(all="ignore"):
            return self._read(shift(view.vector.weight, view.vector.weight_scale), view)

    @property
    def effective_count(self) -> Value:
        """How many readings of equal weight would tell as much (Kish): W**2 / V2 for reliability
        weights, else the weight.  float, or array of ``shape``; 0 when empty."""
        view = self._view()
        if self._weights != "reliability":
            return self.weight
        with np.errstate(all="ignore"):
            v = view.vector
            value = v.weight * v.weight / np.where(v.weight > 0.0, v.powers[0], 1.0)
            return self._read(value, view)

    def summary(self) -> Summary:
        """The immutable summary of what has been fed so far.

        Examples
        --------
        >>> import momentstream as ms
        >>> print(ms.Moments().update([1.0, 2.0, 3.0, 10.0]).summary())
        count            4
        mean             4
        variance      12.5
        std        3.53553
        skewness   1.01823
        kurtosis   -0.7696
        minimum          1
        maximum         10
        """
        return Summary._make(
            self._view(),
            count=self.count,
            omitted=self.omitted,
            effective=self.effective_count,
            names=self._names,
        )

    def __repr__(self) -> str:
        fields: list[tuple[str, Any]] = [("order", str(self._order))]
        if self._shape:
            fields.append(("shape", str(self._shape)))
        fields.append(("count", _span(self.count)))
        for name in ("weights", "transform"):
            if getattr(self, name) is not None:
                fields.append((name, repr(getattr(self, name))))
        omitted = self.omitted
        if np.any(omitted):
            fields.append(("omitted", _span(omitted)))
        if not self._shape:
            for name, least in (("mean", 1), ("std", 2), ("skewness", 3), ("kurtosis", 4)):
                if self._order >= least:
                    fields.append((name, getattr(self, name)()))
        return one_line(type(self).__name__, fields)

    def _repr_html_(self) -> str:
        return self.summary()._repr_html_()

    def _whole_number(self, values):
        if self._shape == ():
            return int(values)
        return values.reshape(self._shape).copy()


def _span(values):
    least, most = int(np.min(values)), int(np.max(values))
    return f"{least:,}" if least == most else f"{least:,}..{most:,}"
