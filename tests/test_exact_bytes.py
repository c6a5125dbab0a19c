"""Promise 7 for ``ExactMoments``: canonical bytes; hostile ones are refused and cost nothing."""

import itertools
import math
import pickle
import random
import struct
import tracemalloc
import zlib
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import momentstream as ms

NAN, INF = math.nan, math.inf
HEAD = struct.Struct("<8sHHIQ")
MAGIC = b"\x93mstate\n"
POLICIES = ("raise", "omit", "propagate")


# -- the format as it is written down --------------------------------------------------------------


def frame(payload, kind=2, flags=0, version=1, size=None):
    size = len(payload) if size is None else size
    body = HEAD.pack(MAGIC, version, kind, flags, size) + payload
    return body + struct.pack("<I", zlib.crc32(body))


def repaired(data):
    """A frame whose checksum fits again."""
    return bytes(data[:-4]) + struct.pack("<I", zlib.crc32(bytes(data[:-4])))


def payload(order=4, policy=0, counts=(0, 0, 0, 0, 0), bins=(), extremes=(INF, -INF), claimed=None):
    """A payload by the words of the documentation; a bin is (exponent, sums)."""
    result = struct.pack(
        "<BB5QH", order, policy, *counts, len(bins) if claimed is None else claimed
    )
    for exponent, sums in bins:
        result += struct.pack("<h", exponent)
        for k, value in enumerate(sums, start=1):
            result += value.to_bytes(8 * (k + 1), "little", signed=True)
    return result + (b"\0" if extremes is None else b"\1" + struct.pack("<2d", *extremes))


def written(values, order=4, policy="raise", extremes=True):
    """The bytes of these readings, made without the package."""
    bins, counts, finite = {}, [0] * 5, []
    for value in values:
        if isinstance(value, float) and not math.isfinite(value):
            if policy == "omit":
                counts[1] += 1
                continue
            counts[2 if math.isnan(value) else 3 if value > 0 else 4] += 1
        counts[0] += 1
        if isinstance(value, float) and not math.isfinite(value):
            continue
        finite.append(float(value))
        exponent, m = 0, value
        if float(value) == value:
            fraction, exponent = math.frexp(value)
            exponent = max(exponent - 53, -1074)
            m = (
                int(math.ldexp(fraction, 53))
                if exponent > -1074
                else int(Fraction(value) * 2**1074)
            )
        if m:
            sums = bins.setdefault(exponent, [0] * order)
            bins[exponent] = [s + m**k for k, s in enumerate(sums, start=1)]
    content = [(e, bins[e]) for e in sorted(bins) if any(bins[e])]
    ends = (min(finite, default=INF), max(finite, default=-INF)) if extremes else None
    return frame(payload(order, POLICIES.index(policy), counts, content, ends))


READINGS = [
    [], [0.0], [1.0, 2.0, 3.0, 10.0], [-1.5, 1.5, 0.1], [5e-324, 1.7e308, -3e-310, 2.0**-1022],
    [2**64 - 1, -(2**63) + 1, 2**53 + 1, 2**60, 7, 0.5], [1e300, -1e300, 0.0], [-1.0, 1.0],
]  # fmt: skip
GAPPED = [[NAN, 1.0, INF, -2.5, -INF, INF], [NAN], [INF, -INF, 3.0, NAN]]


@pytest.mark.parametrize("order", [1, 2, 3, 4])
def test_the_documentation_is_enough_to_write_a_state(order):
    for policy in POLICIES:
        for values in READINGS + ([] if policy == "raise" else GAPPED):
            exact = ms.ExactMoments(order, nonfinite=policy).update(values)
            data = written(values, order, policy)
            assert exact.to_bytes() == data, values
            # The working state is this too, under its own flag.
            assert exact.to_bytes(resume=True) == frame(data[24:-4], flags=1)
            for read in (ms.from_bytes, ms.ExactMoments.from_bytes):
                back = read(data)
                assert type(back) is ms.ExactMoments
                assert back == exact
                assert (back.order, back.nonfinite) == (order, policy)
                assert repr(back) == repr(exact)
                assert repr(back.minimum()) == repr(exact.minimum())
                assert (back.count, back.omitted) == (exact.count, exact.omitted)
            part = exact.copy().merge(exact).remove(exact)
            if exact.count:
                assert part.to_bytes() == written(values, order, policy, extremes=False)


