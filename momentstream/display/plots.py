"""Pictures; Matplotlib is imported when one is drawn."""

from __future__ import annotations

from typing import TYPE_CHECKING

from .text import label_text, number

if TYPE_CHECKING:
    from matplotlib.axes import Axes as Axes

_WRITTEN_IN = 12


def correlation_matrix(values, labels, ax: Axes | None = None) -> Axes:
    """Draw a correlation matrix in colours from -1 to 1, up to 12 variables with the values.

    Parameters
    ----------
    values : ndarray, shape (dim, dim)
    labels : sequence of str
    ax : matplotlib.axes.Axes, optional
        A new figure's if not given.

    Returns
    -------
    matplotlib.axes.Axes
    """
    ax = _axes(ax)
    image = ax.imshow(values, cmap="RdBu_r", vmin=-1.0, vmax=1.0)
    ax.figure.colorbar(image, ax=ax, label="correlation")
    # A dollar sign would begin a formula.
    shown = [label_text(label, 20).replace("$", r"\$") for label in labels]
    ax.set_xticks(range(len(shown)), shown, rotation=45, ha="right")
    ax.set_yticks(range(len(shown)), shown)
    if len(shown) <= _WRITTEN_IN:
        for row, line in enumerate(values):
            for column, value in enumerate(line):
                colour = "white" if abs(value) > 0.6 else "black"
                text = number(float(value), 2)
                ax.text(column, row, text, ha="center", va="center", color=colour)
    return ax


def _axes(ax):
    if ax is not None:
        return ax
    try:
        import matplotlib.pyplot
    except ImportError as error:
        raise ImportError(
            'this needs Matplotlib: install momentstream with its extra "plot"', name="matplotlib"
        ) from error
    return matplotlib.pyplot.subplots(layout="constrained")[1]
