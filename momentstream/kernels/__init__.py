"""Compiled moment vectors, for a caller's own ``@njit`` loops.

====================================  ==========================================================
``new_vector(order)``                 an empty moment vector
``add_block(vector, readings)``       take an array of finite doubles in
``combine_vectors(a, b)``             ``a`` takes ``b`` in; ``b`` stays
``mean variance skewness kurtosis``   of a vector; population statistics, kurtosis in excess
``warm_up()``                         compile now, and fill the cache on disk
====================================  ==========================================================

A vector is a float64 array; what its entries mean is written down in ``kernels.vector``.  The
functions compile when they are first called; where a cache folder is writable, once a machine.

Examples
--------
>>> import numba, numpy as np
>>> from momentstream import kernels
>>> @numba.njit
... def spread_of_rows(rows):
...     whole = kernels.new_vector(4)
...     for i in range(rows.shape[0]):
...         part = kernels.new_vector(4)
...         kernels.add_block(part, rows[i])
...         kernels.combine_vectors(whole, part)
...     return kernels.mean(whole), kernels.variance(whole)
>>> spread_of_rows(np.array([[1.0, 2.0], [3.0, 10.0]]))
(4.0, 12.5)
"""

from .user import (
    add_block,
    combine_vectors,
    kurtosis,
    mean,
    new_vector,
    skewness,
    variance,
    warm_up,
)

__all__ = [
    "add_block",
    "combine_vectors",
    "kurtosis",
    "mean",
    "new_vector",
    "skewness",
    "variance",
    "warm_up",
]
