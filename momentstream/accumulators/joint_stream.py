"""The working state behind ``JointMoments``: blocks of rows, and a tree of their vectors."""

from math import comb

import numpy as np

from ..algebra.joint import indices
from .lazy import joint as _joint
from .stream import Refusal, Settled, Stream, extend

_NEW, _LEVELS = 1, 5  # rows of a table (kernels.vector)


def block_of(dim):
    """Rows of a block."""
    return 2048 if dim <= 16 else 512


def kept_order(order):
    """The order that kernels keep: the variances guard the scale."""
    return max(order, 2)


def sums_of(dim, order):
    """How many sums of products of 2 .. order deviations there are."""
    return sum(comb(dim + k - 1, k) for k in range(2, order + 1))


class JointStream(Stream):
    """One stream of rows."""

    __slots__ = ()

    def __init__(self, order, weights, dim, policy):
        self.order = kept_order(order)
        self.weights = weights
        self.channels = dim
        self.policy = policy
        self.rows = block_of(dim)
        self.clear()

    def clear(self):
        self.table = np.zeros((6, self.fields))
        self.blocks = 0
        self.buffer = self.low = self.w = None
        self.fill = 0
        self.tally = np.zeros(4, np.int64)
        self.extremes = np.empty((self.channels, 2))
        self.extremes[...] = (np.inf, -np.inf)

    @property
    def fields(self):
        dim = self.channels
        return 1 + 3 * dim + sums_of(dim, self.order) + (4 if self.weighted else 0)

    # -- feeding -----------------------------------------------------------------------------

    def _take(self, x, low, w, table, blocks, tally, extremes):
        if w is not None:
            self._check_weights(w)
        place = 0
        while place < len(x):
            if low is None:
                begin = place
                weights = None if w is None else np.ascontiguousarray(w)
                place, blocks = _joint.take_joint_blocks(
                    x, weights, begin, self.rows, self.order, table, blocks, extremes
                )
                tally[0] += self._counted(w, begin, place)
            if place < len(x):
                cut = slice(place, place + self.rows)
                part = (x[cut], None if low is None else low[cut], None if w is None else w[cut])
                table[_NEW] = self._vector_of(*part, tally, extremes)
                blocks = _joint.insert_joint_block(table, blocks, self.order, self.channels)
                place += self.rows
        return blocks

    def _counted(self, w, start, stop):
        return int(w[start:stop].sum()) if self.whole else stop - start

    def _check_weights(self, w):
        bad = ~((w >= 0.0) & (w < np.inf))
        if self.whole:
            bad |= (w != np.floor(w)) | (w > 2.0**53)
        if bad.any():
            raise Refusal

    def _check(self, x, w, start, stop):
        if w is not None:
            self._check_weights(w[start:stop])
        if self.policy == "raise":
            finite = np.isfinite(x[start:stop])
            if w is not None:
                finite |= (w[start:stop] == 0.0)[:, None]
            if not finite.all():
                raise Refusal

    def _vector_of(self, x, low, w, tally, extremes):
        """The vector of a block of any rows, counted; Refusal where a row is refused."""
        row = np.zeros(self.fields)
        own = np.empty((self.channels, 2))
        plain = low is None and len(x) > 0
        if plain and w is not None:
            plain = bool(w.min() > 0.0 and 2.0**-60 < w.max() < 2.0**60)
        if plain and _joint.reduce_rows(x, w, self.order, row, own, True):
            tally[0] += self._counted(w, 0, len(x))
            extend(extremes, own)
            return row
        keep = np.ones(len(x), dtype=bool) if w is None else w > 0.0
        finite = np.isfinite(x).all(axis=1)
        missing = keep & ~finite
        if missing.any() and self.policy != "propagate":
            if self.policy == "raise":
                raise Refusal
            tally[1] += int(w[missing].sum()) if self.whole else int(missing.sum())
            keep &= finite
        x = x[keep]
        low = None if low is None else low[keep]
        w = None if w is None else w[keep]
        if len(x) == 0:
            return np.zeros(self.fields)
        tally[0] += self._counted(w, 0, len(x))
        ends = np.stack([x.min(axis=0), x.max(axis=0)], axis=1) + 0.0
        extremes[:, 0] = np.minimum(extremes[:, 0], ends[:, 0])
        extremes[:, 1] = np.maximum(extremes[:, 1], ends[:, 1])
        return self._careful_vector(x, low, w)

    def _careful_vector(self, x, low, w):
        """The vector of rows that need units of their own, or hold wide integers or infinities."""
        dim, order = self.channels, self.order
        lost = ~np.isfinite(x)
        columns = np.flatnonzero(lost.any(axis=0))
        with np.errstate(invalid="ignore"):
            means = np.where(lost, x, 0.0).sum(axis=0)
        if len(columns):
            x = x.copy()
            x[:, columns] = 0.0
        level = np.zeros(dim), np.zeros(dim)
        if low is not None:
            level = x[0].copy(), low[0].copy()
            x = (x - level[0]) + (low - level[1])
        size = np.abs(x).max(axis=0)
        usual = (size == 0.0) | ((size > 2.0**-90) & (size < 2.0**90))
        scale = np.where(usual, 0, np.frexp(size)[1])
        x = np.ldexp(x, -scale)
        weight_scale = 0
        if w is not None:
            weight_scale = int(np.frexp(w.max())[1])
            w = np.ldexp(w, -weight_scale)
        row = np.zeros(self.fields)
        _joint.reduce_rows(x, w, order, row, np.empty((dim, 2)), False)
        if w is not None:
            row[-4] = weight_scale
        mean, rest, units = (row[1 + i * dim : 1 + (i + 1) * dim] for i in range(3))
        units[:] = scale
        if low is not None:
            high, low_part = (np.ldexp(part, -scale) for part in level)
            total = high + mean
            shadow = total - high
            left = (high - (total - shadow)) + (mean - shadow)
            rest += left + low_part
            mean[:] = total
        if len(columns):
            mean[columns], rest[columns], units[columns] = means[columns], 0.0, 0.0
            place = 1 + 3 * dim
            for k in range(2, order + 1):
                among = np.isin(indices(dim, k), columns).any(axis=1)
                row[place : place + len(among)][among] = np.nan
                place += len(among)
        _joint.settle_joint_units(row, order, dim)
        return row

    # -- settling ----------------------------------------------------------------------------

    def settle(self):
        """Fold everything into one vector; the working state stays as it is."""
        table = self.table.copy()
        tally, extremes = self.tally.copy(), self.extremes.copy()
        if self.fill:
            part = (
                self.buffer[: self.fill],
                None if self.low is None else self.low[: self.fill],
                self.w[: self.fill] if self.weighted else None,
            )
            table[_NEW] = self._vector_of(*part, tally, extremes)
        elif self.blocks == 0:
            return Settled(table[0].copy(), tally, extremes)
        else:
            table[_NEW] = 0.0
        _joint.fold_joint_levels(table, self.blocks, self.order, self.channels)
        return Settled(table[_NEW].copy(), tally, extremes)

    def take_in(self, part):
        """Take a settled part in, beside the own stream."""
        _joint.combine_joint_pair(self.table[0], part.row, self.order, self.channels)
        self.tally += part.tally
        extend(self.extremes, part.extremes)
