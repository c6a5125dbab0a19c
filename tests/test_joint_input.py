"""What goes into ``JointMoments``: weights, missing entries, names, bytes; and what is refused."""

import copy
import math
import pickle
import random
import struct
import warnings
import zlib
from fractions import Fraction

import numpy as np
import pandas as pd
import polars as pl
import pyarrow as pa
import pytest
from assertions import assert_close
from exact import assert_same_state
from published import load, square_root
from test_joint_moments import BLOCK, NAMES, ExactJoint, assert_sums, fed, quarters, rows_of

import momentstream as ms

NAN, INF = math.nan, math.inf
CASES = {case["id"]: case for case in load("field_failures.json") if case["kind"] == "joint"}


def both(moments):
    return moments.to_bytes(), moments.to_bytes(resume=True), moments.count, moments.omitted


# -- weights ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", ["frequency", "reliability"])
@pytest.mark.parametrize("offset", [0.0, 1e8])
def test_weighted_sums_against_exact_rationals(kind, offset):
    rows = rows_of(BLOCK + 200, 3, offset=offset)
    rng = np.random.default_rng(6)
    w = rng.integers(0, 9, len(rows)).astype(float)
    if kind == "reliability":
        w *= rng.random(len(rows))
    exact = ExactJoint(rows[w > 0], w[w > 0])
    for got in (
        fed(rows, w, weights=kind),
        ms.combine(fed(rows[i::3], w[i::3], weights=kind) for i in range(3)),
    ):
        assert_sums(got, exact, kind)
        assert got.count == (int(w.sum()) if kind == "frequency" else np.sum(w > 0))
        squares = sum(Fraction(q) ** 2 for q in w.tolist())
        lost = squares / exact.weight if kind == "reliability" else 1
        unbiased = exact.sum_of((0, 1)) / (exact.weight - lost)
        size = exact.sum_of((0, 1), abs) / exact.weight
        assert_close(
            got.covariance(ddof=1)[0, 1], unbiased, ulps=64, relative_to=size, label="unbiased"
        )
        effective = exact.weight**2 / squares if kind == "reliability" else exact.weight
        assert_close(got.effective_count, effective, ulps=64, label="effective count")


def test_frequencies_are_repetitions_and_rows_of_weight_zero_are_not_there():
    rows = rows_of(900, 2)
    w = np.arange(900) % 4
    got = fed(rows, w, weights="frequency", nonfinite="omit")
    repeated = np.repeat(rows, w, axis=0)
    assert_sums(got, ExactJoint(repeated), "repeated")
    assert got.count == len(repeated)
    assert np.array_equal(got.minimum(), repeated.min(axis=0))
    rows[w == 0, 1] = NAN
    for policy in ("raise", "omit"):
        again = fed(rows, w, weights="frequency", nonfinite=policy)
        assert_same_numbers_of(again, got)
        assert again.omitted == 0
    # A missing row of frequency 3 is three missing rows.
    missing = fed([[NAN, 1.0]], [3], weights="frequency", nonfinite="omit")
    assert (missing.count, missing.omitted) == (0, 3)


def assert_same_numbers_of(a, b):
    assert np.array_equal(a.mean(), b.mean())
    assert np.array_equal(a.cokurtosis(), b.cokurtosis())


def test_weights_of_any_scale():
    rows, w = rows_of(BLOCK + 9, 2), np.random.default_rng(2).random(BLOCK + 9)
    wanted = fed(rows, w, weights="reliability")
    for power in (-1000, -70, 65, 1000):
        got = fed(rows, np.ldexp(w, power), weights="reliability")
        assert_same_numbers_of(got, wanted)
        assert np.array_equal(got.covariance(ddof=1), wanted.covariance(ddof=1))
    one = ms.JointMoments(2, 4, weights="reliability").update(rows, 2.0)
    assert one == fed(rows, np.full(len(rows), 2.0), weights="reliability")


# -- missing entries -------------------------------------------------------------------------------


