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

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from . import kernels as kernels
    from .accumulators.exact_moments import ExactMoments as ExactMoments
    from .accumulators.joint_moments import JointMoments as JointMoments
    from .accumulators.moments import Moments as Moments
    from .errors import MergeError as MergeError
    from .errors import MomentstreamError as MomentstreamError
    from .errors import NonFiniteError as NonFiniteError
    from .errors import OrderError as OrderError
    from .errors import StateError as StateError
    from .shards.combining import combine as combine
    from .shards.files import from_bytes as from_bytes
    from .shards.files import load as load
    from .shards.files import save as save
    from .statistics.joint_summary import JointSummary as JointSummary
    from .statistics.summary import Summary as Summary

__version__ = "0.1.0"

# Where each name lives; a name is fetched when it is first asked for, so that importing the
# package costs next to nothing, and the compiler comes with the first numeric work.
_HOMES = {
    "ExactMoments": ".accumulators.exact_moments",
    "JointMoments": ".accumulators.joint_moments",
    "JointSummary": ".statistics.joint_summary",
    "MergeError": ".errors",
    "Moments": ".accumulators.moments",
    "MomentstreamError": ".errors",
    "NonFiniteError": ".errors",
    "OrderError": ".errors",
    "StateError": ".errors",
    "Summary": ".statistics.summary",
    "combine": ".shards.combining",
    "from_bytes": ".shards.files",
    "load": ".shards.files",
    "save": ".shards.files",
}

__all__ = [*_HOMES, "__version__", "kernels"]


def __getattr__(name):
    if name == "kernels":
        return import_module(".kernels", __name__)
    try:
        home = _HOMES[name]
    except KeyError:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}") from None
    value = getattr(import_module(home, __name__), name)
    globals()[name] = value
    return value


def __dir__():
    return sorted(__all__)
