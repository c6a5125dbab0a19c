"""Exact power sums: every reading is an integer times a power of two, and integers are added.

A finite double is M * 2**e with abs(M) < 2**53.  Readings of one sign and one exponent share a
slot, which holds the sums of abs(M)**k for k = 1 .. order in 2, 3, 4, 5 words of 64 bits, modulo
their length, so that sums with a sign fit too: with abs(M) < 2**64 and fewer than 2**63 readings
the sum of k-th powers needs 64 k + 63 bits and one for the sign.  ``places`` maps the upper 12 bits
of a double (sign and exponent) to its slot, or -1; ``table`` is (slots, 16) words.

(Neal 2015, "Fast exact summation using small and large superaccumulators", adds the readings
themselves in this way.)
"""

import numpy as np
from llvmlite import ir
from numba.core import types
from numba.extending import intrinsic

from .compiling import PLAIN_PYTHON, compiled, internal, internal_as, keep_apart

PLACES = 4096
WORDS = 16  # of a slot: 14 of sums, one unused, and the key
FIRST_WORD = (0, 0, 2, 5, 9)  # of the sum of k-th powers
WIDTHS = (0, 2, 3, 4, 5)  # in words
KEY = 15  # the word that holds a slot's place
INTEGERS = np.int64(1075)  # the place of doubles whose exponent e is 0; wide integers go there
_NEGATIVE = np.int64(2048)
_FRACTION = np.uint64(2**52 - 1)
_HIDDEN = np.uint64(2**52)


def _make_add_powers(order):
    @intrinsic
    def add_powers(typing_context, table, slot, mantissa):
        """Add the powers of a mantissa to a slot."""

        def generate(context, builder, signature, arguments):
            array = context.make_array(signature.args[0])(context, builder, arguments[0])
            _, place, value = arguments
            word = ir.IntType(64)
            base = builder.mul(place, ir.Constant(word, WORDS))

            def wide(value, words):
                return builder.zext(value, ir.IntType(64 * words))

            def shifted(value, words):
                return builder.shl(value, ir.Constant(value.type, 64 * words))

            powers = {1: value}
            if order >= 2:
                double = wide(value, 2)
                powers[2] = square = builder.mul(double, double)
                low = builder.trunc(square, word)
                high = builder.trunc(builder.lshr(square, ir.Constant(square.type, 64)), word)
            if order >= 3:
                cube = builder.add(
                    wide(builder.mul(wide(low, 2), double), 3),
                    shifted(wide(builder.mul(wide(high, 2), double), 3), 1),
                )
                powers[3] = cube
            if order >= 4:
                low_2, high_2 = wide(low, 2), wide(high, 2)
                across = wide(builder.mul(low_2, high_2), 4)
                fourth = builder.add(
                    wide(builder.mul(low_2, low_2), 4),
                    shifted(wide(builder.mul(high_2, high_2), 4), 2),
                )
                fourth = builder.add(fourth, builder.shl(across, ir.Constant(across.type, 65)))
                powers[4] = fourth
            for k in range(1, order + 1):
                kind = ir.IntType(64 * WIDTHS[k])
                index = builder.add(base, ir.Constant(word, FIRST_WORD[k]))
                pointer = builder.bitcast(builder.gep(array.data, [index]), kind.as_pointer())
                total = builder.load(pointer, align=8)
                power = powers[k]
                if power.type != kind:
                    power = builder.zext(power, kind)
                builder.store(builder.add(total, power), pointer, align=8)
            return context.get_dummy_value()

        return types.void(table, slot, mantissa), generate

    return add_powers


def _make_add_powers_plainly(order):
    def add_powers(table, slot, mantissa):
        """Add the powers of a mantissa to a slot."""
        for k in range(1, order + 1):
            words = table[slot, FIRST_WORD[k] : FIRST_WORD[k] + WIDTHS[k]]
            total = int.from_bytes(words.tobytes(), "little") + int(mantissa) ** k
            data = (total % (1 << 64 * WIDTHS[k])).to_bytes(8 * WIDTHS[k], "little")
            words[:] = np.frombuffer(data, np.uint64)

    return add_powers


