"""Compiled kernels on disk: each in a file of its own, named by all that it was made from.

Numba keeps an index beside numbered files and writes the two one after the other: processes that
start together with an empty cache, as a pool of workers does, can then load one function's code for
another's; and it watches the file of an entry function alone, not those of what that calls.  Here
a name tells the signature, the processor, and the text of every kernel, and a file is either whole
or not there.
"""

import hashlib
import os
import pickle
import tempfile
from contextlib import suppress
from pathlib import Path

from numba.core import caching


def _stamp():
    """A digest of the text of all kernels."""
    digest = hashlib.sha256()
    for path in sorted(Path(__file__).parent.glob("*.py")):
        digest.update(path.name.encode() + b"\0" + path.read_bytes())
    return digest.hexdigest()[:16]


_STAMP = _stamp()


class _Files:
    """Numba's ``IndexDataCacheFile`` without the index."""

    def __init__(self, folder, base):
        self._folder = Path(folder)
        self._base = base

    def _path(self, key):
        digest = hashlib.sha256(repr(key).encode()).hexdigest()[:24]
        return self._folder / f"{self._base}.{digest}.{_STAMP}.nbc"

    def save(self, key, data):
        for old in self._folder.glob(f"{self._base}.*.nbc"):
            if not old.name.endswith(f".{_STAMP}.nbc"):
                with suppress(OSError):
                    old.unlink()
        whole = caching.dumps((repr(key), data))
        handle, name = tempfile.mkstemp(dir=self._folder, suffix=".tmp")
        try:
            with os.fdopen(handle, "wb") as file:
                file.write(hashlib.sha256(whole).digest() + whole)
            os.replace(name, self._path(key))
        except BaseException:
            with suppress(OSError):
                os.unlink(name)
            raise

    def load(self, key):
        try:
            content = self._path(key).read_bytes()
        except OSError:
            return None
        check, whole = content[:32], content[32:]
        if hashlib.sha256(whole).digest() != check:
            return None
        found, data = pickle.loads(whole)
        return data if found == repr(key) else None

    def flush(self):
        for path in self._folder.glob(f"{self._base}.*.nbc"):
            path.unlink()


class KernelCache(caching.FunctionCache):
    """The cache of one kernel; RuntimeError where no folder can be written to."""

    def __init__(self, function):
        super().__init__(function)
        self._cache_file = _Files(self._cache_path, self._impl.filename_base)