@pytest.mark.parametrize("bad", [NAN, INF, -INF])
@pytest.mark.parametrize("place", [(0, 0), (3, 1), (BLOCK + 5, 2)])
def test_missing_entries_are_refused_with_their_place(bad, place):
    rows = quarters(BLOCK + 20, 3)
    rows[place] = bad
    for given in (rows, rows.tolist(), iter(rows.tolist()), pd.DataFrame(rows, columns=NAMES)):
        got = ms.JointMoments(3, 4, names=NAMES).update(quarters(50, 3))
        before = both(got)
        with pytest.raises(ms.NonFiniteError) as caught:
            got.update(given)
        assert caught.value.position == place
        assert both(got) == before
    got = ms.JointMoments(3).update([1.0, 2.0, 3.0])
    with pytest.raises(ms.NonFiniteError) as caught:
        got.update([1.0, bad, 3.0])
    assert caught.value.position == (0, 1)
    assert got.count == 1


def test_one_missing_entry_is_one_missing_row():
    rows = quarters(3000, 3)
    gaps = np.random.default_rng(1).random(rows.shape) < 0.01
    gapped = np.where(gaps, NAN, rows)
    kept = ~gaps.any(axis=1)
    columns = dict(zip(NAMES, gapped.T, strict=True))
    masks = {n: pa.array(rows[:, j], mask=gaps[:, j]) for j, n in enumerate(NAMES)}
    ways = [
        gapped, np.ma.array(rows, mask=gaps), iter(gapped), pd.DataFrame(columns), pa.table(masks),
        pl.DataFrame(columns), pl.from_arrow(pa.table(masks)),
        pd.DataFrame(columns).convert_dtypes(dtype_backend="numpy_nullable"),
    ]  # fmt: skip
    states = [ms.JointMoments(3, 4, names=NAMES, nonfinite="omit").update(way) for way in ways]
    for got in states:
        assert (got.count, got.omitted) == (kept.sum(), (~kept).sum())
        assert got == states[0]
    assert_sums(states[0], ExactJoint(rows[kept]), "omit")


def test_propagating_is_ieee():
    rows = quarters(BLOCK + 700, 3)
    plain = fed(rows)
    for bad in (NAN, INF):
        rows[BLOCK + 3, 1] = bad
        for got in (
            fed(rows, nonfinite="propagate"),
            sum(fed(part, nonfinite="propagate") for part in np.array_split(rows, 4)),
        ):
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")
                wanted = rows.mean(axis=0)[1]
            assert np.array_equal(got.mean()[1], wanted, equal_nan=True)
            assert np.isnan(got.covariance()[1]).all()
            rest = got.covariance()[np.ix_([0, 2], [0, 2])]
            np.testing.assert_allclose(
                rest, plain.covariance()[np.ix_([0, 2], [0, 2])], rtol=64 * 2.0**-53
            )


