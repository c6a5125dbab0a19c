"""One accumulator of many, by a balanced tree."""

from __future__ import annotations

from typing import TYPE_CHECKING, TypeVar

from ..accumulators.base import Accumulator

if TYPE_CHECKING:
    from collections.abc import Iterable

Part = TypeVar("Part", bound=Accumulator)


def combine(parts: Iterable[Part]) -> Part:
    """Combine accumulators into a new one.

    Parameters
    ----------
    parts : iterable of accumulators
        All of one class and configuration; none is changed.  They are taken one by one, and only
        as many as the depth of the tree are held at a time.

    Returns
    -------
    accumulator
        A new one, of the parts' class.

    Raises
    ------
    ValueError
        There are no parts.
    MergeError
        Two parts do not fit.
    TypeError
        A part is no accumulator.

    Notes
    -----
    A balanced tree: each part passes through log2(n) merges, which keeps rounding small.

    Examples
    --------
    >>> import momentstream as ms
    >>> parts = (ms.Moments().update([k, k + 1.0]) for k in range(100))
    >>> ms.combine(parts).count
    200
    """
    if isinstance(parts, Accumulator):
        raise TypeError("combine takes an iterable of accumulators, got one; copy() copies it")
    levels: list = []
    for number, part in enumerate(parts):
        if not isinstance(part, Accumulator):
            raise TypeError(
                f"combine takes accumulators, got {type(part).__name__} as part {number}"
            )
        carried, owned = part, False
        level = 0
        while level < len(levels) and levels[level] is not None:
            waiting, waiting_owned = levels[level]
            carried = waiting.merge(carried) if waiting_owned else waiting + carried
            owned = True
            levels[level] = None
            level += 1
        if level == len(levels):
            levels.append(None)
        levels[level] = (carried, owned)
    whole = None
    for entry in levels:
        if entry is None:
            continue
        part, owned = entry
        if whole is None:
            whole = part if owned else part.copy()
        else:
            # The older parts go first.
            whole = part.merge(whole) if owned else part + whole
    if whole is None:
        raise ValueError("combine needs at least one part, got none")
    return whole
