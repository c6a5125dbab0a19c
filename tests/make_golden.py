"""Write the golden states of the present byte format, and what must be read off them.

Run it once for a new format version (``python tests/make_golden.py``): states that are there
already stay as they are, for they show what earlier releases wrote.  The expected values do not
come from the package: they are exact rational arithmetic on the readings, to 25 digits.
"""

import json
import math
import sys
from fractions import Fraction
from pathlib import Path
from typing import NamedTuple

import numpy as np
from exact import Exact

import momentstream as ms
from momentstream.codec.frames import VERSION

FOLDER = Path(__file__).parent / "data" / "golden"
NAN, INF = math.nan, math.inf
D = [1.0, 2.0, 3.0, 10.0]
WIDE = [2**62 + i * i for i in range(6)]
LONG = [float((i * i) % 1013) / 8 + 1000.0 for i in range(3 * 8192 + 100)]
LARGE = [1.0e300, -1.0e300, 5.0e299, 1.0e300, 2.5e299]
SMALL = [2.0**-1000 * v for v in D]
ROWS = [[float(i % 3), float(i * i % 7), 40.0 - i] for i in range(2100)]
X, OFTEN, UNEVEN = [1.0, 2.0, 4.0, 8.0, 9.0], [1, 2, 3, 2, 1], [0.25, 1.5, 3.0, 0.125, 1.0]
HUGE = [1e300, 3e299, 1e300, 1e298]
GRID = [[[i, i * i % 5, 7 - i], [i % 2, 3 * i, i % 3]] for i in range(5)]


class Case(NamedTuple):
    """An accumulator, and what it was fed (for channels: a list each) that counts."""

    moments: ms.Moments | ms.ExactMoments
    readings: list
    weights: list | None = None
    omitted: int = 0
    extremes_known: bool = True


def made(values, beside=None, **configuration):
    return ms.Moments(**configuration).update(values, beside)


def exact(values, **configuration):
    return ms.ExactMoments(**configuration).update(values)


def merged():
    """A part merged into a stream that has a finished block and an unfinished one."""
    return made(LONG[:9000]).merge(made(LONG[9000:9500])).update(LONG[9500:9510])


def channels(rows):
    return [list(column) for column in zip(*rows, strict=True)]


CASES = {
    "empty": Case(ms.Moments(), []),
    "order_1": Case(made(D, order=1), D),
    "order_2": Case(made(D, order=2), D),
    "order_3": Case(made(D, order=3), D),
    "order_4": Case(made(D), D),
    "order_8": Case(made(D, order=8), D),
    "order_16": Case(made(D, order=16), D),
    "one_reading": Case(made([-2.5]), [-2.5]),
    "wide_integers": Case(made(WIDE), WIDE),
    "many_blocks": Case(made(LONG), LONG),
    "merged": Case(merged(), LONG[:9510]),
    "removed": Case(made(D + X).remove(made(X)), D, extremes_known=False),
    "large": Case(made(LARGE), LARGE),
    "small": Case(made(SMALL), SMALL),
    "constant": Case(made([0.1] * 20), [0.1] * 20),
    "frequencies": Case(made(X, OFTEN, weights="frequency"), X, OFTEN),
    "reliabilities": Case(made(X, UNEVEN, weights="reliability"), X, UNEVEN),
    "extreme_weights": Case(made(D, HUGE, weights="reliability", order=6), D, HUGE),
    "omit": Case(made([1.0, NAN, 2.0, INF, 3.0, 10.0], nonfinite="omit"), D, omitted=2),
    "propagate": Case(made([1.0, INF, 2.0], nonfinite="propagate"), [1.0, INF, 2.0]),
    "reciprocal": Case(made([1.0, 2.0, 4.0, -8.0], transform="reciprocal"), [1, 0.5, 0.25, -0.125]),
    "abs": Case(made([-3.0, 4.0, -5.5], transform="abs"), [3.0, 4.0, 5.5]),
    "log": Case(made([1.0, -1.0, 1.0], transform="log", nonfinite="omit"), [0.0, 0.0], omitted=1),
    "channels": Case(made(ROWS, shape=3), channels(ROWS)),
    "names": Case(made(ROWS[:7], names=["inlet", "Rücklauf", "管道"]), channels(ROWS[:7])),
    "two_axes": Case(
        made(GRID, [1, 2, 0, 3, 1], shape=(2, 3), weights="frequency", order=5),
        np.reshape(GRID, (5, 6)).T.tolist(),
        [1, 2, 0, 3, 1],
    ),
    "from_central": Case(
        ms.Moments.from_central(4.0, [12.5, 45.0, 348.5], count=4, minimum=1.0, maximum=10.0), D
    ),
    "exact": Case(exact(D), D),
    "exact_empty": Case(exact([]), []),
    "exact_order_1": Case(exact(X, order=1), X),
    "exact_wide_integers": Case(exact(WIDE), WIDE),
    "exact_spread": Case(exact(LARGE + SMALL), LARGE + SMALL),
    "exact_removed": Case(exact(D + X).remove(exact(X)), D, extremes_known=False),
    "exact_omit": Case(exact([1.0, NAN, 2.0, INF, 3.0, 10.0], nonfinite="omit"), D, omitted=2),
    "exact_propagate": Case(exact([1.0, INF, 2.0], nonfinite="propagate"), [1.0, INF, 2.0]),
}


