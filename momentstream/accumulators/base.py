"""What every accumulator shares: operators, copying, bytes, pickling."""

from ..codec import CONTINUED, Writer, decode, encode
from ..errors import MergeError


class Accumulator:
    """Base of the accumulators.

    A subclass has ``merge``, ``copy`` and ``clear``, and for its bytes ``_write(writer, resume)``
    and the class method ``_from_payload(reader, flags)``; ``codec.register`` gives it its kind.
    """

    __slots__ = ()
    _kind: int

    def __add__(self, other):
        if not isinstance(other, Accumulator):
            return NotImplemented
        return self.copy().merge(other)

    def __radd__(self, other):
        # sum() begins with 0.
        if isinstance(other, int) and other == 0:
            return self.copy()
        return NotImplemented

    def __copy__(self):
        return self.copy()

    def __deepcopy__(self, memo):
        return self.copy()

    def __eq__(self, other):
        if type(other) is not type(self):
            return NotImplemented
        return self.to_bytes() == other.to_bytes()

    __hash__ = None  # type: ignore[assignment]

    def __reduce__(self):
        return type(self).from_bytes, (self.to_bytes(),)

    def to_bytes(self, resume=False):
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
    def from_bytes(cls, data):
        """The accumulator whose bytes these are, of either form.

        Raises
        ------
        StateError
            The bytes are no state of this class; hostile bytes run no code and claim no memory.
        """
        return decode(data, cls)

    def tap(self, iterable):
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
