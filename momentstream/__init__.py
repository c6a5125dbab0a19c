"""Moments of streams, shards and windows: fed once, kept small, combined, right to the last bits.

Examples
--------
>>> import momentstream as ms
>>> part_1 = ms.Moments().update([1.0, 2.0])
>>> part_2 = ms.Moments().update([3.0, 10.0])
>>> whole = ms.combine([part_1, part_2])
>>> whole.mean(), whole.variance(), whole.skewness()
(4.0, 12.5, 1.0182337649086284)
"""

from typing import TYPE_CHECKING

from .accumulators.moments import Moments
from .errors import MergeError, MomentstreamError, NonFiniteError, OrderError, StateError
from .shards.combining import combine
from .shards.files import from_bytes, load, save
from .statistics.summary import Summary

if TYPE_CHECKING:
    from . import kernels

__version__ = "0.1.0"

__all__ = [
    "MergeError",
    "Moments",
    "MomentstreamError",
    "NonFiniteError",
    "OrderError",
    "StateError",
    "Summary",
    "__version__",
    "combine",
    "from_bytes",
    "kernels",
    "load",
    "save",
]


def __getattr__(name):
    # The kernels bring the compiler with them, so they come when they are asked for.
    if name == "kernels":
        from importlib import import_module

        return import_module(".kernels", __name__)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")


def __dir__():
    return sorted(__all__)
