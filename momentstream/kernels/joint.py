"""Joint moments: blocks of rows in, moment vectors of several variables out.

A vector is a row of a float64 table (d variables, order p):

=====================  ========================================================================
``row[0]``             W, the weight
``row[1 : 1 + d]``     means, leading parts (units of 2**scale of each variable)
then d                 what the leading parts leave
then d                 scales: integers kept as doubles, 0 wherever that is safe
then the sums          of products of 2 .. p deviations, each combination with repetition once, in
                       lexicographic order: (0, 0), (0, 1) .. (d-1, d-1), (0, 0, 0) ..
with weights, last     the weights' own scale t and the sums of w**2, w**3, w**4
=====================  ========================================================================

In that order the combinations that begin with one pair (i, j) are a run, and so are the columns,
or pairs of columns, that complete it: a block is transposed so that every variable and every
product of two is a run of 256, and each sum is the dot product of two such runs.

Combination: Pébay et al. (2016); the formulas are those of ``momentstream.algebra.joint``.
"""

import math

import numpy as np

from .compiling import compiled, internal, keep_apart, ldexp
from .products import CHUNK, eight, four, one, shift
from .vector import BASE, LEVELS, NEW, exponent, is_finite, two_sum

ROWS = 256  # rows that are transposed at a time
_HEAD = 32
_NOTHING = -1e9
_CLOSER = 4  # times a pivot may be moved


@internal
def pair_place(dim, i, j):
    """The place of (i, j), i <= j, among the pairs."""
    return i * dim - i * (i - 1) // 2 + j - i


@internal
def triples_before(dim, i):
    """How many triples begin below i."""
    # C(dim + 2, 3) - C(dim - i + 2, 3)
    left = dim - i
    return (dim * (dim + 1) * (dim + 2) - left * (left + 1) * (left + 2)) // 6


@internal
def triple_place(dim, i, j, k):
    """The place of (i, j, k), i <= j <= k, among the triples."""
    return triples_before(dim, i) + pair_place(dim - i, j - i, k - i)


@internal
def sums_of_order(dim, k):
    """How many combinations of k variables there are."""
    count = 1
    for j in range(k):
        count = count * (dim + j) // (j + 1)
    return count


@internal
def first_sum(dim, k):
    """Where the sums of order k begin in a row; of the order after the highest: where they end."""
    place = 1 + 3 * dim
    for order in range(2, k):
        place += sums_of_order(dim, order)
    return place


@internal
def _tail_products(a, i, b, start, stop, chunks, out, place):
    """Add to ``out``, from ``place`` on, the dot products of run i of a with runs of b."""
    k = start
    while k + 8 <= stop:
        eight(a, i, b, k, chunks, out, place)
        place += 8
        k += 8
    while k + 4 <= stop:
        four(a, i, b, k, chunks, out, place)
        place += 4
        k += 4
    while k < stop:
        one(a, i, b, k, chunks, out, place)
        place += 1
        k += 1
    return place


@internal
def _center(x, first, n, pivot, columns, extremes):
    """Rows of x as runs of deviations from the pivot; the extremes on the way."""
    keep_apart()
    chunks = (n + CHUNK - 1) // CHUNK
    for j in range(pivot.size):
        for r in range(n):
            columns[j, r] = x[first + r, j]
        for r in range(n, chunks * CHUNK):
            columns[j, r] = columns[j, 0]
        least, most = shift(columns, j, chunks, pivot[j])
        for r in range(n, chunks * CHUNK):
            columns[j, r] = 0.0
        if not least >= extremes[j, 0]:
            extremes[j, 0] = least
        if not most <= extremes[j, 1]:
            extremes[j, 1] = most


@internal
def _add_products(columns, lifted, pairs, lifted_pairs, n, order, sums, firsts):
    """All sums of products over one transposed part of a block.

    ``lifted`` and ``lifted_pairs`` are multiplied by the weights (without: the same arrays).
    Behind the n rows the runs are zero to the end of a chunk.
    """
    keep_apart()
    dim = columns.shape[0] - 1  # the last run is of ones
    chunks = (n + CHUNK - 1) // CHUNK
    n = chunks * CHUNK
    place = 0
    for i in range(dim):
        one(lifted, i, columns, dim, chunks, firsts, i)
        place = _tail_products(lifted, i, columns, i, dim, chunks, sums, place)
    if order == 2:
        return
    pair = 0
    for i in range(dim):
        for j in range(i, dim):
            for r in range(n):
                pairs[pair, r] = columns[i, r] * columns[j, r]
            pair += 1
    pair = 0
    if lifted_pairs is not pairs:
        for i in range(dim):
            for j in range(i, dim):
                for r in range(n):
                    lifted_pairs[pair, r] = lifted[i, r] * columns[j, r]
                pair += 1
    pair = 0
    for i in range(dim):
        for j in range(i, dim):
            place = _tail_products(lifted_pairs, pair, columns, j, dim, chunks, sums, place)
            pair += 1
    if order == 3:
        return
    count = pair
    pair = 0
    for i in range(dim):
        for j in range(i, dim):
            start = pair_place(dim, j, j)
            place = _tail_products(lifted_pairs, pair, pairs, start, count, chunks, sums, place)
            pair += 1


