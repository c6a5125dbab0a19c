"""The immutable summary of several variables read together."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ..algebra import joint as algebra
from ..algebra.central import MomentVector
from ..algebra.joint import JointVector
from ..display.page import table
from ..display.text import columns, label_text, number, one_line
from .joint import JointStatistics
from .joint_view import JointView
from .readout import View
from .summary import Summary, _flat, _json

if TYPE_CHECKING:
    from ..display.plots import Axes

_ROWS_SHOWN = 10
_COLUMNS_SHOWN = 8
_LONGEST_LABEL = 24


class JointSummary(JointStatistics):
    """What is known of several variables read together; immutable.

    Made by ``summary()`` of a ``JointMoments``.  ``str()`` is a table of the variables and their
    correlations; in a notebook it shows as one.

    ============  ==================================================================
    reading off   ``mean covariance correlation coskewness cokurtosis comoment
                  marginal along mardia regress principal_axes inertia_tensor
                  minimum maximum``, properties ``count omitted weight
                  effective_count order dim names weights``
    exporting     ``as_dict plot``
    ============  ==================================================================

    Notes
    -----
    Safe to share between threads; pickles.

    Examples
    --------
    >>> import momentstream as ms
    >>> pair = ms.JointMoments(None, names=["inlet", "outlet"])
    >>> print(pair.update([[4.0, 3.0], [6.0, 3.5], [5.0, 3.5]]).summary())
    3 rows
    variable     mean       std
    inlet           5  0.816497
    outlet    3.33333  0.235702
    <BLANKLINE>
    correlation     inlet    outlet
    inlet               1  0.866025
    outlet       0.866025         1
    """

    __slots__ = ("_data",)
    _data: JointView

    def __init__(self):
        raise TypeError("a JointSummary is made by summary() of a JointMoments")

    @classmethod
    def _make(cls, view):
        """A summary of its own copy of what ``view`` holds."""
        v = view.vector
        vector = JointVector(
            float(v.weight),
            _own(v.mean),
            _own(v.rest),
            _own(v.scale),
            tuple(_own(values) for values in v.sums),
            float(v.weight_scale),
            None if v.powers is None else _own(v.powers),
        )
        view = view._replace(vector=vector, minimum=_own(view.minimum), maximum=_own(view.maximum))
        self = object.__new__(cls)
        object.__setattr__(self, "_data", view)
        return self

    def __setattr__(self, name, value):
        raise AttributeError(f"a JointSummary is immutable; {name!r} cannot be set")

    def __delattr__(self, name):
        raise AttributeError(f"a JointSummary is immutable; {name!r} cannot be deleted")

    def __reduce__(self):
        return _restore, (tuple(self._data._replace(vector=tuple(self._data.vector))),)

    def __copy__(self):
        return self

    def __deepcopy__(self, memo):
        return self

    def __eq__(self, other):
        if not isinstance(other, JointSummary):
            return NotImplemented
        return _flat(self._data) == _flat(other._data)

    def __hash__(self):
        return hash(_flat(self._data))

    def _joint(self):
        return self._data

    # -- what it is of -----------------------------------------------------------------------

    @property
    def order(self) -> int:
        """The highest moment kept."""
        return self._data.order

    @property
    def dim(self) -> int:
        """The number of variables."""
        return self._data.dim

    @property
    def names(self) -> tuple[str, ...] | None:
        """The names of the variables, a tuple, or None."""
        return self._data.names

    @property
    def weights(self) -> str | None:
        """The kind of weights: None, "frequency" or "reliability"."""
        return self._data.weights

    def _each(self):
        """The statistics of every variable, as the channels of one summary."""
        view = self._data
        dim, v = view.dim, view.vector
        sums = [algebra.diagonal(values, dim, k) for k, values in enumerate(v.sums, start=2)]
        vector = MomentVector(
            v.weight, v.mean, v.rest, v.scale, np.array(sums).reshape(-1, dim), v.weight_scale
        )
        channels = View(view.order, (dim,), None, view.readings, vector, view.minimum, view.maximum)
        return Summary._make(channels, count=view.readings, omitted=view.omitted, effective=None)

    def _known(self):
        names = ("mean", "variance", "std", "skewness", "kurtosis")
        least = (1, 2, 2, 3, 4)
        return [name for name, order in zip(names, least, strict=True) if order <= self.order]

    # -- exporting ---------------------------------------------------------------------------

    def as_dict(self) -> dict[str, Any]:
        """Plain numbers, ready for JSON.

        Returns
        -------
        dict
            ``order dim names count omitted weight effective_count mean variance std skewness
            kurtosis minimum maximum`` (lists, one entry a variable), ``covariance correlation
            coskewness cokurtosis`` (nested lists), as far as the order goes; what is undefined, or
            beyond the range of doubles, is None.
        """
        each = self._each()
        fields = {
            "order": self.order,
            "dim": self.dim,
            "names": None if self.names is None else list(self.names),
            "count": self.count,
            "omitted": self.omitted,
            "weight": _json(self.weight),
            "effective_count": _json(self.effective_count),
        }
        for name in (*self._known(), "minimum", "maximum"):
            fields[name] = _json(getattr(each, name)())
        for order, names in (
            (2, ("covariance", "correlation")),
            (3, ("coskewness",)),
            (4, ("cokurtosis",)),
        ):
            if order <= self.order:
                fields |= {name: _json(getattr(self, name)()) for name in names}
        return fields

    def _labels(self):
        names = self.names or [str(i) for i in range(self.dim)]
        return [label_text(name, _LONGEST_LABEL) for name in names]

    def _counts(self):
        told = f"{number(self.count)} row{'' if self.count == 1 else 's'}"
        if self._data.weights == "reliability":
            told += f", effective count {number(self.effective_count)}"
        return told + (f", {number(self.omitted)} omitted" if self.omitted else "")

    def _variables(self):
        """Header, rows and a note on what is not shown."""
        each, labels = self._each(), self._labels()
        known = [name for name in self._known() if name != "variance"]
        values = [getattr(each, name)() for name in known]
        rows = [
            (label, *(number(float(v[i])) for v in values))
            for i, label in enumerate(labels[:_ROWS_SHOWN])
        ]
        return ("variable", *known), rows, _hidden(self.dim - _ROWS_SHOWN)

    def _correlations(self):
        """Header, rows and a note on what is not shown."""
        shown = self._labels()[:_COLUMNS_SHOWN]
        correlation = self.correlation()
        rows = [
            (label, *(number(float(v)) for v in correlation[i, : len(shown)]))
            for i, label in enumerate(shown)
        ]
        return ("correlation", *shown), rows, _hidden(self.dim - _COLUMNS_SHOWN)

    def _tables(self):
        return [self._variables()] + ([self._correlations()] if self.order >= 2 else [])

    def __str__(self) -> str:
        tables = [
            "\n".join(columns(header, rows) + ([f"... {note}"] if note else []))
            for header, rows, note in self._tables()
        ]
        return self._counts() + "\n" + "\n\n".join(tables)

    def __repr__(self) -> str:
        fields = [("dim", self.dim), ("order", self.order), ("count", self.count)]
        return one_line("JointSummary", fields)

    def _repr_html_(self) -> str:
        captions = [self._counts(), "correlation"]
        return "".join(
            table(header, rows, f"{caption}; {note}" if note else caption)
            for caption, (header, rows, note) in zip(captions, self._tables(), strict=False)
        )

    def plot(self, ax: Axes | None = None) -> Axes:
        """Draw the correlation matrix with the variables' names; takes Matplotlib, the extra
        ``plot``.

        Parameters
        ----------
        ax : matplotlib.axes.Axes, optional
            Where to draw; a new figure's axes if not given.

        Returns
        -------
        matplotlib.axes.Axes

        Raises
        ------
        OrderError
            Only means are kept.
        ImportError
            Matplotlib is not installed.
        """
        from ..display.plots import correlation_matrix

        names = self.names or [str(i) for i in range(self.dim)]
        return correlation_matrix(self.correlation(), names, ax)


def _hidden(more):
    return f"{more} more variable{'' if more == 1 else 's'}" if more > 0 else ""


def _own(values):
    copied = np.array(values, dtype=float)
    copied.flags.writeable = False
    return copied


def _restore(fields):
    view = JointView(*fields)
    return JointSummary._make(view._replace(vector=JointVector(*view.vector)))
