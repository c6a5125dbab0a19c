"""Totals of many shard files by a pool of workers, and the proof that sharding changed nothing.

Run it as it stands to see it on invented data (a fictional water utility's pressure loggers), or on
a folder of your own:

    python examples/shard_totals.py
    python examples/shard_totals.py FOLDER --column pressure

A shard is a .csv file with a header or a .npy file of numbers.  Each worker streams its shards
through ``momentstream.Moments``, in memory that does not grow with the file, and hands back a few
hundred bytes; here they are combined.  Empty cells and NaN are missing readings: left out, counted.
"""

import argparse
import csv
import math
import multiprocessing
import os
import sys
import tempfile
from concurrent.futures import ProcessPoolExecutor
from contextlib import contextmanager
from functools import partial
from pathlib import Path

import numpy as np

import momentstream as ms

STATISTICS = ("mean", "std", "skewness", "kurtosis", "minimum", "maximum")
DEMO = (
    "Invented data: a fictional water utility's pressure loggers, in bar; eight wrote .csv for\n"
    "a month, once a minute and with gaps, four wrote .npy for a week, once a second."
)


class BadInput(Exception):
    """What the user gave cannot be read; the message says what and where, on one line."""


# -- one shard -----------------------------------------------------------------------------------


def shard_state(path, column):
    """What a worker hands back: the moments of one shard, as bytes."""
    return feed(new_moments(), path, column).to_bytes()


def new_moments():
    return ms.Moments(order=4, nonfinite="omit")


def feed(moments, path, column):
    """Stream one shard through the accumulator."""
    with failures_named(path):
        return moments.update(readings_of(path, column))


def readings_of(path, column):
    """A mapped array, which is read where it lies, or an iterator over a column."""
    if path.suffix.lower() == ".npy":
        return np.lib.format.open_memmap(path, mode="r")
    return csv_readings(path, column)


@contextmanager
def failures_named(path):
    try:
        yield
    except (OSError, ValueError, TypeError) as error:
        raise BadInput(f"{path}: {' '.join(str(error).split())}") from None


def csv_readings(path, column):
    """The numbers of one column, one after the other; an empty cell is NaN."""
    with open(path, newline="", encoding="utf-8-sig") as file:
        rows = csv.reader(file)
        try:
            place = column_place(path, next(rows, []), column)
            for row in rows:
                if row:
                    cell = row[place]
                    yield float(cell) if cell and not cell.isspace() else math.nan
        except IndexError:
            raise BadInput(
                f"{path}, line {rows.line_num}: the row ends before the column"
            ) from None
        except csv.Error as error:
            raise BadInput(f"{path}, line {rows.line_num}: {error}") from None
        except UnicodeDecodeError:
            raise BadInput(f"{path}: not a text file in UTF-8") from None
        except ValueError:
            raise BadInput(f"{path}, line {rows.line_num}: {cell[:40]!r} is not a number") from None


def column_place(path, header, column):
    """Where the column stands; a file of one column needs no name."""
    names = [name.strip() for name in header]
    found = ", ".join(names) or "none"
    if column is None and len(names) == 1:
        column = names[0]
        if is_number(column):
            raise BadInput(f"{path}, line 1: the first line must name the column, got {column}")
    if column is None:
        raise BadInput(f"{path}: choose one of its columns with --column; it has: {found}")
    if column not in names:
        raise BadInput(f"{path}: no column {column!r}; it has: {found}")
    return names.index(column)


def is_number(text):
    try:
        float(text)
    except ValueError:
        return False
    return True


# -- all shards ----------------------------------------------------------------------------------


def look_at(paths, column):
    """Refuse now what shows at the start of a shard, a wrong column above all."""
    for path in paths:
        with failures_named(path):
            next(iter(readings_of(path, column)), None)


def shards_in(folder):
    if not folder.is_dir():
        raise BadInput(f"{folder}: no such folder")
    paths = sorted(path for path in folder.iterdir() if path.suffix.lower() in (".csv", ".npy"))
    if not paths:
        raise BadInput(f"{folder}: no .csv or .npy files in it")
    return paths


def shard_moments(paths, column, workers):
    """The moments of each shard, in order, as the workers hand them back."""
    # Spawned workers share nothing with this process but what is sent: it works on every platform,
    # and beside threads.
    context = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(min(workers, len(paths)), mp_context=context) as pool:
        states = pool.map(partial(shard_state, column=column), paths)
        for done, state in enumerate(states, start=1):
            show_progress(done, len(paths))
            yield ms.from_bytes(state)


def kept(items, into):
    """The items unchanged, also appended to a list."""
    for item in items:
        into.append(item)
        yield item


def one_pass(paths, column):
    """Everything through one accumulator, for comparison."""
    whole = new_moments()
    for path in paths:
        feed(whole, path, column)
    return whole


def compile_kernels():
    """Compile before the workers start: they find the kernels in the cache on disk."""
    new_moments().update(np.arange(20_000.0)).mean()


# -- what is printed -----------------------------------------------------------------------------