_make = _make_add_powers_plainly if PLAIN_PYTHON else _make_add_powers
_add_1, _add_2, _add_3, _add_4 = (_make(order) for order in range(1, 5))


@internal
def _slot_of(place, places, table, used):
    """The slot of a place, a new one where it has none; -1 where the table is full."""
    slot = np.int64(places[place])
    if slot < 0 and used[0] < table.shape[0]:
        slot = used[0]
        places[place] = slot
        table[slot, KEY] = place
        for word in range(KEY):
            table[slot, word] = 0
        used[0] += 1
    return slot


def _make_add_readings(order, add_powers):
    @internal_as(f"add_readings_{order}")
    def add_readings(x, begin, places, table, used, extremes):
        keep_apart()
        bits = x.view(np.uint64)
        least, most = extremes[0], extremes[1]
        i = begin
        while i < x.size:
            value = x[i]
            place = np.int64(bits[i] >> np.uint64(52))
            mantissa = bits[i] & _FRACTION
            exponent = place & 2047
            if exponent == 2047:
                break
            if exponent != 0:
                mantissa |= _HIDDEN
            if mantissa != 0:
                slot = np.int64(places[place])
                if slot < 0:
                    slot = _slot_of(place, places, table, used)
                    if slot < 0:
                        break
                add_powers(table, slot, mantissa)
            if value < least:
                least = value
            if value > most:
                most = value
            i += 1
        extremes[0], extremes[1] = least, most
        return i

    return add_readings


_add_readings_1, _add_readings_2 = _make_add_readings(1, _add_1), _make_add_readings(2, _add_2)
_add_readings_3, _add_readings_4 = _make_add_readings(3, _add_3), _make_add_readings(4, _add_4)


@compiled
def add_readings(x, begin, order, places, table, used, extremes):
    """Add readings from ``begin`` on, up to one that is not finite or finds the table full.

    Returns its place, ``x.size`` where all were added; ``used[0]`` counts the slots in use.
    """
    if order == 1:
        return _add_readings_1(x, begin, places, table, used, extremes)
    if order == 2:
        return _add_readings_2(x, begin, places, table, used, extremes)
    if order == 3:
        return _add_readings_3(x, begin, places, table, used, extremes)
    return _add_readings_4(x, begin, places, table, used, extremes)


@compiled
def add_wide(x, low, begin, order, places, table, used, extremes):
    """``add_readings`` of pairs x + low: where low is not zero, integers of up to 64 bits."""
    one = np.empty(1)
    for i in range(begin, x.size):
        one[0] = x[i]
        if low[i] == 0.0:
            if add_readings(one, 0, order, places, table, used, extremes) == 0:
                return i
            continue
        place = INTEGERS
        size, rest = x[i], low[i]
        if size < 0.0:
            place += _NEGATIVE
            size, rest = -size, -rest
        # The nearest double may be 2**64 itself: words wrap round.
        upper = np.uint64(size * 2.0**-32)
        mantissa = (upper << np.uint64(32)) + np.uint64(
            np.int64((size - np.float64(upper) * 2.0**32) + rest)
        )
        slot = _slot_of(place, places, table, used)
        if slot < 0:
            return i
        if order == 1:
            _add_1(table, slot, mantissa)
        elif order == 2:
            _add_2(table, slot, mantissa)
        elif order == 3:
            _add_3(table, slot, mantissa)
        else:
            _add_4(table, slot, mantissa)
        if x[i] < extremes[0]:
            extremes[0] = x[i]
        if x[i] > extremes[1]:
            extremes[1] = x[i]
    return x.size


@compiled
def add_table(order, places, table, used, more, slots):
    """Add the slots of another table; there must be room for all of them."""
    for other in range(slots):
        slot = _slot_of(np.int64(more[other, KEY]), places, table, used)
        word = 0
        for k in range(1, order + 1):
            carry = np.uint64(0)
            for _ in range(k + 1):
                part = more[other, word]
                total = table[slot, word] + part
                above = np.uint64(total < part)
                total += carry
                above += np.uint64(total < carry)
                table[slot, word] = total
                carry = above
                word += 1
