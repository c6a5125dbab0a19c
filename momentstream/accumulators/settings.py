"""What accumulators are made with: each argument checked, with an error that names it."""

from math import prod

import numpy as np

from ..statistics.readout import checked_degree

_MOST_AXES, _MOST_CHANNELS = 32, 2**40


def checked_order(order, highest=16):
    if isinstance(order, bool) or not hasattr(order, "__index__"):
        raise TypeError(f"order must be an integer from 1 to {highest}, got {order!r}")
    order = order.__index__()
    if not 1 <= order <= highest:
        raise ValueError(f"order must be an integer from 1 to {highest}, got {order}")
    return order


def checked_shape(shape, names):
    if names is not None:
        if isinstance(names, str):
            raise TypeError(f"names must be a sequence of str, got the str {names!r}")
        if not hasattr(names, "__iter__"):
            raise TypeError(f"names must be a sequence of str, got {names!r}")
        names = tuple(names)
        for name in names:
            if not isinstance(name, str):
                raise TypeError(f"names must be str, got {name!r}")
            if not name.isprintable() and any("\ud800" <= c <= "\udfff" for c in name):
                raise ValueError(f"names must be whole characters, got {name!r}")
        if len(set(names)) != len(names):
            raise ValueError(f"names must differ from each other, got {names}")
    if isinstance(shape, (np.ndarray, bool)):
        raise TypeError(f"shape must be an integer or a tuple of integers, got {shape!r}")
    if hasattr(shape, "__index__"):
        shape = (shape,)
    if not isinstance(shape, (tuple, list)):
        raise TypeError(f"shape must be an integer or a tuple of integers, got {shape!r}")
    shape = tuple(checked_degree(length, 1, "shape") for length in shape)
    if len(shape) > _MOST_AXES or prod(shape) > _MOST_CHANNELS:
        raise ValueError(
            f"shape must have at most {_MOST_AXES} axes and {_MOST_CHANNELS} channels, got {shape}"
        )
    if names is not None:
        if shape and shape != (len(names),):
            raise ValueError(f"shape {shape} does not fit {len(names)} names")
        if not names:
            raise ValueError("names must name at least one channel")
        shape = (len(names),)
    return shape, names


def choice(name, value, choices):
    if not (value is None or isinstance(value, str)):
        raise TypeError(f"{name} must be one of {choices}, got {value!r}")
    if value not in choices:
        raise ValueError(f"{name} must be one of {choices}, got {value!r}")
    return value


def finite_array(name, value, shape=None):
    array = _number_array(name, value)
    if not np.all(np.isfinite(array)):
        raise ValueError(f"{name} must be finite, got {value!r}")
    if shape is not None and array.shape != shape:
        raise ValueError(f"{name} must have the shape of mean, {shape}, got {array.shape}")
    return array


def extreme_array(name, value, shape):
    """Extremes of moments computed elsewhere; nan where they are unknown."""
    array = _number_array(name, value)
    try:
        return np.broadcast_to(array, shape)
    except ValueError:
        raise ValueError(
            f"{name} must have the shape of mean, {shape}, got {array.shape}"
        ) from None


def _number_array(name, value):
    try:
        array = np.asarray(value)
        if array.dtype.kind not in "biuf":
            raise TypeError
        return array.astype(np.float64)
    except (TypeError, ValueError):
        raise TypeError(f"{name} must be a number or an array of numbers, got {value!r}") from None
