"""Power sums of one block about a pivot, in stretches: the only loops that add readings up.

Everything found goes into row ``row`` of the float64 table ``room``:

==================  ===========================================================================
``room[row, k]``    the sum of ``(x - pivot)**k``, k = 1 .. order (even); k = 0: the weight
``POWERS + j``      with weights, the sum of ``w**j`` for j = 2 .. 4
``LEAST, MOST``     the extremes of the readings; meaningless unless all sums are finite
``LIGHTEST``        with weights, the least weight; likewise
``PIVOT``           free for the caller, who may keep the pivot there
==================  ===========================================================================

The sum of first order, which the mean rests on, is carried from stretch to stretch with what each
addition leaves: readings far out on both sides would cost it digits.

The extremes are found in the same sweep, which keeps arithmetic and memory busy at once: two
sweeps took 1.6 times as long.  A NaN or an infinity among the readings shows in the even sums.
"""

import numpy as np

from .compiling import REORDER, extended, greater, internal, keep_apart, lesser
from .vector import two_sum

POWERS, PIVOT, LEAST, MOST, LIGHTEST = 17, 22, 23, 24, 25
ROOM = 26
_FIRST_UPPER, _SECOND_UPPER = np.int64(4), np.int64(10)
STRETCH = 512  # readings added up in one sweep: 4096 at once lost 70 to 96 units on two-point data


@internal(fastmath=REORDER)
def _sums_2(x, pivot, room, row):
    keep_apart()
    t1 = t2 = 0.0
    rest = 0.0
    lowest, highest = np.inf, -np.inf
    for start in range(0, x.size, STRETCH):
        part = x[start : min(start + STRETCH, x.size)]
        s1 = s2 = 0.0
        least, most = np.inf, -np.inf
        for i in range(part.size):
            value = part[i]
            d = extended(value - pivot)
            least = lesser(value, least)
            most = greater(value, most)
            s1 += d
            s2 += d * d
        lowest = lesser(least, lowest)
        highest = greater(most, highest)
        t1, left = two_sum(t1, float(s1))
        rest += left
        t2 += float(s2)
    room[row, 1] = t1 + rest
    room[row, 2] = t2
    room[row, LEAST] = lowest
    room[row, MOST] = highest


@internal(fastmath=REORDER)
def _sums_4(x, pivot, room, row):
    keep_apart()
    t1 = t2 = t3 = t4 = 0.0
    rest = 0.0
    lowest, highest = np.inf, -np.inf
    for start in range(0, x.size, STRETCH):
        part = x[start : min(start + STRETCH, x.size)]
        s1 = s2 = s3 = s4 = 0.0
        least, most = np.inf, -np.inf
        for i in range(part.size):
            value = part[i]
            d = extended(value - pivot)
            least = lesser(value, least)
            most = greater(value, most)
            d2 = d * d
            s1 += d
            s2 += d2
            s3 += d2 * d
            s4 += d2 * d2
        lowest = lesser(least, lowest)
        highest = greater(most, highest)
        t1, left = two_sum(t1, float(s1))
        rest += left
        t2 += float(s2)
        t3 += float(s3)
        t4 += float(s4)
    room[row, 1] = t1 + rest
    room[row, 2] = t2
    room[row, 3] = t3
    room[row, 4] = t4
    room[row, LEAST] = lowest
    room[row, MOST] = highest


@internal(fastmath=REORDER)
def _sums_8(x, pivot, room, row):
    keep_apart()
    t1 = t2 = t3 = t4 = t5 = t6 = t7 = t8 = 0.0
    rest = 0.0
    lowest, highest = np.inf, -np.inf
    for start in range(0, x.size, STRETCH):
        part = x[start : min(start + STRETCH, x.size)]
        s1 = s2 = s3 = s4 = s5 = s6 = s7 = s8 = 0.0
        least, most = np.inf, -np.inf
        for i in range(part.size):
            value = part[i]
            d = extended(value - pivot)
            least = lesser(value, least)
            most = greater(value, most)
            d2 = d * d
            d3 = d2 * d
            d4 = d2 * d2
            s1 += d
            s2 += d2
            s3 += d3
            s4 += d4
            s5 += d4 * d
            s6 += d4 * d2
            s7 += d4 * d3
            s8 += d4 * d4
        lowest = lesser(least, lowest)
        highest = greater(most, highest)
        t1, left = two_sum(t1, float(s1))
        rest += left
        t2 += float(s2)
        t3 += float(s3)
        t4 += float(s4)
        t5 += float(s5)
        t6 += float(s6)
        t7 += float(s7)
        t8 += float(s8)
    room[row, 1] = t1 + rest
    room[row, 2] = t2
    room[row, 3] = t3
    room[row, 4] = t4
    room[row, 5] = t5
    room[row, 6] = t6
    room[row, 7] = t7
    room[row, 8] = t8
    room[row, LEAST] = lowest
    room[row, MOST] = highest


