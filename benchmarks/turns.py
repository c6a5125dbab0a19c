"""How everything here is timed: contenders take turns, in one process or in fresh ones."""

import os
import statistics
import subprocess
import sys
import time
from dataclasses import dataclass


@dataclass(frozen=True)
class Times:
    """Seconds a call, one entry a round."""

    seconds: list

    @property
    def least(self):
        return min(self.seconds)

    @property
    def median(self):
        return statistics.median(self.seconds)


def in_turn(timers, *, calls=1, budget=3.0, rounds=7):
    """Time each ``timeit.Timer`` once a round, in turn, until the budget and the rounds are spent.

    Turns let a slow minute of the machine fall on all alike.  ``timeit`` keeps the garbage
    collector out, and compiles each statement for itself.
    """
    seconds = [[] for _ in timers]
    for timer in timers:
        timer.timeit(1)  # what the first call alone costs: compiling, first use of memory
    end = time.perf_counter() + budget
    while len(seconds[0]) < rounds or time.perf_counter() < end:
        for own, timer in zip(seconds, timers, strict=True):
            own.append(timer.timeit(calls) / calls)
    return [Times(own) for own in seconds]


def printed_by(code, **environment):
    """The number that the last line printed by a fresh process holds."""
    return float(_fresh(code, environment).split()[-1])


def seconds_of(code, **environment):
    """Seconds a fresh process takes, from its start to its end."""
    start = time.perf_counter()
    _fresh(code, environment)
    return time.perf_counter() - start


def _fresh(code, environment):
    return subprocess.run(
        [sys.executable, "-c", code],
        env={**os.environ, **environment},
        check=True,
        capture_output=True,
        text=True,
    ).stdout
