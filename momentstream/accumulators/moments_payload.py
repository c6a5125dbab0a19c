"""The bytes of ``Moments``, field by field.

Payload of a frame of kind 1 (``momentstream.codec`` describes the frame; p is the order, made even;
C the number of channels, 1 where the shape is empty; F = p + 3 doubles a vector, + 4 with weights):

==================  ===============================================================================
type                meaning
==================  ===============================================================================
5 x uint8           order; weights 0 none, 1 frequency, 2 reliability; nonfinite 0 raise, 1 omit,
                    2 propagate; transform 0 none, 1 log, 2 reciprocal, 3 abs; number of axes
uint8               1 if names follow
axes x uint64       the shape
text x C            the names, if any
C x 2 int64         readings counted, readings omitted
C x 2 doubles       least and greatest reading (+inf, -inf when empty, NaN when unknown)
C x F doubles       the moment vector: mean, its rest, scale s, W, M2 .. Mp and, with weights,
                    the weights' scale t, V2, V3, V4.  The mean is (mean + rest) * 2**s; M_k
                    stands in units of 2**(k * s + t), W of 2**t, V_j of 2**(j * t)
==================  ===============================================================================

A working state (flag 1) has instead of the last the base's vector, and then:

==================  ===============================================================================
uint64              finished blocks n; the tree has a vector for every bit set in n
uint32              f, the rows of the unfinished block
uint8               1 if second parts of wide integers follow
C x F doubles       a vector for every bit set in n, from the lowest up
f x C doubles       the readings of the unfinished block; second parts likewise, if any
f doubles           their weights, with weights
==================  ===============================================================================

There the counts and extremes are those of base and finished blocks.
"""

import numpy as np

from ..errors import StateError
from .stream import POLICIES, even
from .transforms import TRANSFORMS

WEIGHTS = (None, "frequency", "reliability")
MOST_COUNTED = 2**63 - 1
_LARGEST_SCALE = 4096
_FIRST_LEVEL = 5  # the row of a table where the levels of the tree begin


def write_payload(writer, moments, settled):
    """Write a ``Moments``: its settled state, or the working state where that is None."""
    names, shape, stream = moments.names, moments.shape, moments._stream
    writer.pack(
        "6B",
        moments.order,
        WEIGHTS.index(moments.weights),
        POLICIES.index(moments.nonfinite),
        TRANSFORMS.index(moments.transform),
        len(shape),
        names is not None,
    )
    writer.pack(f"{len(shape)}Q", *shape)
    for name in names or ():
        writer.text(name)
    state = stream if settled is None else settled
    writer.integers(state.tally[..., :2])
    writer.doubles(state.extremes)
    writer.doubles(_without_first(stream.table[..., 0, :] if settled is None else state.row))
    if settled is None:
        _write_working_state(writer, stream)


def _write_working_state(writer, stream):
    fill = stream.fill
    low = stream.low is not None and bool(stream.low[:fill].any())
    writer.pack("QIB", stream.blocks, fill, low)
    for level in range(stream.blocks.bit_length()):
        if stream.blocks >> level & 1:
            writer.doubles(_without_first(stream.table[..., _FIRST_LEVEL + level, :]))
    if fill:
        writer.doubles(stream.buffer[:fill])
        if low:
            writer.doubles(stream.low[:fill])
        if stream.weighted:
            writer.doubles(stream.w[:fill])