def test_equal_content_has_equal_bytes_whatever_the_history():
    wanted = written([1.0, 2.0], extremes=False)[24:-5]
    base = ms.ExactMoments().update([1.0, 2.0])
    histories = [
        base.copy(),
        (base + ms.ExactMoments().update([1e300, 5e-324])).remove(
            ms.ExactMoments().update([5e-324]).update(1e300)
        ),
        # Exponents come and go; a sum of odd powers that cancels stays with its squares.
        (base + ms.ExactMoments().update([-7e9, 7e9])).remove(
            ms.ExactMoments().update([-7e9, 7e9])
        ),
        ms.ExactMoments().update([2**63 - 1, 2, 1]).remove(ms.ExactMoments().update(2**63 - 1)),
        ms.from_bytes(base.to_bytes()).merge(ms.ExactMoments()),
        ms.ExactMoments().update(np.arange(9000.0)).clear().merge(base),
    ]
    for exact in histories:
        assert exact == base
        assert exact.to_bytes()[24:].startswith(wanted)
    # Order 1 alone forgets an exponent whose readings cancel.
    first = ms.ExactMoments(1).update([-7e9, 7e9, 1.0])
    assert first.to_bytes()[:68] == written([0.0, 0.0, 1.0], 1)[:68]
    assert first == ms.ExactMoments(1).update([0.0, 0.0, 1.0])


def test_equality():
    base = ms.ExactMoments().update([1.0, 2.0])
    assert base != ms.ExactMoments().update([1.0, 2.5])
    assert base != ms.ExactMoments().update([1.0, 2.0, 0.0])
    assert base != ms.ExactMoments(3).update([1.0, 2.0])
    assert base != ms.ExactMoments(nonfinite="omit").update([1.0, 2.0])
    assert base != ms.Moments().update([1.0, 2.0])
    assert (base == 5, base != 5) == (False, True)
    gaps = [ms.ExactMoments(nonfinite="propagate").update(v) for v in ([NAN, 1.0], [1.0, NAN])]
    assert gaps[0] == gaps[1]
    assert gaps[0] != ms.ExactMoments(nonfinite="propagate").update([INF, 1.0])
    with pytest.raises(TypeError, match="hash"):
        hash(base)


# -- hostile bytes ---------------------------------------------------------------------------------

VICTIMS = {f"{values}, order {order}": written(values, order) for values in READINGS[:6]
           for order in (1, 4)}  # fmt: skip
VICTIMS["gaps"] = written(GAPPED[0], policy="propagate")
VICTIMS["omitted"] = written(GAPPED[2], policy="omit")
VICTIMS["unknown extremes"] = written([1.0, 3.0], extremes=False)
VICTIMS["working"] = frame(written([1.0, 3.0])[24:-4], flags=1)


def refused(data):
    """StateError, or an accumulator that is these bytes and whatever is done with it stands."""
    try:
        exact = ms.from_bytes(data)
    except ms.StateError:
        return True
    assert exact.to_bytes(resume=bool(data[12] & 1)) == data
    assert ms.from_bytes(exact.to_bytes()) == exact == pickle.loads(pickle.dumps(exact))
    exact.mean(), exact.minimum(), exact.raw(exact.order, about=0.5), repr(exact)
    if exact.order == 4:
        assert not exact.variance() < 0.0
        assert not exact.central(4) < 0.0
        exact.std(1), exact.skewness(bias=False), exact.kurtosis(bias=False), exact.k_statistic(4)
    exact.summary().as_dict(), exact.as_fractions()
    other = exact.copy()
    for call in (lambda: other.update([1.5, 2**64 - 1]), lambda: other.merge(exact),
                 lambda: other.remove(exact)):  # fmt: skip
        before = other.to_bytes()
        try:
            call()
        except ValueError:  # counts near 2**63
            assert other.to_bytes() == before
    return False


