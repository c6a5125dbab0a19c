"""What is imported when, which room may import which, and what happens without a cache folder."""

import ast
import importlib
import importlib.metadata
import os
import re
import shutil
import subprocess
import sys
from collections import Counter
from pathlib import Path

import pytest

import momentstream as ms

PACKAGE = Path(ms.__file__).parent
# From top to bottom: a room imports from those below it, and from itself.
HOUSE = (
    "connect", "monitor", "shards", "accumulators", "statistics", "display", "codec", "kernels",
    "algebra", "errors",
)  # fmt: skip
HEAVY = (
    "numba", "llvmlite", "scipy", "pandas", "matplotlib", "pyarrow", "dask", "distributed",
    "polars", "duckdb", "sqlite3", "multiprocessing",
)  # fmt: skip
# Foreign packages, and the rooms that may import them.
ALLOWED = {
    "numpy": set(HOUSE) - {"errors"},
    "numba": {"kernels"},
    "llvmlite": {"kernels"},
    "scipy": {"statistics"},
    "matplotlib": {"display"},
    "pandas": {"connect", "display"},
    "pyarrow": {"connect", "display"},
    "polars": {"connect", "display"},
    "dask": {"connect"},
    "distributed": {"connect"},
    "duckdb": {"connect"},
    "sqlite3": {"connect"},
}


def run(code, *options, **environment):
    """What a fresh interpreter prints."""
    done = subprocess.run(
        [sys.executable, "-W", "error", *options, "-c", code],
        capture_output=True,
        encoding="utf-8",
        timeout=240,
        env={**os.environ, "PYTHONPATH": str(PACKAGE.parent), **environment},
    )
    assert done.returncode == 0, done.stderr
    return done.stdout.split()


# -- what is imported when -----------------------------------------------------------------------


@pytest.mark.parametrize(
    "work",
    [
        "import momentstream",
        "import momentstream as ms; dir(ms); ms.__version__; ms.__all__",
        "import momentstream as ms; ms.Moments; ms.Summary; ms.combine; ms.save; ms.load",
        "import momentstream as ms; [getattr(ms, n) for n in ms.__all__ if n != 'kernels']",
        "import momentstream as ms; str(ms.Summary.from_central(4.0, [12.5]).affine(2.0, 1.0))",
    ],
)
def test_importing_brings_nothing_heavy(work):
    loaded = run(f"import sys\n{work}\nprint(*{{name.partition('.')[0] for name in sys.modules}})")
    assert "momentstream" in loaded
    assert not set(loaded) & set(HEAVY)


def test_importing_adds_little_to_numpy():
    loaded = run(
        "import sys, numpy\nbefore = set(sys.modules)\nimport momentstream\n"
        "print(*(set(sys.modules) - before))"
    )
    assert "momentstream" in loaded
    foreign = [name for name in loaded if not name.startswith("momentstream")]
    assert len(foreign) <= 3, foreign


def test_feeding_needs_only_numpy_and_numba():
    """Also pandas, Polars and Arrow columns: they bring their libraries, ours does not."""
    loaded = run(
        "import sys, pickle, momentstream as ms\n"
        "m = ms.Moments(names=['a', 'b'], weights='reliability').update([[1, 2], [3, 4]], [1, 2])\n"
        "m.merge(m); ms.combine([m, m]); pickle.loads(pickle.dumps(m)); m._repr_html_()\n"
        "str(m.summary()); m.kurtosis(bias=False); m.affine(2.0).remove(m.affine(2.0))\n"
        "ms.Moments().update(range(9)).update(iter([1.0])).update([2**62])\n"
        "print(*{name.partition('.')[0] for name in sys.modules})"
    )
    assert "numba" in loaded
    optional = {"pandas", "pyarrow", "polars", "matplotlib", "dask", "duckdb", "sqlite3"}
    assert not set(loaded) & optional


def test_only_numpy_and_numba_are_required():
    requirements = importlib.metadata.requires("momentstream")
    always = {re.match(r"[\w-]+", r)[0] for r in requirements if "extra ==" not in r}
    assert always == {"numpy", "numba"}


