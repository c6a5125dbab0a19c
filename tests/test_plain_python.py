"""The suite's small cases with plain Python kernels, to the same accuracy.

What fails compiled alone is the compiler's fault, what fails in both is the mathematics'.
"""

import os
import re
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from exact import BLOCK, CHANNEL_BLOCK, Exact, assert_promise_5, assert_same_state

import momentstream as ms

HERE = Path(__file__).parent
SMALL_CASES = [
    "test_accuracy.py::test_lengths_around_the_edges",
    "test_accuracy.py::test_every_order",
    "test_accuracy.py::test_removing",
    "test_accuracy.py::test_unbiased_estimates_of_reliability_weights",
    "test_accuracy.py::test_transformed_readings",
    "test_accuracy.py::test_unsigned_integers_near_the_top",
    "test_chunks.py::test_one_reading_at_a_time_in_every_configuration",
    "test_chunks.py::test_wide_integers_keep_their_spread",
    "test_chunks.py::test_gaps_within_one_block_are_as_if_never_there",
    "test_combine.py",
    "test_constants.py::test_any_constant",
    "test_constants.py::test_constants",
    "test_constants.py::test_constants_less_constants",
    "test_constants.py::test_weighted_constants",
    "test_constants.py::test_the_forbidden_never_appears",
    "test_constants.py::test_weighted_two_points",
    "test_scale.py::test_any_readings_any_scale",
    "test_scale.py::test_extreme_readings_neither_overflow_nor_vanish",
    "test_scale.py::test_no_warning_at_any_scale",
    "test_scale.py::test_parts_whose_weights_are_worlds_apart",
    "test_scale.py::test_std_is_finite_where_variance_is_not",
    "test_scale.py::test_std_is_not_zero_where_variance_is",
    "test_scale.py::test_the_mean_of_the_largest_doubles",
    "test_scale.py::test_the_whole_range_at_once",
    "test_plain_python.py::test_every_kind_of_kernel",
    "test_plain_python.py::test_a_clean_block_after_gapped_ones",
    "test_plain_python.py::test_a_refused_block",
]


def test_small_cases_in_plain_python():
    result = in_plain_python(["-m", "pytest", "-q", *[str(HERE / case) for case in SMALL_CASES]])
    report = result.stdout[-5000:] + result.stderr[-2000:]
    assert result.returncode == 0, report
    passed = re.search(r"(\d+) passed", result.stdout)
    assert passed, report
    assert int(passed[1]) >= 250, report


def test_kernels_are_plain_python_there():
    code = (
        "from momentstream.kernels import blocks, channels, user, vector\n"
        "kinds = {type(f).__name__ for m in (blocks, channels, user, vector)\n"
        "         for f in vars(m).values() if callable(f) and f.__module__ == m.__name__}\n"
        "print(sorted(kinds))"
    )
    result = in_plain_python(["-c", code])
    assert result.stdout.strip() == "['function']", result.stderr


def in_plain_python(arguments):
    return subprocess.run(
        [sys.executable, *arguments],
        env={**os.environ, "NUMBA_DISABLE_JIT": "1"},
        cwd=HERE.parent,
        capture_output=True,
        text=True,
    )


@pytest.mark.parametrize("order", [2, 4, 8, 16])
@pytest.mark.parametrize("weights", [None, "frequency", "reliability"], ids=str)
@pytest.mark.parametrize("shape", [(), (9,)], ids=str)
def test_every_kind_of_kernel(order, weights, shape):
    """Whole blocks and unfinished ones, gaps, weights, channels, threads, single precision."""
    rng = np.random.default_rng(order)
    block = CHANNEL_BLOCK if shape else BLOCK
    n = block + 50
    x = (rng.normal(size=(n, *shape)) + 1000.0).astype(np.float32)
    x[7] = np.nan
    w = None if weights is None else rng.integers(0, 4, n)
    configuration = {"order": order, "shape": shape, "weights": weights, "nonfinite": "omit"}
    whole = ms.Moments(**configuration).update(x, w, threads=2)
    pieces = ms.Moments(**configuration)
    for start, stop in ((0, 100), (100, block + 1), (block + 1, n)):
        pieces.update(x[start:stop].astype(float), None if w is None else w[start:stop])
    assert_same_state(pieces, whole, "cut")
    kept = np.arange(n) != 7
    w = None if w is None else w[kept].astype(float)
    blocks = [slice(0, block - 1), slice(block - 1, n - 1)]
    for i in range(shape[0] if shape else 1):
        one = whole.channel(i) if shape else whole
        column = x[kept, i] if shape else x[kept]
        assert_promise_5(one, Exact(column, w, order), blocks, f"channel {i}")


def test_a_clean_block_after_gapped_ones():
    # Where blocks had gaps the next are looked at otherwise: that may move no bit.
    x = np.random.default_rng(1).normal(size=10 * BLOCK)
    x[: 8 * BLOCK : 5000] = np.nan
    whole = ms.Moments(nonfinite="omit").update(x)
    pieces = ms.Moments(nonfinite="omit").update(x[: 8 * BLOCK]).update(x[8 * BLOCK :])
    assert_same_state(pieces, whole, "cut")


@pytest.mark.parametrize("shape", [(), (2,)], ids=str)
def test_a_refused_block(shape):
    x = np.ones((BLOCK + 10, *shape))
    x[BLOCK - 5] = np.inf
    accumulator = ms.Moments(shape=shape).update(x[:3])
    before = accumulator.to_bytes(resume=True)
    with pytest.raises(ms.NonFiniteError) as caught:
        accumulator.update(x)
    assert caught.value.position == ((BLOCK - 5, 0) if shape else BLOCK - 5)
    assert accumulator.to_bytes(resume=True) == before