@internal
def add_moved(sums, first, weight, firsts_too, offset, order, target, at):
    """Add sums to ``target``, from ``at`` on, about a centre ``offset`` below the present one.

    ``firsts_too``: the sums of first order are not zero but what makes the new centre the mean,
    ``weight * -offset``.
    """
    keep_apart()
    dim = offset.size
    second = first
    third = second + sums_of_order(dim, 2)
    fourth = third + sums_of_order(dim, 3)
    factor = -weight if firsts_too else weight
    place = at
    pair = second
    for i in range(dim):
        for j in range(i, dim):
            target[place] += sums[pair] + factor * offset[i] * offset[j]
            place += 1
            pair += 1
    if order == 2:
        return
    factor = -2.0 * weight if firsts_too else weight
    triple = third
    for i in range(dim):
        for j in range(i, dim):
            ij = sums[second + pair_place(dim, i, j)]
            both = offset[i] * offset[j]
            for k in range(j, dim):
                ik = sums[second + pair_place(dim, i, k)]
                jk = sums[second + pair_place(dim, j, k)]
                target[place] += (
                    sums[triple]
                    + (offset[i] * jk + offset[j] * ik + offset[k] * ij)
                    + factor * both * offset[k]
                )
                place += 1
                triple += 1
    if order == 3:
        return
    factor = -3.0 * weight if firsts_too else weight
    fourth_place = fourth
    for i in range(dim):
        a = offset[i]
        for j in range(i, dim):
            b = offset[j]
            ij = sums[second + pair_place(dim, i, j)]
            for k in range(j, dim):
                c = offset[k]
                ik = sums[second + pair_place(dim, i, k)]
                jk = sums[second + pair_place(dim, j, k)]
                ijk = sums[third + triple_place(dim, i, j, k)]
                pairs_with_d = a * b * c
                for m in range(k, dim):
                    d = offset[m]
                    im = sums[second + pair_place(dim, i, m)]
                    jm = sums[second + pair_place(dim, j, m)]
                    km = sums[second + pair_place(dim, k, m)]
                    thirds = (
                        a * sums[third + triple_place(dim, j, k, m)]
                        + b * sums[third + triple_place(dim, i, k, m)]
                        + c * sums[third + triple_place(dim, i, j, m)]
                        + d * ijk
                    )
                    seconds = a * b * km + a * c * jm + b * c * im + (a * jk + b * ik + c * ij) * d
                    target[place] += (
                        sums[fourth_place] + thirds + seconds + factor * pairs_with_d * d
                    )
                    place += 1
                    fourth_place += 1


@internal
def _find_pivot(x, pivot):
    head = min(_HEAD, x.shape[0])
    for j in range(pivot.size):
        total = 0.0
        for r in range(head):
            total += x[r, j] - x[0, j]
        pivot[j] = x[0, j] + total / head


