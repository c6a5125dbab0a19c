"""The working state behind ``Moments``: an unfinished block, a tree of block vectors, a base.

Readings gather in a buffer until they fill a block; a block's vector is carried into a binary
counter of vectors (``table``); what was merged in lives apart, in the row ``BASE``, so that what
comes later does not depend on when a merge came.  ``table`` is (rows, fields), for channels
(channels, rows, fields); ``tally`` and ``extremes`` cover the finished blocks and the base.
"""

import itertools

import numpy as np

from .lazy import blocks as _blocks
from .lazy import channels as _channels
from .lazy import vector as _vector

POLICIES = ("raise", "omit", "propagate")
_BLOCK = 8192  # kernels.blocks.BLOCK, known without a compiler
_LARGEST_BLOCK = 1 << 21  # readings in a block of many channels
_SMALLEST_BUFFER = 512  # readings
_FIELDS_WEIGHTED = 4


def even(order):
    """The order the kernels keep: the top sum is the even one that guards the scale."""
    return order + order % 2


def block_rows(channels):
    """Rows of a block, by the number of channels (None: a single stream)."""
    if channels is None:
        return _BLOCK
    rows = 2048
    while rows > 64 and rows * channels > _LARGEST_BLOCK:
        rows //= 2
    return rows


class Refusal(ValueError):
    """A reading or weight was refused, and nothing taken in; places count from the stretch's start.

    ``fault`` says what is wrong with a weight; None: ``value`` is a reading.
    """

    def __init__(self, row=0, column=None, value=0.0, fault=None):
        super().__init__(f"{fault or 'reading'}: {value!r} at row {row}, column {column}")
        self.row = row
        self.column = column
        self.value = value
        self.fault = fault


class Settled:
    """Everything folded into one moment vector: ``row`` (channels, fields) or (fields,)."""

    __slots__ = ("extremes", "row", "tally", "view")

    def __init__(self, row, tally, extremes):
        self.row = row
        self.tally = tally
        self.extremes = extremes
        self.view = None  # what statistics read, once somebody asked


