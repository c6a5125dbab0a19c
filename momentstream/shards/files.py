"""States on disk: written whole or not at all."""

from __future__ import annotations

import contextlib
import os
from typing import Any

# The reader must know the kinds of all accumulators.
from ..accumulators import exact_moments, joint_moments, moments  # noqa: F401
from ..accumulators.base import Accumulator
from ..codec import decode


def from_bytes(data: bytes | bytearray | memoryview) -> Any:
    """The object whose bytes these are; the class is found by itself.

    Raises
    ------
    StateError
        The bytes are cut, changed, foreign or of a later version.

    Examples
    --------
    >>> import momentstream as ms
    >>> ms.from_bytes(ms.Moments().update(4.0).to_bytes()).mean()
    4.0
    """
    return decode(data)


def save(x: Accumulator, path: str | os.PathLike[str]) -> None:
    """Save a working state; it is in the file whole, or the old file is still there.

    Parameters
    ----------
    x : accumulator
    path : str or path-like

    Notes
    -----
    Written to a temporary file beside ``path``, flushed to disk, renamed; then the folder is
    flushed.  ``load`` gives an object that continues bit for bit.

    Examples
    --------
    >>> import momentstream as ms, tempfile, os
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = os.path.join(folder, "level.state")
    ...     ms.save(ms.Moments().update([1.0, 3.0]), path)
    ...     ms.load(path).mean()
    2.0
    """
    if not isinstance(x, Accumulator):
        raise TypeError(f"save takes an accumulator, got {type(x).__name__}")
    import tempfile

    data = x.to_bytes(resume=True)
    path = os.fspath(path)
    folder = os.path.dirname(os.path.abspath(path))
    handle, temporary = tempfile.mkstemp(prefix=f".{os.path.basename(path)}.", dir=folder)
    try:
        with os.fdopen(handle, "wb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        os.chmod(temporary, _permissions(path))
        os.replace(temporary, path)
    except BaseException:
        with contextlib.suppress(FileNotFoundError):
            os.unlink(temporary)
        raise
    _flush_folder(folder)


def load(path: str | os.PathLike[str]) -> Any:
    """What ``save`` wrote.

    Raises
    ------
    StateError
        The file holds no state.
    OSError
        It cannot be read.
    """
    with open(path, "rb") as file:
        return decode(file.read())


def _permissions(path):
    """Those of the file that is there, else those a new file gets."""
    try:
        return os.stat(path).st_mode & 0o777
    except FileNotFoundError:
        mask = os.umask(0)
        os.umask(mask)
        return 0o666 & ~mask


def _flush_folder(folder):
    if os.name != "posix":
        return
    handle = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)