# -- the house -----------------------------------------------------------------------------------


def room_of(path):
    parts = path.relative_to(PACKAGE).parts
    return parts[0].removesuffix(".py")


def imports(path):
    """Absolute names of modules a file imports, wherever in it, lazily by name too."""
    here = ("momentstream", *path.relative_to(PACKAGE).with_suffix("").parts)
    package = here[:-1]
    for node in ast.walk(ast.parse(path.read_text("utf-8"))):
        if isinstance(node, ast.Import):
            yield from ((alias.name, node.lineno) for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            base = package[: len(package) - node.level + 1] if node.level else ()
            module = ".".join((*base, *([node.module] if node.module else [])))
            names = [f"{module}.{alias.name}" for alias in node.names]
            yield from ((name, node.lineno) for name in names)
        elif isinstance(node, ast.Constant) and re.fullmatch(
            r"momentstream(\.\w+)+", str(node.value)
        ):
            yield node.value, node.lineno


FILES = sorted(PACKAGE.rglob("*.py"))


@pytest.mark.parametrize("path", FILES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_rooms_import_downward(path):
    room = room_of(path)
    if room == "__init__":
        return_names = {name for name, _ in imports(path)}
        assert all(
            name.startswith("momentstream.") or name.partition(".")[0] in ("importlib", "typing")
            for name in return_names
        )
        return
    assert room in HOUSE, f"{path} is in no room of the house"
    for name, line in imports(path):
        top, _, rest = name.partition(".")
        if top == "momentstream":
            assert rest, f"{path}:{line} imports the face"
            other = rest.partition(".")[0]
            assert other in HOUSE, f"{path}:{line} imports {name}"
            assert HOUSE.index(other) >= HOUSE.index(room), f"{path}:{line}: {room} imports {other}"
        elif top not in sys.stdlib_module_names or top in ALLOWED:
            assert top in ALLOWED, f"{path}:{line} imports {top}"
            assert room in ALLOWED[top], f"{path}:{line}: {room} imports {top}"


def test_algebra_is_numpy_alone():
    for path in (PACKAGE / "algebra").glob("*.py"):
        for name, line in imports(path):
            top = name.partition(".")[0]
            inside = {"numpy", "math", "fractions", "functools", "typing", "itertools"}
            assert top in inside or name.startswith("momentstream.algebra"), (
                f"{path.name}:{line} imports {name}"
            )


def test_optional_libraries_come_when_they_are_used():
    """No import of an optional library at the top of a module."""
    for path in FILES:
        for node in ast.parse(path.read_text("utf-8")).body:
            names = []
            if isinstance(node, ast.Import):
                names = [alias.name for alias in node.names]
            elif isinstance(node, ast.ImportFrom) and not node.level:
                names = [node.module]
            for name in names:
                top = name.partition(".")[0]
                assert top not in HEAVY or room_of(path) == "kernels", f"{path} imports {name}"
                if room_of(path) == "kernels":
                    assert top not in set(HEAVY) - {"numba", "llvmlite"}


def test_scipy_has_one_module():
    users = {
        path for path in FILES for name, _ in imports(path) if name.partition(".")[0] == "scipy"
    }
    assert len(users) <= 1


# -- the face ------------------------------------------------------------------------------------


def test_every_name_is_there():
    assert len(set(ms.__all__)) == len(ms.__all__)
    for name in ms.__all__:
        assert getattr(ms, name) is not None
        assert name in dir(ms)
    for name in ("Moments", "Summary", "combine", "save", "load", "from_bytes", "kernels"):
        assert name in ms.__all__
    for name in ("MomentstreamError", "MergeError", "StateError", "NonFiniteError", "OrderError"):
        assert issubclass(getattr(ms, name), ms.MomentstreamError)
        assert getattr(ms, name).__doc__
    for name in ("MergeError", "StateError", "NonFiniteError", "OrderError"):
        assert issubclass(getattr(ms, name), ValueError)
    with pytest.raises(AttributeError, match="no_such_name"):
        ms.no_such_name  # noqa: B018
    namespace = {}
    exec("from momentstream import *", namespace)
    assert set(ms.__all__) <= set(namespace)


def test_names_are_one_object_wherever_they_come_from():
    from momentstream.accumulators.moments import Moments
    from momentstream.errors import StateError
    from momentstream.statistics.summary import Summary

    assert ms.Moments is Moments
    assert ms.StateError is StateError
    assert ms.Summary is Summary
    assert ms.Moments.__module__.startswith("momentstream.")


def test_the_kernels_that_are_promised():
    names = {"new_vector", "add_block", "combine_vectors", "mean", "variance", "skewness",
             "kurtosis", "warm_up"}  # fmt: skip
    assert names <= set(dir(ms.kernels))
    for name in names:
        assert callable(getattr(ms.kernels, name))
        assert getattr(ms.kernels, name).__doc__


def test_version_and_types():
    assert re.fullmatch(r"\d+\.\d+\.\d+\S*", ms.__version__)
    assert importlib.metadata.version("momentstream") == ms.__version__
    assert (PACKAGE / "py.typed").is_file()


# -- without a cache folder ----------------------------------------------------------------------

WORK = """
import momentstream as ms
m = ms.Moments().update([1.0, 2.0]).update(3.0).update([10])
assert ms.from_bytes(m.to_bytes(resume=True)) == m
vector = ms.kernels.new_vector(4)
print(ms.__file__, m.variance(), ms.kernels.mean(vector))
"""


@pytest.fixture
def copy_of_the_package(tmp_path):
    target = tmp_path / "site"
    shutil.copytree(
        PACKAGE, target / "momentstream", ignore=shutil.ignore_patterns("__pycache__", "*.nb[ci]")
    )
    return target


def worked(site, **environment):
    """Run the work on a copy of the package; returns the files that appeared in it."""
    before = set(site.rglob("*"))
    clean = {
        name: value
        for name, value in os.environ.items()
        if name not in ("NUMBA_CACHE_DIR", "XDG_CACHE_HOME", "NUMBA_DISABLE_JIT", "PYTHONPATH")
    }
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", WORK],
        capture_output=True,
        encoding="utf-8",
        timeout=280,
        cwd=site,
        env={**clean, "PYTHONPATH": str(site), "PYTHONDONTWRITEBYTECODE": "1", **environment},
        preexec_fn=no_privileges if hasattr(os, "geteuid") and os.geteuid() == 0 else None,
    )
    assert done.returncode == 0, done.stderr
    assert done.stdout.split() == [str(site / "momentstream" / "__init__.py"), "12.5", "nan"]
    return set(site.rglob("*")) - before


def no_privileges():
    """Take the right to write everywhere from a child of root, so that modes mean something."""
    import ctypes

    set_bounding, override, read_search, owner = 24, 1, 2, 3  # PR_CAPBSET_DROP, CAP_...
    library = ctypes.CDLL(None, use_errno=True)
    for capability in (override, read_search, owner):
        if library.prctl(set_bounding, capability, 0, 0, 0) != 0:
            raise OSError(ctypes.get_errno(), "prctl")


def read_only(folder):
    for path in sorted(folder.rglob("*"), reverse=True):
        path.chmod(0o555 if path.is_dir() else 0o444)
    folder.chmod(0o555)


def writable(folder):
    folder.chmod(0o755)
    for path in folder.rglob("*"):
        path.chmod(0o755 if path.is_dir() else 0o644)


def test_a_read_only_install_without_a_home(copy_of_the_package, tmp_path):
    home = tmp_path / "home"
    home.mkdir()
    read_only(copy_of_the_package)
    home.chmod(0o555)
    try:
        appeared = worked(copy_of_the_package, HOME=str(home))
        assert not appeared
        assert not list(home.iterdir())
    finally:
        writable(copy_of_the_package)
        home.chmod(0o755)


def test_cache_folders_that_are_none(copy_of_the_package, tmp_path):
    """Files where folders are wanted: whoever runs this, nothing can be written there."""
    for folder in [p for p in copy_of_the_package.rglob("*") if p.is_dir()]:
        (folder / "__pycache__").write_text("a file")
    (tmp_path / "home").write_text("a file")
    appeared = worked(
        copy_of_the_package,
        HOME=str(tmp_path / "home"),
        NUMBA_CACHE_DIR=str(tmp_path / "home" / "cache"),
    )
    assert not appeared


def test_a_cache_is_kept_where_it_can_be(copy_of_the_package):
    appeared = worked(copy_of_the_package)
    kinds = {path.suffix for path in appeared if path.is_file()}
    assert kinds == {".nbc"}
    # And the next process finds it.
    assert not worked(copy_of_the_package)


BITS = """
import numpy as np
import momentstream as ms
rng = np.random.default_rng(1)
wide = 10.0 ** rng.uniform(-30, 30, 9 * 8192 + 77)
single = wide.astype(np.float32)
for state in (
    ms.Moments().update(wide),
    ms.Moments(2).update(single),
    ms.Moments(2).update(single.astype(np.float64)),
    ms.Moments(shape=2).update(wide[1:].reshape(-1, 2)),
    ms.JointMoments(2, 3).update(wide[1:].reshape(-1, 2)),
):
    print(state.to_bytes().hex())
"""


def test_kernels_from_disk_give_the_bits_of_kernels_just_compiled(tmp_path):
    environment = {**os.environ, "NUMBA_CACHE_DIR": str(tmp_path)}
    compiled, loaded = (
        subprocess.run(
            [sys.executable, "-c", BITS],
            env=environment,
            check=True,
            capture_output=True,
            text=True,
        ).stdout.split()
        for _ in range(2)
    )
    assert compiled == loaded
    assert compiled[1] == compiled[2]  # single precision and the same in doubles


def test_compiled_kernels_are_never_taken_for_one_another(tmp_path):
    from momentstream.kernels.cache import _Files

    one, other = _Files(tmp_path, "kernel-1.py311"), _Files(tmp_path, "kernel-1.py311")
    assert one.load("f(a)") is None
    # Processes that start together: each saves what it compiled, and finds the other's.
    one.save("f(a)", b"code for a")
    other.save("f(b)", b"code for b")
    for files in (one, other):
        assert files.load("f(a)") == b"code for a"
        assert files.load("f(b)") == b"code for b"
    assert len(list(tmp_path.iterdir())) == 2
    # What was cut or mixed up on disk is compiled again, not loaded.
    first, second = sorted(tmp_path.iterdir())
    whole = first.read_bytes()
    for damage in (whole[:-1], whole[:10], b"", second.read_bytes()):
        first.write_bytes(damage)
        loaded = one.load("f(a)"), one.load("f(b)")
        assert loaded.count(None) == 1
    first.write_bytes(whole)
    # Kernels of another text are no use, and go.
    stale = tmp_path / "kernel-1.py311.0123456789abcdef01234567.0123456789abcdef.nbc"
    stale.write_bytes(whole)
    one.save("f(a)", b"newer code")
    assert not stale.exists()
    assert other.load("f(a)") == b"newer code"
    one.flush()
    assert not list(tmp_path.iterdir())


def test_no_two_kernels_share_a_name():
    # Machine code is called by its name: of two that share one, a cached caller may get the other.
    from numba.core.dispatcher import Dispatcher

    kernels = {}
    for path in sorted((PACKAGE / "kernels").glob("*.py")):
        for value in vars(importlib.import_module(f"momentstream.kernels.{path.stem}")).values():
            if isinstance(value, Dispatcher):
                kernels[id(value)] = value.py_func
    names = Counter((function.__module__, function.__qualname__) for function in kernels.values())
    assert len(names) > 50
    assert [name for name, count in names.items() if count > 1] == []