def show_progress(done, total):
    """A line whenever the bar has grown: twenty at most."""
    filled = 20 * done // total
    if filled > 20 * (done - 1) // total:
        print(f"[{'#' * filled:.<20}] {done} of {total} shards", file=sys.stderr, flush=True)


def print_table(rows):
    """Lines of text cells: the first column to the left, the others to the right."""
    widths = [max(map(len, cells)) for cells in zip(*rows, strict=True)]
    for first, *rest in rows:
        cells = (cell.rjust(width) for cell, width in zip(rest, widths[1:], strict=True))
        print("  ".join((first.ljust(widths[0]), *cells)))


def totals_rows(names, parts, whole):
    yield "shard", "count", "omitted", *STATISTICS
    for name, moments in zip((*names, "whole"), (*parts, whole), strict=True):
        numbers = (f"{getattr(moments, statistic)():#.5g}" for statistic in STATISTICS)
        yield name, f"{moments.count:,}", f"{moments.omitted:,}", *numbers


def proof_rows(combined, single):
    yield "", "combined", "in one pass", "digits that agree"
    for name in ("count", "omitted"):
        a, b = getattr(combined, name), getattr(single, name)
        yield name, f"{a:,}", f"{b:,}", "all" if a == b else "differ"
    # Digits are counted from the size of the number; a mean may be small beside the spread, and
    # skewness and kurtosis may be zero: those from the spread, and from 1.
    least = {"mean": single.std(), "skewness": 1.0, "kurtosis": 1.0}
    for name in STATISTICS:
        a, b = getattr(combined, name)(), getattr(single, name)()
        yield name, repr(a), repr(b), agreement(a, b, max(abs(b), least.get(name, 0.0)))


def agreement(a, b, size):
    if a == b or (math.isnan(a) and math.isnan(b)):
        return "all"
    return str(max(0, math.floor(-math.log10(abs(a - b) / size))))


# -- invented data -------------------------------------------------------------------------------


def write_demo(folder):
    """Twelve loggers' shards: invented readings of a fictional water utility."""
    rng = np.random.default_rng(12)
    minutes = np.arange(30 * 24 * 60)
    times = np.datetime_as_string(np.datetime64("2030-03-01T00:00") + minutes, unit="m").tolist()
    for number in range(1, 9):
        pressure = invented_pressure(minutes / 1440.0, rng)
        cells = [f"{value:.3f}" for value in pressure.tolist()]
        for start in rng.integers(0, len(cells), 3):
            cells[start : start + 40] = [""] * len(cells[start : start + 40])
        with open(folder / f"logger-{number:02}.csv", "w", newline="", encoding="utf-8") as file:
            writer = csv.writer(file)
            writer.writerow(("time", "pressure"))
            writer.writerows(zip(times, cells, strict=True))
    for number in range(9, 13):
        pressure = invented_pressure(np.arange(7 * 86_400) / 86_400.0, rng)
        np.save(folder / f"logger-{number:02}.npy", pressure)


def invented_pressure(days, rng):
    """A level by the height of the site, two dips a day by demand, noise, and rare surges."""
    level = rng.uniform(2.5, 6.0)
    demand = 0.35 * np.sin(2 * np.pi * days) ** 2 * rng.uniform(0.5, 1.5)
    surges = rng.exponential(0.4, days.size) * (rng.random(days.size) < 0.002)
    return level - demand + rng.normal(0.0, 0.04, days.size) + surges


# -- the command ---------------------------------------------------------------------------------


def run(folder, column, workers):
    paths = shards_in(folder)
    look_at(paths, column)
    print(
        "Loading the kernels (the first time on a machine they are compiled, some ten seconds)",
        flush=True,
    )
    compile_kernels()
    parts: list[ms.Moments] = []
    whole = ms.combine(kept(shard_moments(paths, column, workers), into=parts))
    size = len(parts[0].to_bytes())
    print(f"\n{len(parts)} shards by {min(workers, len(paths))} workers, {size} bytes from each:\n")
    print_table(list(totals_rows([path.name for path in paths], parts, whole)))
    print("\nThe same from one pass over everything:\n")
    print_table(list(proof_rows(whole, one_pass(paths, column))))


def main():
    parser = argparse.ArgumentParser(description=__doc__.partition("\n")[0])
    parser.add_argument(
        "folder", nargs="?", type=Path, help="of .csv and .npy shards; without it: invented data"
    )
    parser.add_argument("--column", help="the column of the .csv files to read")
    parser.add_argument("--workers", type=int, default=os.cpu_count() or 1, help="processes")
    options = parser.parse_args()
    if options.workers < 1:
        parser.error(f"--workers must be at least 1, got {options.workers}")
    try:
        if options.folder is not None:
            run(options.folder, options.column, options.workers)
        else:
            with tempfile.TemporaryDirectory() as folder:
                print(f"{DEMO}\n", flush=True)
                write_demo(Path(folder))
                run(Path(folder), options.column or "pressure", options.workers)
    except BadInput as error:
        print(f"shard_totals: {error}", file=sys.stderr)
        return 2
    return 0


if __name__ == "__main__":
    sys.exit(main())
