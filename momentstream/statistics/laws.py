"""The laws that need SciPy, imported when one is asked for."""


def chi_square_survival(value, degrees):
    """The chance of a chi-square variate above ``value``."""
    return float(_special().chdtrc(degrees, value))


def _special():
    try:
        import scipy.special
    except ImportError as error:
        raise ImportError(
            'this needs SciPy: install momentstream with its extra "stats"', name="scipy"
        ) from error
    return scipy.special