@pytest.mark.parametrize(
    ("dtype", "low"), [(np.int64, 2**62), (np.uint64, 2**64 - 10**6), (np.int64, -(2**63))]
)
def test_wide_integers_keep_their_spread(dtype, low):
    steps = np.random.default_rng(3).integers(0, 1000, (BLOCK + 300, 2)).tolist()
    ints = [[low + a, low + a // 2 + b] for a, b in steps]
    exact = ExactJoint(ints)
    array = np.array(ints, dtype)
    for got in (fed(array), fed(ints), fed(iter(ints)), fed(array[:700]) + fed(array[700:])):
        assert_sums(got, exact, "wide integers")
    assert_same_state(fed(iter(ints)), fed(array), "iterator")
    mixed = [[low + a, b + 0.5] for a, b in steps[:300]]
    assert_sums(fed(mixed), ExactJoint(mixed), "mixed")
    with pytest.raises(ValueError, match="64"):
        ms.JointMoments(2).update([[1, 2**64]])


# -- dim and names ---------------------------------------------------------------------------------


def test_the_first_rows_tell():
    rows = quarters(40, 3)
    frame = pd.DataFrame(rows, columns=NAMES)
    for given in (rows, rows.tolist(), iter(rows.tolist()), rows[0], frame, pl.DataFrame(frame)):
        got = ms.JointMoments(None, 3)
        assert (got.dim, got.count) == (None, 0)
        assert ms.from_bytes(got.to_bytes()) == got
        got.update(given)
        named = isinstance(given, pd.DataFrame | pl.DataFrame)
        assert (got.dim, got.names) == (3, NAMES if named else None)
    assert ms.JointMoments(None, names=NAMES).dim == 3
    got = ms.JointMoments(None)
    for given, error in (
        (np.where(rows > 0, rows, NAN), None), ([], ValueError), (1.0, ValueError),
        ("ab", TypeError),
        (iter([[1.0, 2.0], [1.0]]), ValueError), (iter([]), ValueError),
        (frame.assign(x="a"), TypeError),
    ):  # fmt: skip
        given = np.array([[1.0, NAN]]) if error is None else given
        with pytest.raises(error or ms.NonFiniteError):
            got.update(given)
        assert (got.dim, got.names, got.count) == (None, None, 0)
    assert got.update([1.0, 2.0]).dim == 2
    assert (ms.JointMoments(None) + got).dim == (got + ms.JointMoments(None)).dim == 2


def test_columns_are_matched_by_name():
    frame = pd.DataFrame(quarters(30, 3), columns=NAMES)
    wanted = fed(frame.to_numpy(), names=NAMES)
    got = ms.JointMoments(3, 4, names=NAMES)
    for other in (
        frame[["flow", "inlet", "outlet"]],
        pl.DataFrame(frame)[["outlet", "flow", "inlet"]],
    ):
        assert got.copy().update(other) == wanted
    for other, word in (
        (frame[["inlet", "flow"]], "outlet"), (frame.assign(level=1.0), "level"),
        (frame.rename(columns={"flow": "level"}), "flow"),
    ):  # fmt: skip
        with pytest.raises(ValueError, match=word):
            got.update(other)
        assert got == ms.JointMoments(3, 4, names=NAMES)


def test_what_does_not_fit_is_not_merged():
    rows = [[1.0, 2.0], [2.0, 5.0]]
    one = ms.JointMoments(2, names=("a", "b")).update(rows)
    before = both(one)
    for other, word in (
        (ms.JointMoments(3), "dim"), (ms.JointMoments(2, 3), "order"),
        (ms.JointMoments(2, weights="frequency"), "weights"),
        (ms.JointMoments(2, names=("a", "c")), "'c'"),
        (ms.JointMoments(2, names=("b", "a")), "names"),
    ):  # fmt: skip
        for verb in (one.merge, one.remove):
            with pytest.raises(ms.MergeError, match=word):
                verb(other)
    with pytest.raises(ms.MergeError):
        one.merge(ms.Moments())
    assert both(one) == before
    plain = ms.JointMoments(2, nonfinite="omit").update(rows)
    assert (plain + one).names == (one + plain).names == ("a", "b")
    assert (plain + one).nonfinite == "omit"
    assert plain.names is None
    assert plain.merge(one).update(pd.DataFrame(rows, columns=["b", "a"])).mean().tolist() != [
        1.5,
        3.5,
    ]
    assert plain.mean().tolist() == pytest.approx(
        [(1 + 2 + 1 + 2 + 2 + 5) / 6, (2 + 5 + 2 + 5 + 1 + 2) / 6]
    )


@pytest.mark.parametrize(
    ("call", "error"),
    [
        (lambda: ms.JointMoments(0), ValueError), (lambda: ms.JointMoments(-1), ValueError),
        (lambda: ms.JointMoments(2.0), TypeError), (lambda: ms.JointMoments("2"), TypeError),
        (lambda: ms.JointMoments(2, 0), ValueError), (lambda: ms.JointMoments(2, 5), ValueError),
        (lambda: ms.JointMoments(2, names=("a",)), ValueError),
        (lambda: ms.JointMoments(2, names=("a", "a")), ValueError),
        (lambda: ms.JointMoments(2, names="ab"), TypeError),
        (lambda: ms.JointMoments(2, weights="some"), ValueError),
        (lambda: ms.JointMoments(2, nonfinite="drop"), ValueError),
    ],
)  # fmt: skip
def test_constructor(call, error):
    with pytest.raises(error):
        call()


class Broken(Exception):
    pass


def failing(rows):
    yield from rows
    raise Broken


@pytest.mark.parametrize(
    ("given", "error"),
    [
        ([1.0], ValueError), ([1.0, 2.0, 3.0], ValueError), (np.ones((2, 3)), ValueError),
        (np.ones((2, 2, 2)), ValueError), ([[1.0, 2.0], [1.0]], ValueError), (4.0, ValueError),
        (["a", "b"], TypeError), ("ab", TypeError), (None, TypeError), ([1.0, None], TypeError),
        ([1j, 2.0], TypeError), ({1.0, 2.0}, TypeError), ({"a": 1.0, "b": 2.0}, TypeError),
        (lambda: failing([[1.0, 2.0]] * 30_000), Broken),
        (lambda: iter([[1.0, 2.0]] * 30_000 + [[1.0]]), ValueError),
        (lambda: iter([[1.0, 2.0]] * 30_000 + [[1.0, "x"]]), TypeError),
        (lambda: iter([[1.0, 2.0]] * 30_000 + [[1.0, NAN]]), ms.NonFiniteError),
    ],
)  # fmt: skip
def test_what_is_refused_changes_nothing(given, error):
    got = fed(quarters(BLOCK + 3, 2)).update([3.0, 4.0])
    before = both(got)
    with pytest.raises(error):
        got.update(given() if callable(given) else given)
    assert both(got) == before
    with pytest.raises(ValueError, match="weights"):
        got.update([1.0, 2.0], 2.0)
    assert both(got) == before


@pytest.mark.parametrize("w", [[1.0, -1.0], [1.0, NAN], [1.0], [1.0, INF], np.ones((2, 2)), None])
def test_weights_that_are_refused(w):
    for kind in ("frequency", "reliability"):
        got = ms.JointMoments(2, weights=kind).update([1.0, 2.0], 1)
        before = both(got)
        with pytest.raises(ValueError):  # noqa: PT011
            got.update([[1.0, 2.0], [3.0, 4.0]], w)
        assert both(got) == before
    with pytest.raises(ValueError, match="whole"):
        ms.JointMoments(2, weights="frequency").update([1.0, 2.0], 0.5)


# -- copies and bytes ------------------------------------------------------------------------------


@pytest.mark.parametrize("weights", [None, "frequency", "reliability"])
def test_copies_continue_bit_for_bit(weights, tmp_path):
    rows, more = quarters(2 * BLOCK + 77, 3), quarters(BLOCK, 3, seed=9)
    w = None if weights is None else 1.0 + np.arange(len(rows)) % 3
    one = fed(rows, w, names=NAMES, weights=weights).update([1.0, 2.0, 3.0], weights and 1)
    ms.save(one, tmp_path / "state")
    copies = [
        one.copy(), copy.copy(one), copy.deepcopy(one), ms.from_bytes(one.to_bytes(resume=True)),
        ms.JointMoments.from_bytes(one.to_bytes(resume=True)), ms.load(tmp_path / "state"),
    ]  # fmt: skip
    settled = [pickle.loads(pickle.dumps(one)), ms.from_bytes(one.to_bytes())]
    for other in (*copies, *settled):
        assert other == one
        assert repr(other) == repr(one)
        assert (other.names, other.weights, other.nonfinite) == (NAMES, weights, "raise")
    one.update(more, weights and 2)
    for other in copies:
        assert other != one
        assert_same_state(other.update(more, weights and 2), one, "continued")
    for other in settled:
        assert_close(other.update(more, weights and 2).covariance(), one.covariance(),
                     ulps=128, label="continued from a settled state")  # fmt: skip
    assert one.clear() == ms.JointMoments(3, 4, names=NAMES, weights=weights)
    assert "\n" not in repr(one)


def test_equality():
    one = ms.JointMoments(2).update([[1.0, 2.0], [3.0, 4.0]])
    assert one == ms.JointMoments(2).update([1.0, 2.0]).update([3.0, 4.0])
    for other in (
        ms.JointMoments(2), ms.JointMoments(2, 3).update([[1.0, 2.0], [3.0, 4.0]]),
        ms.JointMoments(2, nonfinite="omit").update([[1.0, 2.0], [3.0, 4.0]]),
        ms.JointMoments(2, names=("a", "b")).update([[1.0, 2.0], [3.0, 4.0]]), ms.Moments(),
        1, None,
    ):  # fmt: skip
        assert one != other
    assert repr(one) == "JointMoments(dim=2, order=2, count=2, mean=[2, 3], std=[1, 1])"


def repaired(data):
    return bytes(data[:-4]) + struct.pack("<I", zlib.crc32(bytes(data[:-4])))


def assert_refused_or_sound(data):
    """A StateError, or an accumulator that reads, writes, merges and goes on."""
    try:
        got = ms.from_bytes(data)
    except ms.StateError:
        return 0
    for form in (False, True):
        assert ms.from_bytes(got.to_bytes(resume=form)) == got
    repr(got), str(got.summary()), got.minimum(), got.covariance() if got.order > 1 else 0
    try:
        total = got + got
    except ms.MergeError:  # counts beyond 63 bits
        return 1
    assert total.count == 2 * got.count
    return 1


def small_states():
    two = [[1.0, 2.0], [4.0, 2.5], [2.0, 8.0]]
    yield ms.JointMoments(2, 2).update(two).to_bytes()
    yield (
        ms.JointMoments(2, 4, names=("a", "b"), nonfinite="omit").update(two).to_bytes(resume=True)
    )
    yield ms.JointMoments(2, 3, weights="reliability").update(two, [1.0, 0.5, 2.0]).to_bytes()
    yield ms.JointMoments(1, 1, weights="frequency").update([[2.0]], 3).to_bytes(resume=True)
    yield ms.JointMoments(None).to_bytes()
    yield ms.JointMoments(2).update([[2**62 + 1, 1], [2**62 + 5, 3]]).to_bytes(resume=True)
    big = fed(rows_of(3 * BLOCK + 2, 2), order=2)
    yield big.to_bytes(resume=True)


@pytest.mark.parametrize("which", range(7))
def test_hostile_bytes(which):
    data = list(small_states())[which]
    assert assert_refused_or_sound(data) == 1
    for stop in range(len(data)):
        with pytest.raises(ms.StateError):
            ms.from_bytes(data[:stop])
        if 24 <= stop < len(data) - 4:  # also where length and checksum fit what is left
            cut = data[:16] + struct.pack("<Q", stop - 24) + data[24:stop] + bytes(4)
            with pytest.raises(ms.StateError):
                ms.from_bytes(repaired(cut))
    read = 0
    for place in range(8, len(data) - 4):
        for change in (1, 0x80, 0xFF):
            read += assert_refused_or_sound(
                repaired([*data[:place], data[place] ^ change, *data[place + 1 :]])
            )
    assert read > 0
    rng = random.Random(which)
    for _ in range(150):
        damaged = bytearray(data)
        for _ in range(rng.randrange(1, 6)):
            start = rng.randrange(24, len(data) - 4)
            size = rng.choice([1, 2, 8])
            damaged[start : start + size] = rng.choice(
                [rng.randbytes(size), bytes(size), b"\xff" * size]
            )[: len(damaged) - start]
        assert_refused_or_sound(repaired(damaged))


# -- where others are wrong ------------------------------------------------------------------------


def columns_of(case):
    """The two columns of a case, made where the file has an expression."""
    data = CASES[case]["data"]
    if "x" in data:
        return np.array(data["x"]), np.array(data["y"])
    if case == "corr-const-columns":
        return np.full(100, 10000001.1), np.full(100, 20000003.3)
    k = np.arange(2000)
    x = (k * 7919) % 1009
    return 1e8 + x / 256.0, 1e8 + x / 512.0 + ((k * 104729) % 997) / 256.0


@pytest.mark.parametrize("case", CASES)
def test_right_where_others_are_not(case):
    rows = np.stack(columns_of(case), axis=1)
    exact, answers = ExactJoint(rows), CASES[case]["exact"]
    size = exact.sum_of((0, 1), abs) / exact.weight
    spreads = exact.sum_of((0, 0)) * exact.sum_of((1, 1))
    for parts in (1, 2, 7):
        got = ms.combine(fed(part) for part in np.array_split(rows, parts) if len(part))
        for statistic, value in answers.items():
            if statistic == "corr":
                ours = got.correlation()[0, 1]
                root = square_root(exact.sum_of((0, 1)) ** 2 / spreads) if spreads else None
                assert root is None or abs(abs(Fraction(value)) - root) < Fraction(1, 10**15)
                assert_close(
                    ours, value, ulps=8, relative_to=None if root is None else 1, label=case
                )
            else:
                ours = got.covariance(ddof=int(statistic[-1]))[0, 1]
                assert_close(ours, value, ulps=16, relative_to=size or None, label=case)