def main():
    folder = FOLDER / f"format_{VERSION}"
    folder.mkdir(parents=True, exist_ok=True)
    table = folder / "expected.json"
    expected = json.loads(table.read_text("utf-8")) if table.exists() else {}
    new = [name for name in CASES if name not in expected]
    for name in new:
        for form, resume in (("settled", False), ("working", True)):
            data = CASES[name].moments.to_bytes(resume=resume)
            (folder / f"{name}.{form}.bin").write_bytes(data)
        expected[name] = expectation(CASES[name])
    table.write_text(json.dumps(expected, indent=1, ensure_ascii=False) + "\n", "utf-8")
    sys.stdout.write(f"{len(new)} states written to {folder}, {len(expected)} in all\n")


def expectation(case):
    """Settings and, channel by channel, what the readings say."""
    moments = case.moments
    parts = [
        described(readings, case, moments.weights, moments.order)
        for readings in (case.readings if moments.shape else [case.readings])
    ]
    return {
        "order": moments.order,
        "shape": list(moments.shape),
        "names": None if moments.names is None else list(moments.names),
        "weights": moments.weights,
        "nonfinite": moments.nonfinite,
        "transform": moments.transform,
        "channels": parts,
    }


def described(readings, case, kind, order):
    """The statistics of one channel; ``sizes`` are the mean powers of abs(x - mean)."""
    weights = [1] * len(readings) if case.weights is None else case.weights
    kept = [(x, w) for x, w in zip(readings, weights, strict=True) if w > 0]
    count = sum(w for _, w in kept) if kind == "frequency" else len(kept)
    known = case.extremes_known and kept
    result = {
        "count": int(count),
        "omitted": case.omitted,
        "minimum": text(min(x for x, _ in kept)) if known else "nan",
        "maximum": text(max(x for x, _ in kept)) if known else "nan",
    }
    if not kept or not all(math.isfinite(x) for x, _ in kept):
        undefined = ["nan"] * (order - 1)
        mean = text(sum(x for x, _ in kept)) if kept else "nan"
        several = {"mean": mean, "central": undefined, "sizes": undefined}
        return {**result, "weight": text(count), "effective_count": text(count), **several}
    exact = Exact([x for x, _ in kept], [w for _, w in kept], order)
    effective = exact.weight
    if kind == "reliability":
        effective = exact.weight**2 / exact.power_of_weights(2)
    return {
        **result,
        "weight": text(exact.weight),
        "effective_count": text(effective),
        "mean": text(exact.mean),
        "central": [text(exact.central(k)) for k in range(2, order + 1)],
        "sizes": [text(size(kept, exact, k)) for k in range(2, order + 1)],
    }


def size(kept, exact, k):
    total = sum(Fraction(w) * abs(Fraction(x) - exact.mean) ** k for x, w in kept)
    return total / exact.weight


def text(value):
    """A rational as 25 digits, a decimal that Fraction reads; exponents beyond those of doubles."""
    if isinstance(value, float) and math.isinf(value):
        return repr(value)
    value = Fraction(value)
    if value.denominator == 1 and abs(value) < 10**25:
        return str(value)
    exponent = len(str(abs(value.numerator))) - len(str(value.denominator))
    digits = round(abs(value) * Fraction(10) ** (25 - exponent))
    return f"{'-' if value < 0 else ''}{digits}e{exponent - 25}"


if __name__ == "__main__":
    main()
