"""Exact moments as ratios of integers, and their correctly rounded doubles.

The readings are integers times ``2**exponent``; ``sums`` are the power sums A_1 .. A_p of the
integers, ``count`` is N.  With

    D2 = N A2 - A1**2
    D3 = N**2 A3 - 3 N A1 A2 + 2 A1**3
    D4 = N**3 A4 - 4 N**2 A1 A3 + 6 N A1**2 A2 - 3 A1**4

the sums of powers of deviations from the mean are M_k = D_k 2**(k exponent) / N**(k - 1), without
any rounding.  A ratio is rounded once: to nearest, ties to even, subnormal numbers and overflow
included.
"""

from math import comb, copysign, inf, isqrt


def deviations(count, sums):
    """D_1 .. D_p: N**(k - 1) times the sums of powers of deviations from the mean.

    ``D_k = sum_j C(k, j) (-A1)**j N**(k - 1 - j) A_{k-j}``, where the last two terms, which have
    no A of their own, come to ``(-1)**(k - 1) (k - 1) A1**k``.
    """
    first = sums[0]
    result = [0]
    for k in range(2, len(sums) + 1):
        total = (-1) ** (k - 1) * (k - 1) * first**k
        for j in range(k - 1):
            total += comb(k, j) * (-first) ** j * count ** (k - 1 - j) * sums[k - j - 1]
        result.append(total)
    return result


def sums_about(count, sums, point):
    """Sums of the powers of x - point, as a list from order 1 on; ``point`` is an integer."""
    whole = [count, *sums]
    return [
        sum(comb(k, j) * whole[k - j] * (-point) ** j for j in range(k + 1))
        for k in range(1, len(whole))
    ]


def nearest(above, below=1, exponent=0):
    """The double nearest to ``above / below * 2**exponent``; infinite beyond their range."""
    if exponent >= 0:
        above <<= exponent
    else:
        below <<= -exponent
    try:
        # Division of integers is rounded once, subnormal results included.
        return above / below
    except OverflowError:
        return inf if (above < 0) == (below < 0) else -inf


def nearest_root(above, below=1, exponent=0, sign=1):
    """The double nearest to ``sign * sqrt(above / below) * 2**exponent``.

    The square root of an integer, cut, with at least 66 bits and one more that tells whether
    anything was cut off: it is then rounded once.
    """
    shift = max(0, 66 - (above.bit_length() - below.bit_length()) // 2)
    quotient, left = divmod(above << 2 * shift, below)
    root = isqrt(quotient)
    sticky = left != 0 or root * root != quotient
    return copysign(nearest(2 * root + sticky, 1, exponent - shift - 1), sign)
