"""Speed of each path, for comparing one version with another; collected only when named.

    pytest benchmarks --benchmark-only

Groups hold what is worth comparing; where NumPy does like work, it is in the group.
"""

import numpy as np
import pytest

import momentstream as ms

READINGS = 10**6
ITEMS = 10**5


@pytest.fixture(scope="module")
def readings():
    return np.random.default_rng(1).standard_normal(READINGS)


@pytest.fixture(scope="module")
def items(readings):
    return readings[:ITEMS].tolist()


def feed(x, w=None, threads=1, **settings):
    return ms.Moments(**settings).update(x, w, threads=threads)


# -- arrays --------------------------------------------------------------------------------------


@pytest.mark.benchmark(group="arrays of float64")
@pytest.mark.parametrize("order", [1, 2, 3, 4, 6, 8, 16])
def test_order(benchmark, readings, order):
    assert benchmark(feed, readings, order=order).count == READINGS


@pytest.mark.benchmark(group="arrays of float64")
def test_numpy_sum(benchmark, readings):
    benchmark(np.sum, readings)


@pytest.mark.benchmark(group="arrays of float64")
def test_two_threads(benchmark, readings):
    assert benchmark(feed, readings, threads=2).count == READINGS


@pytest.mark.benchmark(group="arrays of other dtypes")
@pytest.mark.parametrize("dtype", ["float32", "float16", "int64", "int16", "uint8", "bool"])
def test_dtype(benchmark, readings, dtype):
    x = np.abs(readings * 50).astype(dtype)
    assert benchmark(feed, x).count == READINGS


@pytest.mark.benchmark(group="arrays of other layouts")
def test_strided(benchmark, readings):
    assert benchmark(feed, readings[::2]).count == READINGS // 2


@pytest.mark.benchmark(group="arrays of other layouts")
def test_masked(benchmark, readings):
    x = np.ma.masked_less(readings, -3.0)
    assert benchmark(feed, x, nonfinite="omit").omitted > 0


@pytest.mark.benchmark(group="weights")
@pytest.mark.parametrize("weights", ["frequency", "reliability"])
def test_weights(benchmark, readings, weights):
    w = np.random.default_rng(2).integers(1, 9, READINGS).astype(float)
    assert benchmark(feed, readings, w, weights=weights).weight == w.sum()


@pytest.mark.benchmark(group="missing readings")
@pytest.mark.parametrize("nonfinite", ["omit", "propagate"])
def test_missing(benchmark, readings, nonfinite):
    x = readings.copy()
    x[::1000] = np.nan
    benchmark(feed, x, nonfinite=nonfinite)


@pytest.mark.benchmark(group="transforms")
@pytest.mark.parametrize("transform", ["log", "reciprocal", "abs"])
def test_transform(benchmark, readings, transform):
    assert benchmark(feed, np.exp(readings), transform=transform).count == READINGS


# -- channels ------------------------------------------------------------------------------------


@pytest.mark.benchmark(group="channels")
@pytest.mark.parametrize("channels", [2, 64, 1000])
def test_channels(benchmark, readings, channels):
    rows = readings.reshape(-1, channels)
    assert benchmark(feed, rows, shape=channels).count[0] == len(rows)


@pytest.mark.benchmark(group="channels")
@pytest.mark.parametrize("channels", [2, 64, 1000])
def test_numpy_sum_of_channels(benchmark, readings, channels):
    benchmark(np.sum, readings.reshape(-1, channels), axis=0)


# -- one by one ----------------------------------------------------------------------------------


@pytest.mark.benchmark(group="one by one")
def test_single_floats(benchmark, items):
    def run():
        m = ms.Moments()
        for value in items:
            m.update(value)
        return m

    assert benchmark(run).count == ITEMS


@pytest.mark.benchmark(group="one by one")
def test_generator(benchmark, items):
    assert benchmark(lambda: feed(value for value in items)).count == ITEMS


@pytest.mark.benchmark(group="one by one")
def test_numpy_fromiter(benchmark, items):
    benchmark(lambda: np.fromiter((value for value in items), np.float64))


@pytest.mark.benchmark(group="one by one")
def test_list(benchmark, items):
    assert benchmark(feed, items).count == ITEMS


@pytest.mark.benchmark(group="one by one")
def test_list_of_integers(benchmark):
    assert benchmark(feed, list(range(ITEMS))).count == ITEMS


# -- combining, saving, reading off --------------------------------------------------------------


@pytest.fixture(scope="module")
def parts(readings):
    return [feed(part) for part in np.array_split(readings, 1000)]


@pytest.mark.benchmark(group="combining")
def test_merge(benchmark, parts):
    a, b = parts[0].copy(), parts[1]
    benchmark(a.merge, b)


@pytest.mark.benchmark(group="combining")
def test_combine_a_thousand(benchmark, parts):
    assert benchmark(ms.combine, parts).count == READINGS


@pytest.mark.benchmark(group="saving")
@pytest.mark.parametrize("resume", [False, True])
def test_to_bytes(benchmark, parts, resume):
    benchmark(parts[0].to_bytes, resume=resume)


@pytest.mark.benchmark(group="saving")
def test_from_bytes(benchmark, parts):
    assert benchmark(ms.from_bytes, parts[0].to_bytes()) == parts[0]


@pytest.mark.benchmark(group="saving")
def test_save(benchmark, parts, tmp_path):
    benchmark(ms.save, parts[0], tmp_path / "part.state")


@pytest.mark.benchmark(group="reading off")
@pytest.mark.parametrize("name", ["mean", "variance", "skewness", "kurtosis", "minimum", "summary"])
def test_statistic(benchmark, readings, name):
    benchmark(getattr(feed(readings), name))