@internal(fastmath=REORDER)
def _sums_upper(x, pivot, room, row):
    """The sums of order 9 to 16."""
    keep_apart()
    t9 = t10 = t11 = t12 = t13 = t14 = t15 = t16 = 0.0
    for start in range(0, x.size, STRETCH):
        part = x[start : min(start + STRETCH, x.size)]
        s9 = s10 = s11 = s12 = s13 = s14 = s15 = s16 = 0.0
        for i in range(part.size):
            d = extended(part[i] - pivot)
            d2 = d * d
            d3 = d2 * d
            d4 = d2 * d2
            d8 = d4 * d4
            d12 = d8 * d4
            s9 += d8 * d
            s10 += d8 * d2
            s11 += d8 * d3
            s12 += d12
            s13 += d12 * d
            s14 += d12 * d2
            s15 += d12 * d3
            s16 += d8 * d8
        t9 += float(s9)
        t10 += float(s10)
        t11 += float(s11)
        t12 += float(s12)
        t13 += float(s13)
        t14 += float(s14)
        t15 += float(s15)
        t16 += float(s16)
    room[row, 9] = t9
    room[row, 10] = t10
    room[row, 11] = t11
    room[row, 12] = t12
    room[row, 13] = t13
    room[row, 14] = t14
    room[row, 15] = t15
    room[row, 16] = t16


@internal
def power_sums(x, pivot, order, room, row):
    keep_apart()
    room[row, 0] = x.size
    if order <= 2:
        _sums_2(x, pivot, room, row)
    elif order <= 4:
        _sums_4(x, pivot, room, row)
    else:
        _sums_8(x, pivot, room, row)
        if order > 8:
            _sums_upper(x, pivot, room, row)


@internal(fastmath=REORDER)
def _weighted_sums_4(x, w, pivot, room, row):
    keep_apart()
    t0 = t1 = t2 = t3 = t4 = u2 = u3 = u4 = 0.0
    rest = 0.0
    lowest, highest = np.inf, -np.inf
    lightest = np.inf
    for start in range(0, x.size, STRETCH):
        part = x[start : min(start + STRETCH, x.size)]
        weight = w[start : min(start + STRETCH, x.size)]
        s0 = s1 = s2 = s3 = s4 = v2 = v3 = v4 = 0.0
        least, most = np.inf, -np.inf
        light = np.inf
        for i in range(part.size):
            value = part[i]
            d = extended(value - pivot)
            least = lesser(value, least)
            most = greater(value, most)
            q = weight[i]
            light = lesser(q, light)
            d2 = d * d
            qd = q * d
            qd2 = qd * d
            q2 = q * q
            s0 += q
            s1 += qd
            s2 += qd2
            s3 += qd * d2
            s4 += qd2 * d2
            v2 += q2
            v3 += q2 * q
            v4 += q2 * q2
        lowest = lesser(least, lowest)
        highest = greater(most, highest)
        lightest = lesser(light, lightest)
        t0 += float(s0)
        t1, left = two_sum(t1, float(s1))
        rest += left
        t2 += float(s2)
        t3 += float(s3)
        t4 += float(s4)
        u2 += float(v2)
        u3 += float(v3)
        u4 += float(v4)
    room[row, 0] = t0
    room[row, 1] = t1 + rest
    room[row, 2] = t2
    room[row, 3] = t3
    room[row, 4] = t4
    room[row, POWERS + 2] = u2
    room[row, POWERS + 3] = u3
    room[row, POWERS + 4] = u4
    room[row, LEAST] = lowest
    room[row, MOST] = highest
    room[row, LIGHTEST] = lightest


@internal(fastmath=REORDER)
def _weighted_sums_upper(x, w, pivot, base, room, row):
    """Six sums from order ``base + 1`` on; ``base`` is 4 or 10."""
    keep_apart()
    t1 = t2 = t3 = t4 = t5 = t6 = 0.0
    for start in range(0, x.size, STRETCH):
        part = x[start : min(start + STRETCH, x.size)]
        weight = w[start : min(start + STRETCH, x.size)]
        s1 = s2 = s3 = s4 = s5 = s6 = 0.0
        for i in range(part.size):
            d = extended(part[i] - pivot)
            d2 = d * d
            d4 = d2 * d2
            lift = weight[i] * d4
            if base == 10:
                lift *= d4 * d2
            s1 += lift * d
            s2 += lift * d2
            s3 += lift * d2 * d
            s4 += lift * d4
            s5 += lift * d4 * d
            s6 += lift * d4 * d2
        t1 += float(s1)
        t2 += float(s2)
        t3 += float(s3)
        t4 += float(s4)
        t5 += float(s5)
        t6 += float(s6)
    room[row, base + 1] = t1
    room[row, base + 2] = t2
    room[row, base + 3] = t3
    room[row, base + 4] = t4
    room[row, base + 5] = t5
    room[row, base + 6] = t6


@internal
def weighted_power_sums(x, w, pivot, order, room, row):
    keep_apart()
    _weighted_sums_4(x, w, pivot, room, row)
    if order > 4:
        _weighted_sums_upper(x, w, pivot, _FIRST_UPPER, room, row)
    if order > 10:
        _weighted_sums_upper(x, w, pivot, _SECOND_UPPER, room, row)
