"""What exact moments cost: measurements for the table of ``compare.py``."""

import functools
from timeit import Timer

import numpy as np
import peers
from turns import in_turn

import momentstream as ms


@functools.cache
def decades(n):
    """Readings over thirty decades, as many exponents as that has."""
    return 10.0 ** np.random.default_rng(5).uniform(-15, 15, n)


@functools.cache
def counts(n):
    """Counts of a converter of 12 bits: a coarse common grid."""
    return np.random.default_rng(6).integers(0, 4096, n).astype(np.float64)


def nanoseconds_a_reading(data, result):
    def measure(scale):
        x = data(scale.readings)
        timer = Timer(lambda: ms.ExactMoments().update(x))
        (own,) = in_turn([timer], budget=scale.seconds)
        n = len(x)
        return result(own.least / n * 1e9, own.median / n * 1e9, {"update": own.least})

    return measure


def against(first, second, result):
    """How many times longer the second contender takes than the first."""

    def measure(scale):
        ours, theirs = in_turn([Timer(first(scale)), Timer(second(scale))], budget=scale.seconds)
        return result(
            theirs.least / ours.least,
            theirs.median / ours.median,
            {"first": ours.least, "second": theirs.least},
        )

    return measure


def updating(data, **options):
    return lambda scale: lambda: ms.ExactMoments().update(data(scale.readings), **options)


def scipy_statistics(data):
    def contender(scale):
        (scipy,) = (peer for peer in peers.installed() if peer.name.startswith("SciPy"))
        return functools.partial(scipy.compute, scipy.load(data(scale.readings)))

    return contender


def reading_kurtosis(data, result):
    """Microseconds to read kurtosis off a state that was never asked before."""

    def measure(scale):
        state = ms.ExactMoments().update(data(scale.exact)).to_bytes()
        timer = Timer("e.kurtosis()", "e = read(state)",
                      globals={"read": ms.from_bytes, "state": state})  # fmt: skip
        (own,) = in_turn([timer], budget=scale.seconds / 4)
        return result(own.least * 1e6, own.median * 1e6, {"kurtosis": own.least})

    return measure
