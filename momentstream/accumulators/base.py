"""What every accumulator shares: operators, copying, bytes, pickling."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, TypeVar

from ..codec import CONTINUED, Writer, decode, encode
from ..errors import MergeError

if TYPE_CHECKING:
    from collections.abc import Iterable, Iterator
    from typing import Self

Item = TypeVar("Item")


class Accumulator:
    """Base of the accumulators.

    A subclass has ``merge``, ``copy`` and ``clear``, and for its bytes ``_write(writer, resume)``
    and the class method ``_from_payload(reader, flags)``; ``codec.register`` gives it its kind.
    """

    __slots__ = ()
    _kind: int

    if TYPE_CHECKING:

        def copy(self) -> Self: ...
        def merge(self, other: Self) -> Self: ...
        def update(self, values: Any) -> Self: ...
        def _write(self, writer: Writer, resume: bool) -> None: ...

    def __add__(self, other: Self) -> Self:
        if not isinstance(other, Accumulator):
            return NotImplemented
        return self.copy().merge(other)

    def __radd__(self, other: int) -> Self:
        # sum() begins with 0.
        if isinstance(other, int) and other == 0:
            return self.copy()
        return NotImplemented

    def __copy__(self) -> Self:
        return self.copy()

    def __deepcopy__(self, memo: object) -> Self:
        return self.copy()

    def __eq__(self, other: object) -> bool:
        if type(other) is not type(self):
            return NotImplemented
        return self.to_bytes() == other.to_bytes()

    __hash__ = None  # type: ignore[assignment]

    def __reduce__(self):
        return type(self).from_bytes, (self.to_bytes(),)

    def to_bytes(self, resume: bool = False) -> bytes:
        """The state as bytes.

        Parameters
        ----------
        resume : bool, default False
            False: the settled state, small; to be read and combined.  True: the whole working
            state, which continues bit for bit as if it had never stopped.

        Returns
        -------
        bytes
        """
        writer = Writer()
        self._write(writer, bool(resume))
        return encode(self._kind, CONTINUED if resume else 0, writer.payload())

    @classmethod
    def from_bytes(cls, data: bytes | bytearray | memoryview) -> Self:
        """The accumulator whose bytes these are, of either form.

        Raises
        ------
        StateError
            The bytes are no state of this class; hostile bytes run no code and claim no memory.
        """
        return decode(data, cls)

    def tap(self, iterable: Iterable[Item]) -> Iterator[Item]:
        """Count each item, then yield it unchanged.

        Parameters
        ----------
        iterable : iterable of numbers or arrays

        Yields
        ------
        object
            The items, as they came.

        Examples
        --------
        >>> import momentstream as ms
        >>> level = ms.Moments()
        >>> max(level.tap([3.0, 4.0, 8.0])), level.mean()
        (8.0, 5.0)
        """
        for item in iterable:
            self.update(item)
            yield item

    def _same_type(self, other):
        if type(other) is not type(self):
            raise MergeError(
                f"{type(self).__name__} merges with {type(self).__name__}, "
                f"got {type(other).__name__}; nothing was changed"
            )