@pytest.mark.parametrize("name", VICTIMS)
def test_cut_and_changed_bytes(name):
    data = VICTIMS[name]
    for size in range(len(data)):
        for cut in (data[:size], data[size + 1 :], data[:size] + data[size + 1 :]):
            with pytest.raises(ms.StateError):
                ms.from_bytes(cut)
        if 24 <= size < len(data) - 4:
            assert refused(frame(data[24:size], flags=data[12])), size
    for place, mask in itertools.product(range(len(data)), (0x01, 0x10, 0x80, 0xFF)):
        changed = bytearray(data)
        changed[place] ^= mask
        with pytest.raises(ms.StateError):
            ms.from_bytes(bytes(changed))
        if place < len(data) - 4:
            refused(repaired(changed))
    for more in (b"\0", b"\1" * 8, data):
        assert refused(frame(data[24:-4] + more, flags=data[12]))


@pytest.mark.parametrize("seed", range(3))
def test_random_damage_behind_a_good_checksum(seed):
    rng = random.Random(seed)
    pool = list(VICTIMS.values())
    accepted = 0
    for _ in range(800):
        data = bytearray(rng.choice(pool)[24:-4])
        for _ in range(rng.choice([1, 1, 2, 4])):
            place = rng.randrange(len(data))
            number = rng.choice([0, 1, -1, 2**62, -(2**63), 1074, -1074, 971, 972, 3, 12])
            damage = rng.randrange(4)
            if damage == 0:
                data[place] = rng.randrange(256)
            elif damage == 1:
                data[place : place + 8] = struct.pack("<q", number)
            elif damage == 2:
                data[place : place + 2] = struct.pack("<h", number % 4096 - 2048)
            else:
                data[place : place + 16] = rng.choice(pool)[66:82]
        accepted += not refused(frame(bytes(data)))
    assert 0 < accepted < 700


@settings(max_examples=300, deadline=None)
@given(st.binary(max_size=300))
def test_arbitrary_payloads(data):
    refused(frame(data))
    refused(frame(payload()[:44] + data))


ONE = (0, (1, 1, 1, 1))
BEYOND = [
    # order, policy
    {"order": 0}, {"order": 5}, {"order": 255}, {"policy": 3}, {"policy": 255},
    # counts that cannot be
    {"counts": (2**63 - 1, 0, 0, 0, 0), "extremes": (0.0, 0.0)},
    {"counts": (2**64 - 1, 0, 0, 0, 0)},
    {"counts": (0, 2**63, 0, 0, 0)}, {"counts": (0, 0, 1, 0, 0)}, {"counts": (2, 0, 1, 1, 1)},
    {"counts": (2**62, 0, 2**62, 2**62, 2**62)}, {"counts": (3, 0, 2**64 - 1, 0, 0)},
    # exponents that no double has, out of order, doubled; exponents without content
    *({"counts": (1, 0, 0, 0, 0), "bins": [(e, (1, 1, 1, 1))], "extremes": (1.0, 1.0)}
      for e in (-1075, 972, -(2**15), 2**15 - 1)),
    {"counts": (2, 0, 0, 0, 0), "bins": [(1, (1, 1, 1, 1)), ONE], "extremes": (1.0, 2.0)},
    {"counts": (2, 0, 0, 0, 0), "bins": [ONE, ONE], "extremes": (1.0, 1.0)},
    {"counts": (1, 0, 0, 0, 0), "bins": [(0, (0, 0, 0, 0))], "extremes": (0.0, 0.0)},
    # sums that no data have
    *({"counts": (9, 0, 0, 0, 0), "bins": [(0, sums)], "extremes": (-9.0, 9.0)}
      for sums in ((0, -2, 0, 2), (0, 2, 0, -2), (1, 2, 1, 2), (1, 1, 2, 1), (1, 1, 1, 2),
                   (5, 1, 5, 1), (0, 0, 0, 12), (2, 2, 8, 2), (1, 1, 0, 1), (0, 0, 6, 0),
                   (9, 9, 9, 3), (0, 12, 0, 12))),
    {"counts": (1, 0, 0, 0, 0), "bins": [(3, (2**53, 2**106, 2**159, 2**212))],
     "extremes": (1.0, 1.0)},
    {"order": 1, "counts": (1, 0, 0, 0, 0), "bins": [(3, (2**54,))], "extremes": (1.0, 1.0)},
    {"order": 1, "counts": (2, 0, 0, 0, 0), "bins": [(0, (-(2**66),))], "extremes": (1.0, 1.0)},
    {"bins": [ONE]}, {"bins": [ONE], "extremes": (1.0, 1.0)},
    {"counts": (1, 0, 1, 0, 0), "bins": [ONE], "extremes": (1.0, 1.0)},
    {"counts": (1, 0, 0, 0, 0), "bins": [ONE, (1, (1, 1, 1, 1))], "extremes": (1.0, 2.0)},
    # each exponent on its own may be, both together may not: the variance would be negative
    {"counts": (4, 0, 0, 0, 0), "bins": [(0, (4, 4, 4, 4)), (1, (4, 4, 4, 4))],
     "extremes": (1.0, 2.0)},
    # a sum of fourth powers above the square of the sum of squares
    {"counts": (9, 0, 0, 0, 0), "bins": [(0, (2, 2, 2, 14))], "extremes": (-9.0, 9.0)},
    # extremes that no data have
    {"counts": (1, 0, 0, 0, 0)}, {"counts": (1, 0, 0, 0, 0), "extremes": (2.0, 1.0)},
    {"extremes": (1.0, 1.0)}, {"extremes": (INF, 5.0)}, {"extremes": (-INF, INF)},
    {"counts": (1, 0, 0, 0, 0), "extremes": (NAN, NAN)}, {"extremes": (NAN, -INF)},
    {"counts": (1, 0, 0, 0, 0), "extremes": (0.0, INF)},
    {"counts": (1, 0, 0, 0, 0), "extremes": (0.0, NAN)},
    {"counts": (1, 0, 0, 0, 0), "extremes": (-INF, 0.0)},
    # claims
    {"claimed": 2**16 - 1}, {"claimed": 1}, {"counts": (1, 0, 0, 0, 0), "claimed": 2046},
]  # fmt: skip


