"""Pressures and flow of pump stations, read together by several workers, and put together here.

    python examples/joint_totals.py
    python examples/joint_totals.py --workers 4 --rows 1000000

Invented data: a fictional water utility logs inlet pressure and outlet pressure (bar) and flow
(litres a second) of its pump stations.  Each worker streams one station's shard through
``momentstream.JointMoments`` and hands back some hundred bytes.  Combined they tell what no worker
saw whole: how the three move together over all stations, and how heavy the tails are of a
combination of them that nobody had in mind when the shards were read.
"""

import argparse
import multiprocessing
import os
import sys
from concurrent.futures import ProcessPoolExecutor

import numpy as np

import momentstream as ms

NAMES = ("inlet", "outlet", "flow")
CHUNK = 50_000
# Outlet less inlet less what the pump adds at this flow: far from its mean, something is wrong.
RESIDUE = (-1.0, 1.0, 0.02)
FAR = 1.0  # bar from its mean
STATISTICS = ("mean", "std", "skewness", "kurtosis")


def shard(station, rows):
    """Chunks of invented rows: a level of the station's own, demand, noise, and rare surges."""
    rng = np.random.default_rng(station)
    level = rng.uniform(2.0, 4.0)
    for start in range(0, rows, CHUNK):
        n = min(CHUNK, rows - start)
        flow = rng.gamma(6.0, 5.0, n)
        inlet = level - 0.01 * flow + rng.normal(0.0, 0.05, n)
        surges = rng.exponential(0.8, n) * (rng.random(n) < 0.0005 * (1 + station))
        outlet = inlet + 4.0 - 0.02 * flow + rng.normal(0.0, 0.03, n) + surges
        yield np.stack([inlet, outlet, flow], axis=1)


def new_moments():
    return ms.JointMoments(3, order=4, names=NAMES)


def shard_state(station, rows):
    """What a worker hands back: the joint moments of one shard, as bytes."""
    moments = new_moments()
    for chunk in shard(station, rows):
        moments.update(chunk)
    return moments.to_bytes()


def one_pass(stations, rows):
    """Everything through one accumulator, for comparison."""
    moments = new_moments()
    for station in range(stations):
        for chunk in shard(station, rows):
            moments.update(chunk)
    return moments


def residue_rows(parts, whole, single):
    """How the residue behaves: at each station, combined, and in one pass."""
    names = [f"station {i}" for i in range(len(parts))]
    yield "residue", *STATISTICS, f"share beyond {FAR:g} bar"
    for name, moments in zip(
        (*names, "combined", "one pass"), (*parts, whole, single), strict=True
    ):
        residue = moments.along(RESIDUE)
        numbers = [f"{getattr(residue, statistic)():.6g}" for statistic in STATISTICS]
        # Chebyshev's inequality with the fourth power: it holds whatever the law.
        yield name, *numbers, f"at most {residue.central(4) / FAR**4:.3g}"


def print_table(rows):
    """Lines of text cells: the first column to the left, the others to the right."""
    widths = [max(map(len, cells)) for cells in zip(*rows, strict=True)]
    for first, *rest in rows:
        cells = (cell.rjust(width) for cell, width in zip(rest, widths[1:], strict=True))
        print("  ".join((first.ljust(widths[0]), *cells)))


def run(stations, rows, workers):
    print("Loading the kernels (the first time on a machine they are compiled, some ten seconds)")
    # Before the workers start: they find the kernels in the cache on disk.
    (new_moments().update(next(shard(0, 5_000))) + new_moments()).covariance()
    # Spawned workers share nothing with this process but what is sent.
    context = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(min(workers, stations), mp_context=context) as pool:
        states = list(pool.map(shard_state, range(stations), [rows] * stations))
    parts = [ms.from_bytes(state) for state in states]
    whole, single = ms.combine(parts), one_pass(stations, rows)
    print(f"\n{stations} shards of {rows:,} rows, {len(states[0])} bytes from each.  Combined:\n")
    print(whole.summary())
    print("\noutlet - inlet + 0.02 flow, a combination of what was kept:\n")
    print_table(list(residue_rows(parts, whole, single)))
    spread = np.sqrt(np.outer(*[single.covariance().diagonal()] * 2))
    worst = np.max(np.abs(whole.covariance() - single.covariance()) / spread)
    print(f"\nThe covariance in one pass differs by at most {worst:.1g} standard deviations.")


def main():
    parser = argparse.ArgumentParser(description=__doc__.partition("\n")[0])
    parser.add_argument("--stations", type=int, default=4, help="one shard each")
    parser.add_argument("--rows", type=int, default=200_000, help="of each shard")
    parser.add_argument("--workers", type=int, default=os.cpu_count() or 1, help="processes")
    options = parser.parse_args()
    for name in ("stations", "rows", "workers"):
        if getattr(options, name) < 1:
            parser.error(f"--{name} must be at least 1, got {getattr(options, name)}")
    run(options.stations, options.rows, options.workers)
    return 0


if __name__ == "__main__":
    sys.exit(main())
