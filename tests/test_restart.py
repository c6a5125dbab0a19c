"""Promise 8: saved, loaded and continued is the same to the bit; a crash leaves a whole file."""

import errno
import itertools
import os
import stat

import numpy as np
import pytest
from exact import BLOCK, CHANNEL_BLOCK, assert_same_state

import momentstream as ms

CONFIGURATIONS = [
    {"order": order, "shape": shape, "weights": weights, "nonfinite": nonfinite}
    for order, shape, weights, nonfinite in itertools.product(
        (1, 4, 7, 16),
        ((), (3,), (2, 2)),
        (None, "frequency", "reliability"),
        ("raise", "omit", "propagate"),
    )
]
TRANSFORMED = [
    {"transform": transform, "nonfinite": "omit"} for transform in ("log", "reciprocal", "abs")
]
NAMED = [{"names": ["inlet", "outlet"]}, {"names": ["a", "b", "c"], "weights": "reliability"}]


def stream_of(configuration, blocks=3.3):
    shape = configuration.get("shape", ())
    shape = (len(configuration["names"]),) if "names" in configuration else shape
    n = int(blocks * (CHANNEL_BLOCK if shape else BLOCK))
    rng = np.random.default_rng([configuration.get("order", 4), len(shape)])
    x = rng.exponential(size=(n, *shape)) + 3.0
    if configuration.get("nonfinite") == "omit":
        x[rng.random(x.shape) < 0.001] = np.nan
    if configuration.get("nonfinite") == "propagate":
        x[n // 2] = np.inf
    w = None
    if configuration.get("weights"):
        w = rng.integers(0, 5, n).astype(float)
    return x, w


def fed(accumulator, x, w, start, stop):
    return accumulator.update(x[start:stop], None if w is None else w[start:stop])


@pytest.mark.parametrize("configuration", CONFIGURATIONS + TRANSFORMED + NAMED, ids=str)
def test_a_restart_changes_no_bit(configuration, tmp_path):
    x, w = stream_of(configuration)
    n = len(x)
    whole = fed(ms.Moments(**configuration), x, w, 0, n)
    block = BLOCK if x.ndim == 1 else CHANNEL_BLOCK
    path = tmp_path / "stream.state"
    for place in (0, 1, block - 1, block, 2 * block + 7, n):
        accumulator = fed(ms.Moments(**configuration), x, w, 0, place)
        ms.save(accumulator, path)
        loaded = ms.load(path)
        assert type(loaded) is ms.Moments
        assert_same_state(loaded, accumulator, "as it was saved")
        for name in ("order", "shape", "names", "weights", "nonfinite", "transform"):
            assert getattr(loaded, name) == getattr(accumulator, name)
        assert_same_state(fed(loaded, x, w, place, n), whole, f"restarted at {place}")
        # What was saved goes on untouched.
        assert_same_state(fed(accumulator, x, w, place, n), whole, "the one that was saved")


@pytest.mark.parametrize("how", ["file", "bytes", "copy"])
def test_restarts_all_the_way(how, tmp_path):
    rng = np.random.default_rng(1)
    x = rng.normal(size=4 * BLOCK + 99)
    whole = ms.Moments(6).update(x)
    accumulator = ms.Moments(6)
    places = [0, *sorted(rng.integers(0, len(x), 40).tolist()), len(x)]
    for start, stop in itertools.pairwise(places):
        accumulator.update(x[start:stop])
        if how == "file":
            ms.save(accumulator, tmp_path / "state")
            accumulator = ms.load(tmp_path / "state")
        elif how == "bytes":
            accumulator = ms.Moments.from_bytes(accumulator.to_bytes(resume=True))
        else:
            accumulator = accumulator.copy()
    assert_same_state(accumulator, whole, how)


def test_a_restart_with_wide_integers_and_merged_parts(tmp_path):
    rng = np.random.default_rng(2)
    x = 2**62 + rng.integers(0, 10**6, 2 * BLOCK + 50)
    part = ms.Moments().update(rng.normal(size=500))
    whole = ms.Moments().update(x[:100]).merge(part).update(x[100:])
    for place in (100, 101, BLOCK + 3, 2 * BLOCK):
        accumulator = ms.Moments().update(x[:100]).merge(part).update(x[100:place])
        ms.save(accumulator, tmp_path / "state")
        assert_same_state(ms.load(tmp_path / "state").update(x[place:]), whole, f"at {place}")


def test_single_readings_that_wait_are_saved(tmp_path):
    accumulator = ms.Moments()
    for value in (1.0, 2.0, 10.0):
        accumulator.update(value)
    ms.save(accumulator, tmp_path / "state")
    loaded = ms.load(tmp_path / "state").update(4.0)
    assert_same_state(loaded, ms.Moments().update([1.0, 2.0, 10.0, 4.0]), "waiting readings")


@pytest.mark.parametrize("configuration", CONFIGURATIONS[::7] + TRANSFORMED + NAMED, ids=str)
@pytest.mark.parametrize("resume", [False, True])
def test_bytes_read_back_to_the_same_bytes(configuration, resume):
    x, w = stream_of(configuration, 2.2)
    for n in (0, 1, len(x)):
        accumulator = fed(ms.Moments(**configuration), x, w, 0, n)
        data = accumulator.to_bytes(resume)
        for restored in (ms.from_bytes(data), ms.Moments.from_bytes(bytearray(data))):
            assert restored.to_bytes(resume) == data
            assert restored.to_bytes() == accumulator.to_bytes()
            assert restored == accumulator
    assert len(accumulator.to_bytes()) <= len(accumulator.to_bytes(resume=True))


def test_a_settled_state_goes_on_in_equal_numbers_but_not_in_equal_bits():
    # Why there are two forms: (b1 b2) b3 is not what (b1 b2)(b3 b4) needs.
    x = np.random.default_rng(3).normal(size=4 * BLOCK)
    whole = ms.Moments().update(x)
    settled = ms.from_bytes(ms.Moments().update(x[: 3 * BLOCK]).to_bytes())
    settled.update(x[3 * BLOCK :])
    assert settled != whole
    assert settled.variance() == pytest.approx(whole.variance(), rel=1e-15)


# -- crashes ------------------------------------------------------------------------------------


@pytest.fixture
def saved(tmp_path):
    """An old state in a file, and a newer one that is to replace it."""
    path = tmp_path / "level.state"
    old = ms.Moments().update([4.1, 4.3])
    ms.save(old, path)
    return path, old, ms.Moments().update([4.1, 4.3, 9.0])


def fails(*_, **__):
    raise OSError(errno.ENOSPC, "no space is left")


class FullDisk:
    """A file that takes some bytes and then no more."""

    def __init__(self, file):
        self.file = file

    def write(self, data):
        self.file.write(data[:20])
        fails()

    def __getattr__(self, name):
        return getattr(self.file, name)

    def __enter__(self):
        return self

    def __exit__(self, *error):
        self.file.close()


@pytest.mark.parametrize("error", [OSError(errno.EIO, "broken"), KeyboardInterrupt()], ids=repr)
@pytest.mark.parametrize("step", ["fsync", "replace", "fdopen", "chmod"])
def test_a_crash_while_saving_leaves_the_old_file(saved, step, error, monkeypatch):
    path, old, new = saved
    before = path.read_bytes()

    def crash(*_, **__):
        raise error

    with monkeypatch.context() as patched:
        patched.setattr(os, step, crash)
        with pytest.raises(type(error)):
            ms.save(new, path)
    assert path.read_bytes() == before
    assert os.listdir(path.parent) == [path.name]
    assert ms.load(path) == old
    ms.save(new, path)
    assert ms.load(path) == new


def test_a_full_disk_leaves_the_old_file(saved, monkeypatch):
    path, old, new = saved
    opened = os.fdopen
    monkeypatch.setattr(os, "fdopen", lambda *args, **kw: FullDisk(opened(*args, **kw)))
    with pytest.raises(OSError, match="no space"):
        ms.save(new, path)
    monkeypatch.undo()
    assert os.listdir(path.parent) == [path.name]
    assert ms.load(path) == old


def test_the_first_save_crashing_leaves_nothing(tmp_path, monkeypatch):
    monkeypatch.setattr(os, "replace", fails)
    with pytest.raises(OSError, match="no space"):
        ms.save(ms.Moments(), tmp_path / "state")
    assert os.listdir(tmp_path) == []


def test_everything_is_flushed_in_order(saved, monkeypatch):
    """The bytes before the rename, the folder after it."""
    path, _, new = saved
    done = []
    fsync, replace = os.fsync, os.replace

    def note_fsync(handle):
        kind = "folder" if stat.S_ISDIR(os.fstat(handle).st_mode) else "file"
        size = os.fstat(handle).st_size if kind == "file" else None
        done.append((kind, size))
        fsync(handle)

    def note_replace(source, target):
        done.append(("rename", os.path.dirname(source) == os.path.dirname(target)))
        replace(source, target)

    monkeypatch.setattr(os, "fsync", note_fsync)
    monkeypatch.setattr(os, "replace", note_replace)
    ms.save(new, path)
    whole = len(new.to_bytes(resume=True))
    assert done == [("file", whole), ("rename", True), ("folder", None)]


def test_permissions_are_those_of_the_file_that_was_there(saved):
    path, _, new = saved
    path.chmod(0o640)
    ms.save(new, path)
    assert stat.S_IMODE(path.stat().st_mode) == 0o640


def test_paths_of_any_kind(tmp_path, monkeypatch):
    accumulator = ms.Moments().update([1.0, 2.0])
    monkeypatch.chdir(tmp_path)
    for path in ("plain.state", tmp_path / "path.state", str(tmp_path / "text.state")):
        ms.save(accumulator, path)
        assert ms.load(path) == accumulator
    with pytest.raises(FileNotFoundError):
        ms.save(accumulator, tmp_path / "no such folder" / "state")
    with pytest.raises(FileNotFoundError):
        ms.load(tmp_path / "no such file")


def test_a_damaged_file_is_refused(saved):
    path, _, _ = saved
    data = bytearray(path.read_bytes())
    data[len(data) // 2] ^= 1
    path.write_bytes(data)
    with pytest.raises(ms.StateError):
        ms.load(path)
    path.write_bytes(b"")
    with pytest.raises(ms.StateError):
        ms.load(path)


@pytest.mark.parametrize("thing", [None, 4.0, "state", ms.Summary, [1.0]])
def test_only_accumulators_are_saved(thing, tmp_path):
    with pytest.raises(TypeError, match="accumulator"):
        ms.save(thing, tmp_path / "state")
    assert os.listdir(tmp_path) == []
