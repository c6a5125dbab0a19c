"""What can go wrong, by name."""


class MomentstreamError(Exception):
    """Base of every error this package defines."""


class MergeError(MomentstreamError, ValueError):
    """Two accumulators cannot be combined, or a part is not in the whole it is taken from."""


class StateError(MomentstreamError, ValueError):
    """Bytes that are no state: cut, changed, foreign, or of a later version."""


class NonFiniteError(MomentstreamError, ValueError):
    """A reading that is not finite, where ``nonfinite="raise"``.

    Attributes
    ----------
    position : int or tuple of int
        Where it stood in the call: the flat index, or (row, column) for channels.
    """

    def __init__(self, message: str, position: int | tuple[int, ...]) -> None:
        super().__init__(message)
        self.position = position

    def __reduce__(self):
        return type(self), (self.args[0], self.position)


class OrderError(MomentstreamError, ValueError):
    """A statistic needs a higher order than is kept."""
