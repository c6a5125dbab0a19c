"""Threads and forks: kernels release the interpreter lock, and no pool outlives a call."""

import multiprocessing
import os
import pickle
import signal
import subprocess
import sys
import threading
from concurrent.futures import ProcessPoolExecutor, ThreadPoolExecutor

import numpy as np
import pytest
from exact import BLOCK, assert_same_state

import momentstream as ms

GROUP = 64 * BLOCK
# Later Pythons warn of forks beside threads: here that is what is tried.
pytestmark = pytest.mark.filterwarnings("ignore:.*multi-threaded.*:DeprecationWarning")


def stream(seed, n=2 * GROUP + 5000):
    return np.random.default_rng(seed).exponential(size=n)


def shard(seed):
    """What a worker does: feed its shard on two threads, hand back bytes."""
    return ms.Moments().update(stream(seed), threads=2).to_bytes()


def in_a_forked_child(work):
    """The bytes ``work()`` gives in a forked child; its errors are errors here."""
    read, write = os.pipe()
    child = os.fork()
    if child == 0:
        status = 1
        signal.alarm(120)  # an end to a child that waits for a lock nobody holds
        try:
            os.close(read)
            with os.fdopen(write, "wb") as pipe:
                pipe.write(work())
            status = 0
        finally:
            os._exit(status)
    os.close(write)
    with os.fdopen(read, "rb") as pipe:
        data = pipe.read()
    _, status = os.waitpid(child, 0)
    assert os.waitstatus_to_exitcode(status) == 0
    return data


def test_a_child_forked_after_threads_feeds_on():
    accumulator = ms.Moments().update(stream(1), threads=2)
    more = stream(2)

    def feed_on():
        return accumulator.update(more, threads=2).to_bytes(resume=True)

    data = in_a_forked_child(feed_on)
    # The child's life is its own: here nothing has changed yet.
    assert_same_state(accumulator, ms.Moments().update(stream(1)), "the parent")
    assert data == accumulator.update(more).to_bytes(resume=True)


def test_a_fork_while_other_threads_feed():
    shard(3)  # compiled before: a compiler may not be forked while it works
    stop = threading.Event()
    x = stream(3)

    def feed():
        while not stop.is_set():
            ms.Moments().update(x, threads=2)

    feeder = threading.Thread(target=feed)
    feeder.start()
    try:
        for seed in range(4):
            data = in_a_forked_child(lambda seed=seed: shard(seed))
            assert data == ms.Moments().update(stream(seed)).to_bytes()
    finally:
        stop.set()
        feeder.join()


def test_workers_forked_after_threads():
    ms.Moments().update(stream(0), threads=2)
    context = multiprocessing.get_context("fork")
    with ProcessPoolExecutor(2, mp_context=context) as pool:
        states = list(pool.map(shard, range(4)))
    assert states == [ms.Moments().update(stream(seed)).to_bytes() for seed in range(4)]
    whole = ms.combine(ms.from_bytes(state) for state in states)
    assert whole.count == 4 * len(stream(0))


def test_spawned_workers_hand_back_accumulators():
    context = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(1, mp_context=context) as pool:
        part = pool.submit(ms.Moments.update, ms.Moments(), [1.0, 2.0, 10.0]).result()
    assert part == ms.Moments().update([1.0, 2.0, 10.0])


@pytest.mark.parametrize("threads", [1, 2])
def test_two_threads_feed_two_accumulators_at_once(threads):
    x = [stream(seed) for seed in (4, 5)]
    wanted = [ms.Moments(8).update(values) for values in x]
    together = threading.Barrier(2)

    def feed(values):
        accumulator = ms.Moments(8)
        together.wait()
        for start in range(0, len(values), 300_001):
            accumulator.update(values[start : start + 300_001], threads=threads)
        return accumulator

    for _ in range(3):
        with ThreadPoolExecutor(2) as pool:
            got = list(pool.map(feed, x))
        for accumulator, right in zip(got, wanted, strict=True):
            assert_same_state(accumulator, right, f"{threads} threads each")


def test_many_threads_feed_channels_weights_and_readings_at_once():
    rng = np.random.default_rng(6)
    x = rng.normal(size=(20_000, 3))
    w = rng.random(20_000)

    def work(kind):
        if kind == 0:
            return ms.Moments(shape=3).update(x).to_bytes(resume=True)
        if kind == 1:
            return ms.Moments(weights="reliability").update(x[:, 0], w).to_bytes(resume=True)
        if kind == 2:
            return ms.Moments().update(x[:, 1].tolist()).to_bytes(resume=True)
        return ms.combine(ms.Moments().update(part) for part in x[:200]).to_bytes(resume=True)

    wanted = [work(kind) for kind in range(4)]
    with ThreadPoolExecutor(8) as pool:
        got = list(pool.map(work, list(range(4)) * 12))
    assert got == wanted * 12


def test_reading_one_accumulator_from_many_threads():
    accumulator = ms.Moments().update(stream(7))
    wanted = accumulator.copy().kurtosis(), accumulator.copy().to_bytes()
    with ThreadPoolExecutor(4) as pool:
        got = list(pool.map(lambda _: (accumulator.kurtosis(), accumulator.to_bytes()), range(100)))
    assert set(got) == {wanted}


def test_no_thread_is_left_behind():
    before = threading.active_count()
    ms.Moments().update(stream(8), threads=3)
    assert threading.active_count() == before


def test_numbas_parallel_layer_is_never_started():
    # Launched, it would kill forked children and abort on calls from two threads.
    code = (
        "import numpy, numba, momentstream as ms\n"
        "ms.Moments().update(numpy.ones(1_200_000), threads=2)\n"
        "try:\n"
        "    numba.threading_layer()\n"
        "except ValueError:\n"
        "    print('never')\n"
    )
    result = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True)
    assert result.stdout == "never\n", result.stderr


def test_an_accumulator_travels_between_threads():
    accumulator = ms.Moments()
    x = np.random.default_rng(9).normal(size=9000)
    for start in range(0, 9000, 1000):
        thread = threading.Thread(target=accumulator.update, args=(x[start : start + 1000],))
        thread.start()
        thread.join()
    assert_same_state(accumulator, ms.Moments().update(x), "fed by nine threads in turn")
    assert pickle.loads(pickle.dumps(accumulator)) == accumulator