def read_payload(cls, reader, working):
    """The ``Moments`` of a payload; StateError for what no accumulator can be."""
    order, weights, policy, transform, axes, named = reader.unpack("6B")
    if not (1 <= order <= 16 and weights < 3 and policy < 3 and transform < 4 and named < 2):
        raise StateError("state holds settings that do not exist")
    shape = reader.unpack(f"{axes}Q") if axes else ()
    channels = 1
    for length in shape:
        channels *= length
    if channels < 1 or axes > 32 or (named and axes != 1):
        raise StateError(f"state holds an impossible shape {shape}")
    lead = (channels,) if axes else ()
    # Everything below has its length in the bytes: nothing is made before it is read.
    names = tuple(reader.text() for _ in range(channels)) if named else None
    tally = reader.integers((*lead, 2))
    extremes = reader.doubles((*lead, 2))
    fields = even(order) + 3 + (4 if weights else 0)
    rows = _checked_rows(reader.doubles((*lead, fields)), even(order), bool(weights))
    if np.any(tally < 0) or np.any(tally == MOST_COUNTED):
        raise StateError("state holds a negative or impossible count")
    try:
        moments = cls(
            order,
            shape=shape if names is None else (),
            names=names,
            weights=WEIGHTS[weights],
            nonfinite=POLICIES[policy],
            transform=TRANSFORMS[transform],
        )
    except (TypeError, ValueError) as error:
        raise StateError(f"state holds impossible settings: {error}") from None
    stream = moments._stream
    stream.tally[..., :2] = tally
    stream.extremes[...] = extremes
    stream.table[..., 0, :] = rows
    if working:
        _read_working_state(reader, stream)
    settled = moments._settle()
    counts = settled.tally[..., :2]
    if np.any(counts < 0) or np.any(counts == MOST_COUNTED):
        raise StateError("state holds counts beyond 63 bits")
    _checked_rows(_without_first(settled.row), stream.order, stream.weighted)
    if np.any((counts[..., 0] > 0) != (settled.row[..., 3] > 0.0)):
        raise StateError("state holds readings without weight, or weight without readings")
    return moments


def _read_working_state(reader, stream):
    blocks, fill, low = reader.unpack("QIB")
    if blocks >= 1 << 50 or fill >= stream.rows or low > 1:
        raise StateError("state holds an impossible block count")
    lead = () if stream.channels is None else (stream.channels,)
    levels = [level for level in range(blocks.bit_length()) if blocks >> level & 1]
    read = []
    for _ in levels:
        rows = reader.doubles((*lead, stream.fields - 1))
        read.append(_checked_rows(rows, stream.order, stream.weighted))
    # Only now, when they are known to be there, is room made for them.
    table = np.zeros((*lead, _FIRST_LEVEL + max(1, blocks.bit_length()), stream.fields))
    table[..., 0, :] = stream.table[..., 0, :]
    for level, rows in zip(levels, read, strict=True):
        table[..., _FIRST_LEVEL + level, :] = rows
    stream.table, stream.blocks = table, blocks
    if fill:
        readings = reader.doubles((fill, *lead))
        rest = reader.doubles((fill, *lead)) if low else None
        w = reader.doubles((fill,)) if stream.weighted else None
        if rest is not None and not np.all(np.isfinite(rest)):
            raise StateError("state holds readings that cannot be")
        try:
            stream.feed(readings, rest, w)
        except ValueError as error:
            raise StateError(f"state holds readings that cannot be: {error}") from None


def _without_first(rows):
    """A table's row without the first power sum, which is always zero."""
    return np.delete(rows, 4, axis=-1)


def _checked_rows(rows, order, weighted):
    """Moment vectors from bytes: the numbers kernels rely on are what they must be."""
    rows = np.insert(rows, 4, 0.0, axis=-1)
    scales = [rows[..., 2]] + ([rows[..., 4 + order]] if weighted else [])
    for scale in scales:
        if np.any(scale != np.rint(scale)) or np.any(np.abs(scale) > _LARGEST_SCALE):
            raise StateError("state holds a scale that cannot be")
    weight = rows[..., 3]
    good = (weight >= 0.0) & (weight < np.inf)
    even_sums = rows[..., 5 : 4 + order : 2]
    good &= ~np.any(even_sums < 0.0, axis=-1)
    finite = np.isfinite(rows[..., 0])
    good &= ~finite | (np.all(np.isfinite(rows), axis=-1))
    if weighted:
        good &= np.all(rows[..., 5 + order :] >= 0.0, axis=-1)
    if not np.all(good):
        raise StateError("state holds moments that cannot be")
    return rows