@pytest.mark.parametrize("number", range(len(BEYOND)))
def test_what_no_readings_make_is_refused(number):
    # All else in it is right.
    good = ms.from_bytes(frame(payload(counts=(1, 0, 0, 0, 0), bins=[ONE], extremes=(1.0, 1.0))))
    assert good.count == 1
    for flags in (0, 1):
        with pytest.raises(ms.StateError):
            ms.from_bytes(frame(payload(**BEYOND[number]), flags=flags))


def test_foreign_frames():
    exact = ms.ExactMoments().update([1.0, 2.0])
    body = exact.to_bytes()[24:-4]
    for kind in (0, 1, 3, 999):
        with pytest.raises(ms.StateError):
            ms.from_bytes(frame(body, kind=kind))
    for changed in ({"version": 0}, {"version": 2}, {"flags": 2}, {"size": 2**60}, {"size": 0}):
        with pytest.raises(ms.StateError):
            ms.from_bytes(frame(body, **changed))
    with pytest.raises(ms.StateError, match="expected Moments"):
        ms.Moments.from_bytes(exact.to_bytes())
    with pytest.raises(ms.StateError, match="expected ExactMoments"):
        ms.ExactMoments.from_bytes(ms.Moments().to_bytes())
    for other in ("text", 5, None, [1]):
        with pytest.raises(TypeError, match="bytes"):
            ms.ExactMoments.from_bytes(other)


def test_claims_cost_no_memory():
    attacks = [frame(payload(claimed=65535)), frame(payload(claimed=65535) + bytes(1000))]
    attacks += [frame(payload(), size=2**62), frame(payload(counts=(2**64 - 1,) * 5))]
    bins = [(e, (1, 1, 1, 1)) for e in range(-1074, 972)]
    full = frame(payload(counts=(2046, 0, 0, 0, 0), bins=bins, extremes=(0.0, 1e308)))
    assert ms.from_bytes(full).count == 2046
    for data in [*attacks, full]:
        tracemalloc.start()
        refused(data) if data in attacks else ms.from_bytes(data)
        peak = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        assert peak < 100_000 + 20 * len(data)
