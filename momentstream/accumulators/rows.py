"""Kernel rows and moment vectors into one another, and what is done to them outside kernels.

A row holds mean, rest, scale, W, 0, M2 .. Mp and, with weights, their scale, V2, V3, V4.
"""

import numpy as np

from ..algebra.central import MomentVector, in_units, remove
from ..errors import MergeError
from .lazy import vector as _vector

WEIGHT, SECOND = 3, 5  # places of W and M2 in a row


def vector_of(rows, order, weights, shape=None):
    """Rows as a ``MomentVector``; ``shape`` folds the channels (None: as they are)."""
    lead = rows.shape[:-1] if shape is None else shape
    field = np.moveaxis(rows, -1, 0).reshape((rows.shape[-1], *lead))
    powers, weight_scale = None, 0.0
    if weights is not None:
        weight_scale, powers = field[4 + order], field[5 + order : 8 + order]
    sums = field[SECOND : 4 + order]
    return MomentVector(field[3], field[0], field[1], field[2], sums, weight_scale, powers)


def rows_of(vector, stream):
    """A ``MomentVector`` as rows of a stream, in the units its content asks for."""
    lead = () if stream.channels is None else (stream.channels,)
    if not stream.weighted:
        vector = in_units(vector, vector.scale, 0.0)
    rows = np.zeros((*lead, stream.fields))

    def flat(values):
        return np.broadcast_to(np.asarray(values, float), np.shape(vector.mean)).reshape(lead)

    rows[..., 0], rows[..., 1], rows[..., 2] = map(flat, vector[1:4])
    rows[..., WEIGHT] = flat(vector.weight)
    for k, sums in enumerate(vector.sums):
        rows[..., SECOND + k] = flat(sums)
    if stream.weighted:
        rows[..., 4 + stream.order] = flat(vector.weight_scale)
        for j, power in enumerate(vector.powers):
            rows[..., 5 + stream.order + j] = flat(power)
    for row in rows.reshape(-1, stream.fields):
        _vector.settle_units(row, stream.order, stream.weighted)
    return rows


def removed_rows(total, part, left, stream):
    """The rows that stay when ``part`` goes; ``left`` are the counts that stay."""
    rest = remove(
        vector_of(total, stream.order, stream.weights),
        vector_of(part, stream.order, stream.weights),
    )
    rows = rows_of(rest, stream)
    nothing_goes = np.asarray(part[..., WEIGHT] == 0.0)
    rows = np.where(nothing_goes[..., None], total, rows)
    alone = np.asarray(left[..., 0] == 1)[..., None]
    sums = slice(SECOND, SECOND + stream.order - 1)
    rows[..., sums] = np.where(alone, 0.0, rows[..., sums])
    rows = np.where(np.asarray(left[..., 0] == 0)[..., None], 0.0, rows)
    if np.any((rows[..., WEIGHT] <= 0.0) & (left[..., 0] > 0)):
        raise MergeError("more weight would be removed than there is; nothing was changed")
    return rows
