"""Frames, the writer and the reader of their payloads, and the registry of kinds."""

import struct
import zlib

import numpy as np

from ..errors import StateError

MAGIC = b"\x93mstate\n"
VERSION = 1
CONTINUED = 1  # flag: the whole working state
_HEAD = struct.Struct("<8sHHIQ")
_CHECK = struct.Struct("<I")
_KINDS: dict[int, type] = {}


def register(kind):
    """Class decorator: frames of this kind are read by the class's ``_from_payload``."""

    def enter(cls):
        if kind in _KINDS:
            raise ValueError(f"kind {kind} is taken by {_KINDS[kind].__name__}")
        _KINDS[kind] = cls
        cls._kind = kind
        return cls

    return enter


class Writer:
    """Collects a payload."""

    def __init__(self):
        self._parts = []

    def pack(self, layout, *values):
        """Write values by a ``struct`` layout without its byte-order sign."""
        self._parts.append(struct.pack("<" + layout, *values))

    def text(self, value):
        data = value.encode("utf-8")
        self.pack("I", len(data))
        self._parts.append(data)

    def doubles(self, values):
        values = np.array(values, dtype="<f8")
        values[np.isnan(values)] = np.nan
        self._parts.append(values.tobytes())

    def integers(self, values):
        self._parts.append(np.array(values, dtype="<i8").tobytes())

    def whole(self, value, size):
        """An integer in two's complement."""
        self._parts.append(value.to_bytes(size, "little", signed=True))

    def payload(self):
        return b"".join(self._parts)


class Reader:
    """Reads a payload and trusts nothing: every length is held against what is there."""

    def __init__(self, data):
        self._data = data
        self._place = 0

    def _take(self, size):
        if size > len(self._data) - self._place:
            raise StateError(
                f"state is cut short: {size} bytes expected at offset {self._place} of the "
                f"payload, {len(self._data) - self._place} are left"
            )
        part = self._data[self._place : self._place + size]
        self._place += size
        return part

    def unpack(self, layout):
        """The values of a ``struct`` layout, a tuple."""
        layout = "<" + layout
        return struct.unpack(layout, self._take(struct.calcsize(layout)))

    def text(self):
        (size,) = self.unpack("I")
        try:
            return bytes(self._take(size)).decode("utf-8")
        except UnicodeDecodeError as error:
            raise StateError(f"a text in the state is not UTF-8: {error}") from None

    def doubles(self, shape):
        return self._array(shape, "<f8", np.float64)

    def integers(self, shape):
        return self._array(shape, "<i8", np.int64)

    def whole(self, size):
        """An integer in two's complement."""
        return int.from_bytes(self._take(size), "little", signed=True)

    def _array(self, shape, layout, dtype):
        count = 1
        for length in shape:
            count *= int(length)
        data = self._take(8 * count)
        return np.frombuffer(data, dtype=layout).astype(dtype).reshape(shape)

    def finish(self):
        if self._place != len(self._data):
            raise StateError(f"{len(self._data) - self._place} bytes too many in the state")


def encode(kind, flags, payload):
    """The frame around a payload."""
    body = _HEAD.pack(MAGIC, VERSION, kind, flags, len(payload)) + payload
    return body + _CHECK.pack(zlib.crc32(body))


def decode(data, expected=None):
    """The object whose frame this is.

    Parameters
    ----------
    data : bytes, bytearray or memoryview
    expected : type, optional
        The class the object must be of.

    Raises
    ------
    StateError
        The bytes are cut, changed, foreign, of a later version, or not of the class expected.
    TypeError
        ``data`` is not bytes.
    """
    if not isinstance(data, (bytes, bytearray, memoryview)):
        raise TypeError(f"a state is bytes, got {type(data).__name__}")
    data = bytes(data)
    if len(data) < _HEAD.size + _CHECK.size:
        raise StateError(f"no state: {len(data)} bytes, the shortest has {_HEAD.size + 4}")
    magic, version, kind, flags, size = _HEAD.unpack_from(data)
    if magic != MAGIC:
        raise StateError(f"no state of this package: it begins with {magic!r}, not {MAGIC!r}")
    if version != VERSION:
        raise StateError(
            f"state has format version {version}, this release reads {VERSION}; update the package"
        )
    if size != len(data) - _HEAD.size - _CHECK.size:
        raise StateError(
            f"state is cut or too long: its head says {size} bytes of payload, "
            f"{len(data) - _HEAD.size - _CHECK.size} are there"
        )
    if _CHECK.unpack_from(data, len(data) - _CHECK.size)[0] != zlib.crc32(data[: -_CHECK.size]):
        raise StateError("state has been changed: its checksum does not fit")
    cls = _KINDS.get(kind)
    if cls is None:
        raise StateError(f"state is of kind {kind}, which this release does not know")
    if expected is not None and not issubclass(cls, expected):
        raise StateError(f"state holds {cls.__name__}, expected {expected.__name__}")
    if flags & ~CONTINUED:
        raise StateError(f"state has flags {flags:#x}, which this release does not know")
    reader = Reader(data[_HEAD.size : -_CHECK.size])
    with np.errstate(all="ignore"):
        restored = cls._from_payload(reader, flags)
        reader.finish()
        # A state has one form.  What reads back otherwise was not written by this package.
        if restored.to_bytes(resume=bool(flags & CONTINUED)) != data:
            raise StateError("state is not consistent in itself")
    return restored
