"""The bytes of ``JointMoments``, field by field.

Payload of a frame of kind 3 (``momentstream.codec`` describes the frame; d variables, order p):

==================  ===============================================================================
type                meaning
==================  ===============================================================================
4 x uint8           order; weights 0 none, 1 frequency, 2 reliability; nonfinite 0 raise, 1 omit,
                    2 propagate; 1 if names follow
uint32              d; 0 where no row has told yet, and then nothing follows
texts               the d names, if any
2 int64             rows counted, rows omitted
d x 2 doubles       least and greatest reading (+inf, -inf when empty, NaN when unknown)
doubles             the vector: W; d means, d rests, d scales s; for k = 2 .. p (at least for k = 2)
                    the sums of the products of k deviations, each combination with repetition of
                    k variables once, in lexicographic order; with weights their scale t, V2, V3,
                    V4.  The mean of variable j is (mean + rest) * 2**s_j; sums stand in units of
                    2**t times 2**s_j for each variable in them, W of 2**t, V_j of 2**(j * t)
==================  ===============================================================================

A working state (flag 1) has instead of the last the base's vector, and then:

==================  ===============================================================================
uint64              finished blocks n; the tree has a vector for every bit set in n
uint32              f, the rows of the unfinished block
uint8               1 if second parts of wide integers follow
doubles             a vector for every bit set in n, from the lowest up
f x d doubles       the rows of the unfinished block; second parts likewise, if any
f doubles           their weights, with weights
==================  ===============================================================================
"""

import numpy as np

from ..errors import StateError
from .joint_stream import kept_order, sums_of
from .moments_payload import MOST_COUNTED, WEIGHTS
from .stream import POLICIES

_LARGEST_SCALE = 4096
_FIRST_LEVEL = 5  # the row of a table where the levels of the tree begin
_WIDEST = 2**20


def write_joint(writer, moments, settled):
    """Write a ``JointMoments``: its settled state, or the working state where that is None."""
    dim, names = moments._dim or 0, moments.names
    writer.pack(
        "4BI",
        moments.order,
        WEIGHTS.index(moments.weights),
        POLICIES.index(moments.nonfinite),
        names is not None,
        dim,
    )
    if not dim:
        return
    for name in names or ():
        writer.text(name)
    stream = moments._stream
    state = stream if settled is None else settled
    writer.integers(state.tally[:2])
    writer.doubles(state.extremes)
    writer.doubles(stream.table[0] if settled is None else state.row)
    if settled is None:
        fill = stream.fill
        low = stream.low is not None and bool(stream.low[:fill].any())
        writer.pack("QIB", stream.blocks, fill, low)
        for level in range(stream.blocks.bit_length()):
            if stream.blocks >> level & 1:
                writer.doubles(stream.table[_FIRST_LEVEL + level])
        if fill:
            writer.doubles(stream.buffer[:fill])
            if low:
                writer.doubles(stream.low[:fill])
            if stream.weighted:
                writer.doubles(stream.w[:fill])


def read_joint(cls, reader, working):
    """The ``JointMoments`` of a payload; StateError for what no accumulator can be."""
    order, weights, policy, named, dim = reader.unpack("4BI")
    if not (1 <= order <= 4 and weights < 3 and policy < 3 and named < 2 and dim <= _WIDEST):
        raise StateError("state holds settings that do not exist")
    settings = {"weights": WEIGHTS[weights], "nonfinite": POLICIES[policy]}
    if not dim:
        if named:
            raise StateError("state holds names of nothing")
        return cls(None, order, **settings)
    names = tuple(reader.text() for _ in range(dim)) if named else None
    tally = reader.integers((2,))
    extremes = reader.doubles((dim, 2))
    fields = 1 + 3 * dim + sums_of(dim, kept_order(order)) + (4 if weights else 0)
    row = _checked(reader.doubles((fields,)), dim, bool(weights))
    if np.any(tally < 0) or np.any(tally == MOST_COUNTED):
        raise StateError("state holds a negative or impossible count")
    try:
        moments = cls(dim, order, names=names, **settings)
    except (TypeError, ValueError) as error:
        raise StateError(f"state holds impossible settings: {error}") from None
    stream = moments._stream
    stream.tally[:2], stream.extremes[...], stream.table[0] = tally, extremes, row
    if working:
        _read_working_state(reader, stream)
    settled = moments._settle()
    if np.any(settled.tally[:2] < 0) or np.any(settled.tally[:2] == MOST_COUNTED):
        raise StateError("state holds counts beyond 63 bits")
    _checked(settled.row, dim, bool(weights))
    if (settled.tally[0] > 0) != (settled.row[0] > 0.0):
        raise StateError("state holds rows without weight, or weight without rows")
    return moments


def _read_working_state(reader, stream):
    blocks, fill, low = reader.unpack("QIB")
    if blocks >= 1 << 50 or fill >= stream.rows or low > 1:
        raise StateError("state holds an impossible block count")
    levels = [level for level in range(blocks.bit_length()) if blocks >> level & 1]
    read = [
        _checked(reader.doubles((stream.fields,)), stream.channels, stream.weighted) for _ in levels
    ]
    # Only now, when they are known to be there, is room made for them.
    table = np.zeros((_FIRST_LEVEL + max(1, blocks.bit_length()), stream.fields))
    table[0] = stream.table[0]
    for level, row in zip(levels, read, strict=True):
        table[_FIRST_LEVEL + level] = row
    stream.table, stream.blocks = table, blocks
    if fill:
        readings = reader.doubles((fill, stream.channels))
        rest = reader.doubles((fill, stream.channels)) if low else None
        w = reader.doubles((fill,)) if stream.weighted else None
        if rest is not None and not np.all(np.isfinite(rest)):
            raise StateError("state holds readings that cannot be")
        try:
            stream.feed(readings, rest, w)
        except ValueError as error:
            raise StateError(f"state holds readings that cannot be: {error}") from None


def _checked(row, dim, weighted):
    """A vector from bytes: the numbers kernels rely on are what they must be."""
    scales = row[1 + 2 * dim : 1 + 3 * dim]
    weights = row[-4:] if weighted else np.zeros(0)
    units = np.concatenate([scales, weights[:1]])
    if np.any(units != np.rint(units)) or np.any(np.abs(units) > _LARGEST_SCALE):
        raise StateError("state holds a scale that cannot be")
    good = 0.0 <= row[0] < np.inf and bool(np.all(weights[1:] >= 0.0))
    variances = 1 + 3 * dim + np.cumsum([0, *range(dim, 1, -1)])
    good = good and not np.any(row[variances] < 0.0)
    lost = ~np.isfinite(row[1 : 1 + dim])
    if not lost.any():
        good = good and bool(np.all(np.isfinite(row)))
    if not good:
        raise StateError("state holds moments that cannot be")
    return row
