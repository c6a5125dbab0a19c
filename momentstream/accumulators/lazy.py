"""Kernels on first use: importing the package must not import a compiler."""

from importlib import import_module


class _Lazy:
    """A module whose names arrive when the first is asked for."""

    def __init__(self, name):
        self._name = name

    def __getattr__(self, attribute):
        self.__dict__.update(vars(import_module(self._name)))
        try:
            return self.__dict__[attribute]
        except KeyError:
            raise AttributeError(attribute) from None


blocks = _Lazy("momentstream.kernels.blocks")
channels = _Lazy("momentstream.kernels.channels")
vector = _Lazy("momentstream.kernels.vector")
transforms = _Lazy("momentstream.kernels.transforms")
exact = _Lazy("momentstream.kernels.exact")
joint = _Lazy("momentstream.kernels.joint")