@internal
def _sweep(x, w, order, pivot, work, sums, firsts, extremes):
    columns, lifted, pairs, lifted_pairs = work
    for i in range(sums.size):
        sums[i] = 0.0
    part_sums = np.zeros(sums.size)
    part_firsts = np.zeros(firsts.size)
    rest = np.zeros(firsts.size)
    for j in range(firsts.size):
        firsts[j] = 0.0
        extremes[j, 0], extremes[j, 1] = np.inf, -np.inf
    for first in range(0, x.shape[0], ROWS):
        n = min(ROWS, x.shape[0] - first)
        _center(x, first, n, pivot, columns, extremes)
        for i in range(part_sums.size):
            part_sums[i] = 0.0
        for j in range(firsts.size):
            part_firsts[j] = 0.0
        if w is None:
            _add_products(columns, columns, pairs, pairs, n, order, part_sums, part_firsts)
        else:
            for j in range(firsts.size):
                for r in range(n):
                    lifted[j, r] = columns[j, r] * w[first + r]
                for r in range(n, (n + CHUNK - 1) // CHUNK * CHUNK):
                    lifted[j, r] = 0.0
            _add_products(columns, lifted, pairs, lifted_pairs, n, order, part_sums, part_firsts)
        for i in range(sums.size):
            sums[i] += part_sums[i]
        for j in range(firsts.size):
            firsts[j], left = two_sum(firsts[j], part_firsts[j])
            rest[j] += left
    for j in range(firsts.size):
        firsts[j] += rest[j]


@internal
def _reduce(x, w, weight, order, pivot, work, sums, firsts, extremes, row, strict):
    """``row`` becomes the vector of a block of rows.

    ``strict``: only where all sums are well within the range of doubles; else False.
    """
    keep_apart()
    dim = pivot.size
    _find_pivot(x, pivot)
    for closer in range(_CLOSER + 1):
        _sweep(x, w, order, pivot, work, sums, firsts, extremes)
        near = True
        for j in range(dim):
            second = sums[pair_place(dim, j, j)]
            constant = extremes[j, 0] == extremes[j, 1]
            if strict and not (2.0**-400 < second < 2.0**400) and not constant:
                return False
            # A NaN may hide from the extremes, not from the sums.
            if not is_finite(second) or not is_finite(extremes[j, 0] - extremes[j, 1]):
                return False
            if constant and pivot[j] != extremes[j, 0]:
                pivot[j] = extremes[j, 0]
                near = False
            error = firsts[j] / weight
            if error * error > 0.25 * second / weight and pivot[j] + error != pivot[j]:
                pivot[j] += error
                near = False
        if near or closer == _CLOSER:
            break
    for i in range(row.size):
        row[i] = 0.0
    row[0] = weight
    offset = np.empty(dim)
    for j in range(dim):
        error = firsts[j] / weight
        offset[j] = -error
        row[1 + j], row[1 + dim + j] = two_sum(pivot[j], error)
    add_moved(sums, 0, weight, True, offset, order, row, 1 + 3 * dim)
    return True


@internal
def _new_work(dim, order, weighted):
    pairs = sums_of_order(dim, 2) if order > 2 else 1
    columns = np.empty((dim + 1, ROWS))
    for r in range(ROWS):
        columns[dim, r] = 1.0
    products = np.empty((pairs, ROWS))
    if not weighted:
        return columns, columns, products, products
    return columns, np.empty((dim, ROWS)), products, np.empty((pairs, ROWS))


@internal
def _write_weights(w, row):
    """The sum of the weights, and their own sums at the end of the row."""
    total = rest = second = third = fourth = 0.0
    for i in range(w.size):
        total, left = two_sum(total, w[i])
        rest += left
        square = w[i] * w[i]
        second += square
        third += square * w[i]
        fourth += square * square
    row[0] = total + rest
    end = row.size
    row[end - 4] = 0.0
    row[end - 3], row[end - 2], row[end - 1] = second, third, fourth


@compiled
def reduce_rows(x, w, order, row, extremes, strict):
    """``row`` becomes the vector of rows; False where they need care (range, not finite)."""
    dim = x.shape[1]
    work = _new_work(dim, order, w is not None)
    sums = np.empty(first_sum(dim, order + 1) - first_sum(dim, 2))
    weight = np.float64(x.shape[0])
    if w is not None:
        _write_weights(w, row)
        weight = row[0]
    own = row[: 1 + 3 * dim + sums.size]
    return _reduce(
        x, w, weight, order, np.empty(dim), work, sums, np.empty(dim), extremes, own, strict
    )


@compiled
def take_joint_blocks(x, w, start, rows, order, table, blocks, extremes):
    """Take whole blocks of rows in, from row ``start`` on, up to one that needs care.

    Returns the row after the last block taken, and the block count.
    """
    dim = x.shape[1]
    work = _new_work(dim, order, w is not None)
    sums = np.empty(first_sum(dim, order + 1) - first_sum(dim, 2))
    pivot, firsts, own = np.empty(dim), np.empty(dim), np.empty((dim, 2))
    size = 1 + 3 * dim + sums.size
    while start < x.shape[0]:
        stop = start + rows
        row, part_row = table[NEW], table[NEW, :size]
        weight = np.float64(rows)
        if w is None:
            good = _reduce(
                x[start:stop], None, weight, order, pivot, work, sums, firsts, own, part_row, True
            )
        else:
            part = w[start:stop]
            good = True
            for r in range(rows):
                if not 0.0 < part[r] < 2.0**60:
                    good = False
            if good:
                _write_weights(part, row)
                good = row[0] > 2.0**-100 and _reduce(
                    x[start:stop],
                    part,
                    row[0],
                    order,
                    pivot,
                    work,
                    sums,
                    firsts,
                    own,
                    row[:size],
                    True,
                )
        if not good:
            break
        for j in range(dim):
            extremes[j, 0] = min(extremes[j, 0], own[j, 0])
            extremes[j, 1] = max(extremes[j, 1], own[j, 1])
        blocks = insert_joint(table, blocks, order, dim)
        start = stop
    return start, blocks


@internal
def _rescale(row, order, dim, by, by_weight):
    """Express a row in other units: variable j divided by 2**by[j], weights by 2**by_weight."""
    keep_apart()
    for j in range(dim):
        row[1 + j] = ldexp(row[1 + j], -int(by[j]))
        row[1 + dim + j] = ldexp(row[1 + dim + j], -int(by[j]))
        row[1 + 2 * dim + j] += by[j]
    row[0] = ldexp(row[0], -int(by_weight))
    place = 1 + 3 * dim
    for i in range(dim):
        for j in range(i, dim):
            row[place] = ldexp(row[place], -int(by[i] + by[j] + by_weight))
            place += 1
    if order > 2:
        for i in range(dim):
            for j in range(i, dim):
                for k in range(j, dim):
                    row[place] = ldexp(row[place], -int(by[i] + by[j] + by[k] + by_weight))
                    place += 1
    if order > 3:
        for i in range(dim):
            for j in range(i, dim):
                for k in range(j, dim):
                    for m in range(k, dim):
                        total = by[i] + by[j] + by[k] + by[m] + by_weight
                        row[place] = ldexp(row[place], -int(total))
                        place += 1
    if place < row.size:
        row[place] += by_weight
        for j in range(1, 4):
            row[place + j] = ldexp(row[place + j], -int((j + 1) * by_weight))


@internal
def settle_units(row, order, dim):
    """Units that depend on the content alone: 0 where that is safe, else those of the spread."""
    keep_apart()
    by = np.zeros(dim)
    by_weight = 0.0
    change = False
    if row.size > first_sum(dim, order + 1):
        weight_scale = row[first_sum(dim, order + 1)]
        size = weight_scale + exponent(row[0])
        wanted = 0.0 if -60 < size < 60 or row[0] == 0.0 else size
        by_weight = wanted - weight_scale
        change = by_weight != 0.0
    for j in range(dim):
        scale = row[1 + 2 * dim + j]
        second = row[1 + 3 * dim + pair_place(dim, j, j)]
        wanted = 0.0
        if second > 0.0 and is_finite(second) and row[0] > 0.0:
            size = scale + exponent(math.sqrt(second / row[0]))
            if not -100 < size < 100:
                wanted = size
        by[j] = wanted - scale
        change = change or by[j] != 0.0
    if change:
        _rescale(row, order, dim, by, by_weight)


@internal
def _spread_exponent(row, dim, j):
    """The exponent of a variable's standard deviation; far below all others without spread."""
    second = row[1 + 3 * dim + pair_place(dim, j, j)]
    if not second > 0.0:
        return _NOTHING
    return row[1 + 2 * dim + j] + exponent(math.sqrt(second / row[0]))


@internal
def _mean_exponent(row, dim, j):
    if row[1 + j] == 0.0 or not is_finite(row[1 + j]):
        return _NOTHING
    return row[1 + 2 * dim + j] + exponent(row[1 + j])


@internal
def _distance_exponent(a, b, dim, j, units):
    """The exponent of the distance of two means, which ``units`` make neither large nor small."""
    by_a, by_b = int(a[1 + 2 * dim + j] - units), int(b[1 + 2 * dim + j] - units)
    distance = ldexp(a[1 + j], by_a) - ldexp(b[1 + j], by_b)
    distance += ldexp(a[1 + dim + j], by_a) - ldexp(b[1 + dim + j], by_b)
    if distance == 0.0 or not is_finite(distance):
        return _NOTHING
    return units + exponent(distance)


@internal
def _to_common_units(a, b, order, dim):
    """Units of what the two together will spread over, 0 wherever that is safe."""
    by_a, by_b = np.zeros(dim), np.zeros(dim)
    change = False
    for j in range(dim):
        means = max(_mean_exponent(a, dim, j), _mean_exponent(b, dim, j))
        spread = max(_spread_exponent(a, dim, j), _spread_exponent(b, dim, j))
        if means > _NOTHING:
            spread = max(spread, _distance_exponent(a, b, dim, j, means))
        common = 0.0
        if spread > _NOTHING and not -100 < spread < 100:
            common = max(spread, means - 1000.0)
        by_a[j], by_b[j] = common - a[1 + 2 * dim + j], common - b[1 + 2 * dim + j]
        change = change or by_a[j] != 0.0 or by_b[j] != 0.0
    weight_a = weight_b = 0.0
    end = first_sum(dim, order + 1)
    if a.size > end:
        common = max(a[end], b[end])
        weight_a, weight_b = common - a[end], common - b[end]
        change = change or weight_a != 0.0 or weight_b != 0.0
    if change:
        _rescale(a, order, dim, by_a, weight_a)
        _rescale(b, order, dim, by_b, weight_b)


@internal
def combine_joint(a, b, order, dim):
    """Row a takes row b in; b is used up."""
    keep_apart()
    if b[0] == 0.0:
        return
    if a[0] == 0.0:
        for i in range(a.size):
            a[i] = b[i]
        return
    _to_common_units(a, b, order, dim)
    heavy, light = a, b
    swap = False
    if a[0] < b[0]:
        swap = True
    elif a[0] == b[0]:
        # A full order makes the result the same whichever way round the parts come.
        for i in range(1, 1 + 2 * dim):
            if a[i] != b[i]:
                swap = a[i] < b[i]
                break
    if swap:
        heavy, light = b, a
    weight = a[0] + b[0]
    share_heavy, share_light = heavy[0] / weight, light[0] / weight
    to_heavy, to_light = np.empty(dim), np.empty(dim)
    means, rests = np.empty(dim), np.empty(dim)
    for j in range(dim):
        delta = (light[1 + j] - heavy[1 + j]) + (light[1 + dim + j] - heavy[1 + dim + j])
        to_heavy[j] = -share_light * delta
        to_light[j] = share_heavy * delta
        means[j], rests[j] = two_sum(heavy[1 + j], heavy[1 + dim + j] + share_light * delta)
        if not is_finite(heavy[1 + j]) or not is_finite(light[1 + j]):
            # Propagation: only what is not finite decides.
            means[j] = light[1 + j]
            if is_finite(light[1 + j]):
                means[j] = heavy[1 + j]
            elif not is_finite(heavy[1 + j]):
                means[j] = heavy[1 + j] + light[1 + j]
            rests[j] = 0.0
            to_heavy[j] = to_light[j] = math.nan
    first = 1 + 3 * dim
    target = np.zeros(a.size)
    add_moved(heavy, first, heavy[0], False, to_heavy, order, target, first)
    add_moved(light, first, light[0], False, to_light, order, target, first)
    end = first_sum(dim, order + 1)
    target[0] = weight
    for j in range(dim):
        target[1 + j], target[1 + dim + j] = means[j], rests[j]
        target[1 + 2 * dim + j] = a[1 + 2 * dim + j]
        # What a removal left may be no moments of anything.
        variance = first + pair_place(dim, j, j)
        target[variance] = 0.0 if target[variance] < 0.0 else target[variance]
    if a.size > end:
        target[end] = a[end]
        for j in range(1, 4):
            target[end + j] = a[end + j] + b[end + j]
    for i in range(a.size):
        a[i] = target[i]
    settle_units(a, order, dim)


@internal
def insert_joint(table, blocks, order, dim):
    """Carry row NEW, a block, into the binary counter; returns the block count after it."""
    level = np.int64(0)
    spare = np.empty(table.shape[1])
    while (blocks >> level) & 1:
        for i in range(spare.size):
            spare[i] = table[LEVELS + level, i]
        combine_joint(table[NEW], spare, order, dim)
        level += 1
    for i in range(spare.size):
        table[LEVELS + level, i] = table[NEW, i]
    return blocks + 1


@compiled
def insert_joint_block(table, blocks, order, dim):
    """``insert_joint`` from Python."""
    return insert_joint(table, blocks, order, dim)


@compiled
def fold_joint_levels(table, blocks, order, dim):
    """Row NEW (the unfinished block) takes in the levels from the lowest up, then the base."""
    spare = np.empty(table.shape[1])
    level = 0
    while blocks >> level:
        if (blocks >> level) & 1:
            for i in range(spare.size):
                spare[i] = table[LEVELS + level, i]
            combine_joint(table[NEW], spare, order, dim)
        level += 1
    for i in range(spare.size):
        spare[i] = table[BASE, i]
    combine_joint(table[NEW], spare, order, dim)


@compiled
def combine_joint_pair(a, b, order, dim):
    """``combine_joint`` from Python; b stays."""
    combine_joint(a, b.copy(), order, dim)


@compiled
def settle_joint_units(row, order, dim):
    """``settle_units`` from Python."""
    settle_units(row, order, dim)
