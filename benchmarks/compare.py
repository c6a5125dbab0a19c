"""How fast, how right, how small: every limit this project sets itself, and what was measured.

    python benchmarks/compare.py                   everything, some three minutes
    python benchmarks/compare.py --quick           smaller and shorter, for a look
    python benchmarks/compare.py --only merge      one row (may be given several times)
    python benchmarks/compare.py --save            also into results/<date>-<processor>.json and .md

The method, its doubts and how to read the table: README.md beside this file.
"""

# ruff: noqa: E402
import os

# One thread on both sides: the linear algebra library has to be told before NumPy is imported.
for _name in ("OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "OMP_NUM_THREADS"):
    os.environ[_name] = "1"

import argparse
import functools
import sys
import tempfile
from collections.abc import Callable
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from timeit import Timer

import exact_rows
import joint_rows
import numpy as np
import peers
import report
from turns import in_turn, printed_by, seconds_of

import momentstream as ms


@dataclass(frozen=True)
class Scale:
    """How much is measured."""

    readings: int  # of the arrays
    items: int  # of iterators, and calls with one float
    seconds: float  # at least, for each row
    starts: int  # fresh processes, for each side
    compilations: int  # fresh processes with an empty cache
    exact: int  # readings compared with exact arithmetic


FULL = Scale(10**7, items=10**6, seconds=4.0, starts=15, compilations=3, exact=10**6)
QUICK = Scale(10**6, items=10**5, seconds=0.5, starts=5, compilations=1, exact=10**5)


@dataclass(frozen=True)
class Result:
    """What a row measured: a ratio or a time, from the least times and from the medians."""

    least: float
    median: float
    times: dict  # by contender: seconds a call, the least
    extra: dict = field(default_factory=dict)  # by name: what else is worth knowing


@dataclass(frozen=True)
class Row:
    """One line of the table.  ``limit`` is None where none is set."""

    key: str
    what: str
    limit: float | None
    unit: str
    measure: Callable[[Scale], Result]
    at_least: bool = False  # the limit is one from below

    def verdict(self, result):
        """Whether the limit is kept: "yes", "no", or "unsure" where the two ratios disagree."""
        if self.limit is None:
            return ""
        kept = [(value <= self.limit) != self.at_least for value in (result.least, result.median)]
        return "yes" if all(kept) else "unsure" if any(kept) else "no"


def ratio(names, times, **extra):
    """Ours over theirs."""
    ours, theirs = times
    return Result(
        ours.least / theirs.least,
        ours.median / theirs.median,
        {name: own.least for name, own in zip(names, times, strict=True)},
        extra,
    )


# -- readings: made once, the same in every run --------------------------------------------------


@functools.cache
def normal(n):
    return np.random.default_rng(1).standard_normal(n)


@functools.cache
def with_gaps(n):
    x = normal(n).copy()
    x[np.random.default_rng(2).random(n) < 0.001] = np.nan
    return x


@functools.cache
def reliabilities(n):
    return np.random.default_rng(3).random(n)


def single(n):
    return normal(n).astype(np.float32)


def channels(count):
    return lambda n: normal(n)[: n // count * count].reshape(-1, count)


# -- arrays --------------------------------------------------------------------------------------


def feeding(data=normal, *, weighted_by=None, against=None, axis=None, **settings):
    """Measures ``Moments(**settings).update(data)`` against ``numpy.sum`` of the same array."""

    def measure(scale):
        x = data(scale.readings)
        w = None if weighted_by is None else weighted_by(scale.readings)
        y = x if against is None else against(scale.readings)
        ours = Timer(lambda: ms.Moments(**settings).update(x, w))
        theirs = Timer(lambda: np.sum(y, axis=axis))
        return ratio(("update", "sum"), in_turn([ours, theirs], budget=scale.seconds))

    return measure


# -- one reading at a time -----------------------------------------------------------------------


class Empty:
    """A method with ``update``'s own signature that does nothing."""

    def update(self, values, weights=None, *, threads=1):
        return self


def one_float(scale):
    """Also without the loop around the calls, which is in both times."""
    timers = [
        Timer("m.update(v)", "m = make(); v = 4.25", globals={"make": make})
        for make in (ms.Moments, Empty)
    ]
    loop = Timer("pass")
    *times, loop = in_turn([*timers, loop], calls=scale.items, budget=scale.seconds)
    ours, empty = times
    bare = (ours.least - loop.least) / (empty.least - loop.least)
    return ratio(("update", "empty"), times, without_loop=bare)


def generator(scale):
    items = normal(scale.items).tolist()
    ours = Timer(lambda: ms.Moments().update(value for value in items))
    theirs = Timer(lambda: np.fromiter((value for value in items), np.float64))
    times = in_turn([ours, theirs], budget=scale.seconds)
    return ratio(
        ("update", "fromiter"), times, nanoseconds_an_item=times[0].least / scale.items * 1e9
    )


# -- combining -----------------------------------------------------------------------------------


def fed_part():
    return ms.Moments().update(normal(12_345))


def read_part():
    return ms.from_bytes(fed_part().to_bytes())


def merging(part):
    """Measures one ``a.merge(b)`` of many in a row, in microseconds."""

    def measure(scale):
        timer = Timer("a.merge(b)", "a = part(); b = part()", globals={"part": part})
        (times,) = in_turn([timer], calls=1000, budget=scale.seconds / 2)
        return Result(times.least * 1e6, times.median * 1e6, {"merge": times.least})

    return measure


# -- beginnings ----------------------------------------------------------------------------------

IMPORT = """
import time
start = time.perf_counter()
{statement}
print(time.perf_counter() - start)
"""
FIRST_RESULT = """
import numpy as np
import momentstream as ms
print(ms.Moments().update(np.sin(np.arange(100_000.0))).kurtosis())
"""


def importing(statement):
    """Measures an import of ours against that of NumPy, by the clock inside fresh processes."""

    def measure(scale):
        statements = (statement, "import numpy")
        timers = [Started(IMPORT.format(statement=code), printed_by) for code in statements]
        return ratio(("ours", "numpy"), in_turn(timers, budget=0.0, rounds=scale.starts))

    return measure


def first_result_cached(scale):
    with empty_cache() as folder:
        timer = Started(FIRST_RESULT, seconds_of, folder)  # the call before the rounds compiles
        (times,) = in_turn([timer], budget=0.0, rounds=scale.starts)
    return Result(times.least, times.median, {"process": times.least})


def first_result_compiled(scale):
    seconds = []
    for _ in range(scale.compilations):
        with empty_cache() as folder:
            seconds.append(Started(FIRST_RESULT, seconds_of, folder).timeit(1))
    least, median = min(seconds), float(np.median(seconds))
    return Result(least, median, {"process": least})


@dataclass(frozen=True)
class Started:
    """A fresh process in the place of a ``timeit.Timer``."""

    code: str
    measure: Callable
    cache: str | None = None

    def timeit(self, calls):
        environment = {} if self.cache is None else {"NUMBA_CACHE_DIR": self.cache}
        return sum(self.measure(self.code, **environment) for _ in range(calls))


@contextmanager
def empty_cache():
    with tempfile.TemporaryDirectory() as folder:
        yield folder


# -- peers ---------------------------------------------------------------------------------------


@functools.cache
def peer_times(scale):
    """Times of ours and of each peer, by name."""
    contenders = [peers.OURS, *peers.installed()]
    x = normal(scale.readings)
    timers = []
    for peer in contenders:
        data = peer.load(x)
        timers.append(Timer(functools.partial(peer.compute, data)))
    names = [peer.name for peer in contenders]
    return dict(zip(names, in_turn(timers, budget=2 * scale.seconds), strict=True))


def fastest_peer(scale):
    """How many times longer the fastest of them takes."""
    times = peer_times(scale)
    ours = times[peers.OURS.name]
    others = [own for name, own in times.items() if name != peers.OURS.name]
    if not others:
        raise SystemExit("compare: none of the peers is installed; pip install momentstream[test]")
    return Result(
        min(own.least for own in others) / ours.least,
        min(own.median for own in others) / ours.median,
        {name: own.least for name, own in times.items()},
    )


def peer_table(scale):
    """For ours and each peer: times as multiples of ours, errors, memory."""
    times = peer_times(scale)
    ours = times[peers.OURS.name]
    x = peers.offset_readings(scale.exact)
    exact = {adjusted: peers.exact_statistics(x, adjusted) for adjusted in (False, True)}
    table = {}
    for peer in (peers.OURS, *peers.installed()):
        own = times[peer.name]
        table[peer.name] = {
            "seconds": own.least,
            "least": own.least / ours.least,
            "median": own.median / ours.median,
            "errors": peers.relative_errors(peer, x, exact[peer.adjusted]),
            "memory": peers.memory(peer, scale.readings),
        }
    return table


# -- the table -----------------------------------------------------------------------------------

ROWS = (
    Row("order-4", "order 4 with extremes / numpy.sum", 1.5, "×", feeding()),
    Row("order-2", "order 2 / numpy.sum", 1.3, "×", feeding(order=2)),
    Row("order-8", "order 8 / numpy.sum", 1.8, "×", feeding(order=8)),
    Row("float32", "order 4, float32 / numpy.sum of float64", 1.1, "×",
        feeding(single, against=normal)),
    Row("float32-own", "order 4, float32 / numpy.sum of float32", None, "×", feeding(single)),
    Row("weights", "order 4 with weights / numpy.sum", 2.5, "×",
        feeding(weighted_by=reliabilities, weights="reliability")),
    Row("omit", "omitting 0.1 % NaN / numpy.sum", 2.5, "×", feeding(with_gaps, nonfinite="omit")),
    Row("channels-64", "shape (64,) / numpy.sum(axis=0)", 1.4, "×",
        feeding(channels(64), axis=0, shape=(64,))),
    Row("channels-1024", "shape (1024,) / numpy.sum(axis=0)", 2.0, "×",
        feeding(channels(1024), axis=0, shape=(1024,))),
    Row("one-float", "update(one float) / an empty method", 2.7, "×", one_float),
    Row("generator", "a generator of floats / numpy.fromiter", 1.6, "×", generator),
    Row("merge", "a.merge(b), both fed here", 8.0, "µs", merging(fed_part)),
    Row("merge-read", "a.merge(b), both read from bytes", None, "µs", merging(read_part)),
    Row("import", "import momentstream / import numpy", 1.35, "×",
        importing("import momentstream")),
    Row("import-moments", "… and its Moments / import numpy", None, "×",
        importing("from momentstream import Moments")),
    Row("first-cached", "first result, kernels cached", 1.2, "s", first_result_cached),
    Row("first-compiled", "first result, kernels not cached", 10.0, "s", first_result_compiled),
    Row("peers", "fastest peer / order 4, four statistics", 4.0, "×", fastest_peer, at_least=True),
    Row("exact", "exact, orders 1-4, a reading", 8.0, "ns",
        exact_rows.nanoseconds_a_reading(normal, Result)),
    Row("exact-decades", "exact, thirty decades, a reading", 16.0, "ns",
        exact_rows.nanoseconds_a_reading(exact_rows.decades, Result)),
    Row("exact-counts", "exact, a converter's counts, a reading", None, "ns",
        exact_rows.nanoseconds_a_reading(exact_rows.counts, Result)),
    Row("exact-scipy", "SciPy mean, skew, kurtosis / exact", 2.5, "×",
        exact_rows.against(exact_rows.updating(normal), exact_rows.scipy_statistics(normal),
                           Result), at_least=True),
    Row("exact-threads", "exact, one thread / two", 1.7, "×",
        exact_rows.against(exact_rows.updating(normal, threads=2),
                           exact_rows.updating(normal), Result), at_least=True),
    Row("exact-kurtosis", "exact, the first kurtosis()", 200.0, "µs",
        exact_rows.reading_kurtosis(normal, Result)),
    Row("joint-cov-3", "numpy.cov / joint order 2, 3 variables", 6.0, "×",
        joint_rows.against_cov(3, Result), at_least=True),
    Row("joint-cov-8", "numpy.cov / joint order 2, 8 variables", 3.0, "×",
        joint_rows.against_cov(8, Result), at_least=True),
    Row("joint-cov-16", "numpy.cov / joint order 2, 16 variables", 2.0, "×",
        joint_rows.against_cov(16, Result), at_least=True),
    Row("joint-cov-32", "numpy.cov / joint order 2, 32 variables", 1.4, "×",
        joint_rows.against_cov(32, Result), at_least=True),
    Row("joint-cov-64", "numpy.cov / joint order 2, 64 variables", 1.4, "×",
        joint_rows.against_cov(64, Result), at_least=True),
    Row("joint-3", "joint order 4, 3 variables, a row", 12.0, "ns",
        joint_rows.nanoseconds_a_row(3, 4, Result)),
    Row("joint-8", "joint order 4, 8 variables, a row", 100.0, "ns",
        joint_rows.nanoseconds_a_row(8, 4, Result)),
    Row("joint-16", "joint order 4, 16 variables, a row", 900.0, "ns",
        joint_rows.nanoseconds_a_row(16, 4, Result)),
    Row("joint-einsum", "numpy.einsum / joint order 4, 8 variables", 150.0, "×",
        joint_rows.against_einsum(8, Result), at_least=True),
    Row("joint-merge", "joint order 4, 8 variables, a.merge(b)", 100.0, "µs",
        joint_rows.merging(8, 4, Result)),
    Row("joint-one-row", "joint, update(one row of 3)", 2.0, "µs",
        joint_rows.one_row(3, 2, Result)),
)  # fmt: skip


def measure_rows(rows, scale):
    """Measure and print row by row; returns what was measured, by key."""
    print(report.HEADING)
    results = {}
    for row in rows:
        results[row.key] = row.measure(scale)
        print(report.line(row, results[row.key]), flush=True)
    return results


def main():
    parser = argparse.ArgumentParser(description=__doc__.partition("\n")[0])
    parser.add_argument("--quick", action="store_true", help="smaller and shorter: only a look")
    parser.add_argument(
        "--only", action="append", choices=[row.key for row in ROWS], metavar="ROW",
        help="measure this row: " + ", ".join(row.key for row in ROWS),
    )  # fmt: skip
    parser.add_argument("--json", type=Path, metavar="PATH", help="write what was measured here")
    parser.add_argument("--save", action="store_true", help="write it into results/ beside this")
    options = parser.parse_args()
    if options.save and (options.only or options.quick):
        parser.error("--save keeps full measurements: leave --only and --quick out")

    scale = QUICK if options.quick else FULL
    rows = [row for row in ROWS if options.only is None or row.key in options.only]
    machine = report.machine()
    print(report.described(machine, scale), end="\n\n")
    if options.quick:
        print("The limits are for 10,000,000 readings: with fewer, numpy.sum works in the cache.\n")
    results = measure_rows(rows, scale)
    table = peer_table(scale) if "peers" in results else {}
    if table:
        print("\n" + report.peer_lines(table, machine["versions"]))
    if options.json:
        options.json.write_text(report.as_json(machine, scale, rows, results, table), "utf-8")
    if options.save:
        stem = Path(__file__).parent / "results" / report.file_stem(machine)
        stem.parent.mkdir(exist_ok=True)
        for suffix, write in ((".json", report.as_json), (".md", report.as_markdown)):
            path = stem.with_suffix(suffix)
            path.write_text(write(machine, scale, rows, results, table), "utf-8")
            print(f"wrote {path}")
    return 0


if __name__ == "__main__":
    sys.exit(main())