class Stream:
    """One stream of readings, or one for every channel."""

    __slots__ = (
        "blocks",
        "buffer",
        "channels",
        "extremes",
        "fill",
        "low",
        "order",
        "policy",
        "rows",
        "table",
        "tally",
        "w",
        "weights",
    )  # fmt: skip

    def __init__(self, order, weights, channels, policy):
        self.order = even(order)
        self.weights = weights
        self.channels = channels
        self.policy = policy
        self.rows = block_rows(channels)
        self.clear()

    def clear(self):
        lead = () if self.channels is None else (self.channels,)
        self.table = np.zeros((*lead, 6, self.fields))
        self.blocks = 0
        self.buffer = self.low = self.w = None
        self.fill = 0
        self.tally = np.zeros((*lead, 4), np.int64)
        self.extremes = np.empty((*lead, 2))
        self.extremes[...] = (np.inf, -np.inf)

    @property
    def fields(self):
        return self.order + 4 + (_FIELDS_WEIGHTED if self.weighted else 0)

    @property
    def weighted(self):
        return self.weights is not None

    @property
    def _policy(self):
        """The kernels' policy."""
        if self.policy == "raise" and not self.weighted:
            return None
        return POLICIES.index(self.policy)

    @property
    def whole(self):
        return self.weights == "frequency"

    def copy(self):
        other = object.__new__(type(self))
        for name in Stream.__slots__:
            value = getattr(self, name)
            setattr(other, name, value.copy() if isinstance(value, np.ndarray) else value)
        return other

    # -- feeding -----------------------------------------------------------------------------

    def feed(self, x, low, w, threads=1):
        """Take one stretch in, all of it or nothing.

        Raises
        ------
        Refusal
            A reading or weight is refused; its places count from the start of the stretch.
        """
        try:
            self._feed(x, low, w, threads)
        except Refusal:
            # Parts are looked at in their own order; a reader looks for the first of all.
            raise self._first_refusal(x, w) from None

    def _feed(self, x, low, w, threads):
        n = len(x)
        if n == 0:
            return
        if self.whole:
            self._check_total(w)
        head = min(n, self.rows - self.fill) if self.fill or n < self.rows else 0
        tail = head + (n - head) // self.rows * self.rows
        for start, stop in ((0, head), (tail, n)):
            if stop > start:
                self._check(x, w, start, stop)
        if self.fill + head == self.rows or tail > head:
            self._feed_blocks(x, low, w, head, tail, threads)
        else:
            tail = 0
            self._append(x, low, w, 0, n)
            return
        if n > tail:
            self._append(x, low, w, tail, n)

    def _feed_blocks(self, x, low, w, head, tail, threads):
        count = (tail - head) // self.rows + (1 if self.fill and head else 0)
        table = self._grown(self.blocks + count)
        tally, extremes = self.tally.copy(), self.extremes.copy()
        blocks = self.blocks
        if self.fill and head:
            fill = self.fill
            self._append(x, low, w, 0, head)
            self.fill = fill
            blocks = self._take(self.buffer, self.low, self.w, table, blocks, tally, extremes)
        if tail > head:
            part = (
                x[head:tail],
                None if low is None else low[head:tail],
                None if w is None else w[head:tail],
            )
            if threads > 1:
                blocks = self._take_in_groups(*part, table, blocks, tally, extremes, threads)
            else:
                blocks = self._take(*part, table, blocks, tally, extremes)
        self.table, self.blocks, self.tally, self.extremes = table, int(blocks), tally, extremes
        self.fill = 0
        self.low = None

    def _take(self, x, low, w, table, blocks, tally, extremes):
        policy, whole = self._policy, self.whole
        if self.channels is not None:
            after = _channels.take_row_blocks(
                x, low, w, self.rows, policy, whole, self.order, table, blocks, tally, extremes
            )
        elif x.dtype == np.float32:
            after = _blocks.take_blocks_32(x, policy, self.order, table, blocks, tally, extremes)
        else:
            after = _blocks.take_blocks(
                x, low, w, policy, whole, self.order, table, blocks, tally, extremes
            )
        if after < 0:
            raise Refusal
        return after

    def _take_in_groups(self, x, low, w, table, blocks, tally, extremes, threads):
        """Aligned groups of blocks on threads, each its own small tree, inserted in order."""
        from concurrent.futures import ThreadPoolExecutor

        group = _blocks.GROUP
        count = len(x) // self.rows
        lead = min(count, -blocks % group)
        groups = (count - lead) // group
        edges = [lead * self.rows]
        edges += [edges[0] + (i + 1) * group * self.rows for i in range(groups)]

        def part(start, stop):
            return (
                x[start:stop],
                None if low is None else low[start:stop],
                None if w is None else w[start:stop],
            )

        def reduce(start, stop):
            own = np.zeros((*self.table.shape[:-2], _vector.rows_for(group), self.fields))
            own_tally = np.zeros_like(tally)
            own_extremes = np.empty_like(extremes)
            own_extremes[...] = (np.inf, -np.inf)
            self._take(*part(start, stop), own, 0, own_tally, own_extremes)
            top = int(_vector.LEVELS) + _blocks.GROUP_LEVEL
            return own[..., top, :], own_tally, own_extremes

        if lead:
            blocks = self._take(*part(0, edges[0]), table, blocks, tally, extremes)
        with ThreadPoolExecutor(max_workers=min(threads, max(groups, 1))) as pool:
            jobs = [pool.submit(reduce, *edge) for edge in itertools.pairwise(edges)]
            try:
                results = [job.result() for job in jobs]
            except BaseException:
                for job in jobs:
                    job.cancel()
                raise
        for row, own_tally, own_extremes in results:
            table[..., _vector.NEW, :] = row
            insert = _vector.insert_group if self.channels is None else _channels.insert_row_blocks
            blocks = insert(table, blocks, _blocks.GROUP_LEVEL, self.order, self.weighted)
            tally += own_tally
            extend(extremes, own_extremes)
        if edges[-1] < len(x):
            start = edges[-1]
            blocks = self._take(*part(start, len(x)), table, blocks, tally, extremes)
        return blocks

    def _append(self, x, low, w, start, stop):
        """Copy ``x[start:stop]`` behind what the buffer holds."""
        size = self.fill + stop - start
        self._reserve(size)
        self.buffer[self.fill : size] = x[start:stop]
        if low is not None and low[start:stop].any():
            if self.low is None:
                self.low = np.zeros_like(self.buffer)
            self.low[self.fill : size] = low[start:stop]
        elif self.low is not None:
            self.low[self.fill : size] = 0.0
        if w is not None:
            self.w[self.fill : size] = w[start:stop]
        self.fill = size

    def _reserve(self, size):
        """Make the buffer hold ``size`` rows; it grows with what it holds, up to a block."""
        lead = () if self.channels is None else (self.channels,)
        have = 0 if self.buffer is None else len(self.buffer)
        if size <= have:
            return
        least = max(1, _SMALLEST_BUFFER // (self.channels or 1))
        rows = min(self.rows, max(least, 1 << (size - 1).bit_length()))

        def grown(old, shape):
            new = np.zeros(shape)
            if old is not None:
                new[: self.fill] = old[: self.fill]
            return new

        self.buffer = grown(self.buffer, (rows, *lead))
        if self.low is not None:
            self.low = grown(self.low, (rows, *lead))
        if self.weighted:
            self.w = grown(self.w, (rows,))

    def _grown(self, blocks):
        """A copy of the table with room for so many blocks."""
        rows = _vector.rows_for(blocks)
        have = self.table.shape[-2]
        if rows <= have:
            return self.table.copy()
        table = np.zeros((*self.table.shape[:-2], rows, self.fields))
        table[..., :have, :] = self.table
        return table

    # -- refusing ----------------------------------------------------------------------------

    def _check(self, x, w, start, stop):
        """Refuse what may not wait in the buffer."""
        finite = self.policy == "raise"
        if not finite and w is None:
            return
        part, tally = x[start:stop], np.zeros(4, np.int64)
        part_w = None if w is None else w[start:stop]
        if self.channels is not None:
            part_w = None if w is None else np.repeat(part_w, self.channels)
        flat = np.ascontiguousarray(part, dtype=np.float64).reshape(-1)
        if not _blocks.first_refused(flat, part_w, finite, self.whole, tally):
            raise Refusal

    def _first_refusal(self, x, w):
        """The refusal that comes first in a stretch, with all that an error tells."""
        bad = np.zeros(len(x), dtype=bool)
        if w is not None:
            bad = ~((w >= 0.0) & (w < np.inf))
            if self.whole:
                bad |= (w != np.floor(w)) | (w > 2.0**53)
        columns = x.reshape(len(x), -1)
        missing = np.zeros(columns.shape, dtype=bool)
        if self.policy == "raise":
            missing = ~np.isfinite(columns)
            if w is not None:
                missing &= (w > 0.0)[:, None]
        row = int(np.argmax(bad | missing.any(axis=1)))
        if bad[row]:
            return Refusal(row, None, float(w[row]), self._fault_of(w[row]))
        column = int(np.argmax(missing[row]))
        place = None if self.channels is None else column
        return Refusal(row, place, float(columns[row, column]), None)

    def _fault_of(self, weight):
        if not 0.0 <= weight < np.inf:
            return "weights must be finite and not negative"
        if weight != np.floor(weight):
            return 'frequencies must be whole numbers (for others: weights="reliability")'
        return "a frequency among the weights must be at most 2**53"

    def _check_total(self, w):
        """Refuse frequencies whose sum no 64-bit integer holds."""
        if float(w.sum()) < 2.0**53:
            return
        good = w[(w >= 0.0) & (w <= 2.0**53)]
        total = sum(map(int, good.tolist())) + int(self.settle().tally[..., :2].max())
        if total >= 2**63 - 1:
            raise ValueError("the count would pass 2**63 - 1; nothing was taken in")

    # -- settling ----------------------------------------------------------------------------

    def settle(self):
        """Fold everything into one vector; the working state stays as it is."""
        table = self.table.copy()
        tally, extremes = self.tally.copy(), self.extremes.copy()
        weighted, fill = self.weighted, self.fill
        if fill:
            part = (
                self.buffer[:fill],
                None if self.low is None else self.low[:fill],
                self.w[:fill] if weighted else None,
            )
            take = _blocks.take_block if self.channels is None else _channels.take_row_block
            take(*part, self._policy, self.whole, self.order, table, tally, extremes)
        elif self.blocks == 0:
            return Settled(table[..., 0, :].copy(), tally, extremes)
        else:
            table[..., _vector.NEW, :] = 0.0
        fold = _vector.fold_levels if self.channels is None else _channels.fold_row_levels
        fold(table, self.blocks, self.order, weighted)
        return Settled(table[..., _vector.NEW, :].copy(), tally, extremes)

    def take_in(self, part):
        """Take a settled part in, beside the own stream."""
        base = self.table[..., 0, :]
        if self.channels is None:
            _vector.combine_pair(base, part.row, self.order, self.weighted)
        elif np.any(part.row[..., 3]):
            base = base.copy()
            _channels.combine_channel_pairs(base, part.row, self.order, self.weighted)
            self.table[..., 0, :] = base
        self.tally += part.tally
        extend(self.extremes, part.extremes)


def extend(extremes, more):
    """Take extremes into extremes; a NaN (unknown, or propagated) stays."""
    if extremes.ndim > 1:
        np.minimum(extremes[..., 0], more[..., 0], out=extremes[..., 0])
        np.maximum(extremes[..., 1], more[..., 1], out=extremes[..., 1])
        return
    (least, most), (other_least, other_most) = extremes.tolist(), more.tolist()
    if other_least < least or other_least != other_least:
        extremes[0] = other_least
    if other_most > most or other_most != other_most:
        extremes[1] = other_most
