"""One comparison for numbers that are known exactly, in units of the last place."""

import math
from fractions import Fraction

import numpy as np

_LARGEST = Fraction(float.fromhex("0x1.fffffffffffffp1023"))
_LEAST = Fraction(1, 2**1074)


def assert_close(got, exact, *, ulps, relative_to=None, label, inputs=None):
    """``got`` is within ``ulps`` units of the last place of the exact value.

    Parameters
    ----------
    got : number or array
        Doubles, or what becomes doubles.
    exact : Fraction, int, float, str ("1.5e-300", "1/3", "undefined"), mpmath number; or many
        Taken for what it is to the last digit.  "undefined" or nan: ``got`` must be nan.  Exactly
        0 without ``relative_to``: ``got`` must be 0.  Beyond the range of doubles: ``got`` must be
        the infinity of that sign.
    ulps : number
        Most units allowed.  A unit is that of a double of the size of ``relative_to``.
    relative_to : like ``exact``, optional
        What the unit is taken from where the exact value itself is too small for it (sums of
        cancelling terms); the exact value if not given.
    label : str
        What is compared, for the message.
    inputs : object, optional
        What it was computed from, for the message.
    """
    ours, wanted = _listed(got), _listed(exact)
    if len(wanted) == 1:
        wanted = wanted * len(ours)
    assert len(ours) == len(wanted), f"{label}: {len(ours)} values came, {len(wanted)} were wanted"
    sizes = [None] if relative_to is None else _listed(relative_to)
    if len(sizes) == 1:
        sizes = sizes * len(ours)
    assert len(sizes) == len(ours), f"{label}: {len(sizes)} sizes for {len(ours)} values"
    errors = [
        _error(float(x), _rational(y), None if s is None else _rational(s))
        for x, y, s in zip(ours, wanted, sizes, strict=True)
    ]
    # nan, where one side alone is defined, is the worst error there is.
    worst = max(range(len(errors)), key=lambda i: (not math.isfinite(errors[i]), errors[i]))
    failing = sum(not error <= ulps for error in errors)
    assert failing == 0, _message(label, inputs, ours, wanted, errors, worst, failing, ulps)


def unit_of_last_place(size):
    """The distance of neighbouring doubles of this size, exactly, whatever its exponent."""
    size = abs(_rational(size))
    if size == 0:
        return _LEAST
    exponent = size.numerator.bit_length() - size.denominator.bit_length()
    power = Fraction(2) ** exponent
    if size < power:
        power /= 2
    return max(power / 2**52, _LEAST)


def _error(got, exact, size):
    if exact is None:
        return 0.0 if math.isnan(got) else math.inf
    if math.isnan(got):
        return math.inf
    if math.isinf(got):
        beyond = exact > _LARGEST if got > 0 else exact < -_LARGEST
        return 0.0 if beyond else math.inf
    if size is None and exact == 0:
        return 0.0 if got == 0.0 else math.inf
    unit = unit_of_last_place(exact if size is None else size)
    return float(abs(Fraction(got) - exact) / unit)


def _rational(value):
    """The exact rational a number stands for; None for what is undefined."""
    if isinstance(value, str):
        return None if value in ("undefined", "nan") else Fraction(value)
    if isinstance(value, Fraction):
        return value
    if hasattr(value, "man") and hasattr(value, "exp"):
        man = -int(value.man) if value < 0 else int(value.man)  # mpmath keeps the sign apart
        return Fraction(man) * Fraction(2) ** int(value.exp)
    if isinstance(value, float | np.floating) and math.isnan(value):
        return None
    return Fraction(int(value)) if isinstance(value, int | np.integer) else Fraction(float(value))


def _listed(values):
    if isinstance(values, np.ndarray):
        return values.reshape(-1).tolist()
    return list(values) if isinstance(values, list | tuple) else [values]


def _message(label, inputs, ours, wanted, errors, worst, failing, ulps):
    lines = [
        f"{label}: worst error {errors[worst]:.4g} units of the last place, {ulps} allowed",
        f"  got    {float(ours[worst])!r}",
        f"  wanted {_shown(wanted[worst])}",
    ]
    if len(ours) > 1:
        lines.append(f"  at {worst} of {len(ours)}; {failing} fail")
    if inputs is not None:
        lines.append(f"  inputs {str(inputs)[:400]}")
    return "\n".join(lines)


def _shown(value):
    exact = _rational(value)
    if exact is None:
        return "nan"
    try:
        return f"{float(exact)!r} (rounded)"
    except OverflowError:
        return str(value)[:80]
