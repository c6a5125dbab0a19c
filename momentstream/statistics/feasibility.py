"""May these be the moments of anything?  The inequalities every law's moments obey.

The Hankel matrix of the moments must have no negative eigenvalue (Hamburger 1920, on the real
line); the first of them in words are variance >= 0 and kurtosis >= skewness**2 + 1 (Pearson 1916).
"""

import numpy as np

# Rounding breaks an inequality that holds with equality, by some units of the last place.
_ALLOWANCE = 256 * 2.0**-52


def _standardized(central):
    """Central moments in units of the standard deviation; powers of two keep them in range."""
    units = int(np.frexp(central[2])[1]) // 2
    scaled = [float(np.ldexp(m, -k * units)) for k, m in enumerate(central)]
    deviation = np.sqrt(scaled[2])
    return [np.float64(m) / deviation**k for k, m in enumerate(scaled)]


def violated(central):
    """The first inequality that central moments of order 0 .. p break, in words, or None."""
    for k in range(2, len(central), 2):
        if central[k] < 0.0:
            name = "variance" if k == 2 else f"central moment {k}"
            return f"{name} >= 0 (it is {central[k]:.6g})"
    if len(central) <= 2:
        return None
    if central[2] == 0.0:
        for k in range(3, len(central)):
            if central[k] != 0.0:
                return f"central moment {k} = 0 where the variance is 0 (it is {central[k]:.6g})"
        return None
    with np.errstate(all="ignore"):
        moments = _standardized(central)
        if len(moments) > 4:
            skewness, kurtosis = moments[3], moments[4]
            least = skewness * skewness + 1.0
            if kurtosis < least * (1.0 - _ALLOWANCE):
                return (
                    "kurtosis >= skewness**2 + 1 (kurtosis with the normal law's 3 in it is "
                    f"{kurtosis:.6g}, skewness**2 + 1 is {least:.6g})"
                )
        top = (len(moments) - 1) // 2
        hankel = np.array([[moments[i + j] for j in range(top + 1)] for i in range(top + 1)])
    if top > 2 and np.all(np.isfinite(hankel)):
        values = np.linalg.eigvalsh(hankel)
        if values[0] < -_ALLOWANCE * values[-1]:
            return (
                f"the Hankel matrix of the standardized moments to order {2 * top} has no negative "
                f"eigenvalue (its least is {values[0]:.6g})"
            )
    return None
