"""General-purpose libraries that compute the same four numbers: speed, accuracy, memory.

Each peer gets the readings in its own container before anything is measured, and one thread.
``python peers.py NAME READINGS`` is one measurement of memory in a process of its own; ``memory``
starts it.
"""

import contextlib
import importlib.util
import json
import math
import os
import subprocess
import sys
from collections.abc import Callable
from dataclasses import dataclass
from decimal import Decimal, localcontext
from pathlib import Path

import numpy as np

import momentstream as ms

os.environ.setdefault("POLARS_MAX_THREADS", "1")  # read once, when Polars is imported

STATISTICS = ("mean", "variance", "skewness", "kurtosis")


@dataclass(frozen=True)
class Peer:
    """A library, and how it computes mean, variance, skewness and excess kurtosis.

    ``adjusted`` says that its skewness and kurtosis are the sample-adjusted ones (G1 and G2).
    """

    name: str
    module: str
    load: Callable
    compute: Callable
    adjusted: bool = False


def momentstream_compute(x):
    m = ms.Moments().update(x)
    return m.mean(), m.variance(), m.skewness(), m.kurtosis()


def scipy_compute(x):
    from scipy import stats

    return x.mean(), x.var(), stats.skew(x), stats.kurtosis(x)


def pandas_load(x):
    import pandas

    return pandas.Series(x)


def pandas_compute(series):
    return series.mean(), series.var(ddof=0), series.skew(), series.kurt()


def polars_load(x):
    import polars

    return polars.DataFrame({"x": x})


def polars_compute(frame):
    import polars

    x = polars.col("x")
    return frame.select(
        mean=x.mean(), variance=x.var(ddof=0), skewness=x.skew(), kurtosis=x.kurtosis()
    ).row(0)


def duckdb_load(x):
    import duckdb

    connection = duckdb.connect()
    connection.execute("SET threads = 1")
    connection.register("readings", {"x": x})
    connection.execute("CREATE TABLE t AS SELECT x FROM readings")
    connection.unregister("readings")
    return connection


def duckdb_compute(connection):
    return connection.execute(
        "SELECT avg(x), var_pop(x), skewness(x), kurtosis(x) FROM t"
    ).fetchone()


OURS = Peer("momentstream", "momentstream", lambda x: x, momentstream_compute)
PEERS = (
    Peer("SciPy", "scipy", lambda x: x, scipy_compute),
    Peer("pandas", "pandas", pandas_load, pandas_compute, adjusted=True),
    Peer("Polars", "polars", polars_load, polars_compute),
    Peer("DuckDB", "duckdb", duckdb_load, duckdb_compute, adjusted=True),
)


def installed():
    return [peer for peer in PEERS if importlib.util.find_spec(peer.module)]


# -- accuracy ------------------------------------------------------------------------------------


def offset_readings(n):
    """Lopsided readings of spread 1 at 1e8: 27 of a double's 53 bits are taken by the offset."""
    return 1e8 + np.random.default_rng(5).standard_exponential(n)


def exact_statistics(x, adjusted):
    """Mean, variance, skewness and excess kurtosis of the very doubles, right to 40 digits."""
    n = x.size
    bits = 53 - int(np.frexp(np.abs(x[x != 0.0]).min())[1])
    whole = [int(value) for value in np.ldexp(x, bits).tolist()]  # every reading a whole number
    total = sum(whole)
    second = third = fourth = 0
    for value in whole:
        d = n * value - total
        square = d * d
        second += square
        third += square * d
        fourth += square * square
    with localcontext(prec=60):
        unit = Decimal(2) ** -bits / n
        m2, m3, m4 = Decimal(second) / n, Decimal(third) / n, Decimal(fourth) / n
        skewness, kurtosis = m3 / (m2 * m2.sqrt()), m4 / (m2 * m2) - 3
        if adjusted:
            skewness *= Decimal(n * (n - 1)).sqrt() / (n - 2)
            kurtosis = ((n + 1) * kurtosis + 6) * (n - 1) / ((n - 2) * (n - 3))
        return Decimal(total) * unit, m2 * unit * unit, skewness, kurtosis


def relative_errors(peer, x, exact):
    """Of each statistic against the exact one; None where the peer gives no number."""
    try:
        values = peer.compute(peer.load(x))
    except Exception:
        return dict.fromkeys(STATISTICS)
    return {
        name: _relative_error(value, right)
        for name, value, right in zip(STATISTICS, values, exact, strict=True)
    }


def _relative_error(value, right):
    if value is None or not math.isfinite(value):
        return None
    with localcontext(prec=60):
        return float(abs((Decimal(float(value)) - right) / right))


# -- memory --------------------------------------------------------------------------------------


def memory(peer, readings):
    """Peak resident memory of a fresh process that computes, and what of it computing added.

    Both over the size of the input; None where the platform does not tell.
    """
    command = [sys.executable, str(Path(__file__)), peer.name, str(readings)]
    run = subprocess.run(command, check=True, capture_output=True, text=True)
    before, after = json.loads(run.stdout)
    if after is None:
        return {"peak": None, "added": None}
    size = 8 * readings
    return {"peak": after / size, "added": (after - before) / size}


def _measure_memory(name, readings):
    peer = next(peer for peer in (OURS, *PEERS) if peer.name == name)
    rng = np.random.default_rng(1)
    peer.compute(peer.load(rng.standard_normal(100_000)))  # imports, compiled code
    data = peer.load(rng.standard_normal(readings))
    _reset_peak()
    before = peak_memory()
    peer.compute(data)
    print(json.dumps([before, peak_memory()]))


def _reset_peak():
    """On Linux: the peak so far is what is resident now."""
    with contextlib.suppress(OSError):
        Path("/proc/self/clear_refs").write_text("5")


def peak_memory():
    """Bytes, or None."""
    # A child's ru_maxrss may begin with its parent's on Linux, so the process's own peak is read.
    with contextlib.suppress(OSError, StopIteration):
        lines = Path("/proc/self/status").read_text().splitlines()
        return next(int(line.split()[1]) * 1024 for line in lines if line.startswith("VmHWM"))
    try:
        import resource
    except ImportError:
        return None
    most = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return most if sys.platform == "darwin" else most * 1024


if __name__ == "__main__":
    _measure_memory(sys.argv[1], int(sys.argv[2]))
