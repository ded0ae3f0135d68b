"""How the physics takes its numbers: anything array-like in, floating arrays of one type out."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.floating[Any]]
BoolArray = NDArray[np.bool_]


def floats(*values: ArrayLike) -> tuple[FloatArray, ...]:
    """Turn the inputs into floating arrays of one common type.

    Parameters
    ----------
    *values : array_like
        Numbers, lists or arrays.

    Returns
    -------
    tuple of numpy.ndarray
        The inputs in order, float32 if every array among them is float32, else float64.

    Notes
    -----
    A bare Python number takes the type of the arrays beside it, so that a constant does not turn
    a large float32 batch into float64. Integers and numbers alone become float64.

    Examples
    --------
    >>> import numpy as np
    >>> range_m, speed = floats(np.ones(2, dtype=np.float32), 1500.0)
    >>> range_m.dtype.name, speed.dtype.name
    ('float32', 'float32')
    >>> floats(3)[0].dtype.name
    'float64'
    """
    arrays = [v if type(v) in (int, float) else np.asarray(v) for v in values]
    types = {a.dtype for a in arrays if isinstance(a, np.ndarray)}
    dtype = np.float32 if types == {np.dtype(np.float32)} else np.float64
    return tuple(np.asarray(a, dtype=dtype) for a in arrays)


def chosen(condition: Any, when_true: Any, when_false: Any) -> FloatArray:
    """Pick between two floating arrays without changing their type.

    Parameters
    ----------
    condition : array_like of bool
        Where to take the first.
    when_true, when_false : array_like
        Arrays that broadcast with the condition, or Python numbers.

    Returns
    -------
    numpy.ndarray
        As ``numpy.where``, and a scalar rather than a zero-dimensional array.

    Examples
    --------
    >>> float(chosen(True, 1.0, 2.0))
    1.0
    """
    if np.shape(when_true) and np.all(condition):
        # Nearly always so, and a pass over a large batch saved; but what is picked has the shape of all three.
        shape = np.broadcast_shapes(np.shape(condition), np.shape(when_true), np.shape(when_false))
        if shape == np.shape(when_true):
            return np.asarray(when_true)
    picked: FloatArray = np.where(condition, when_true, when_false)[()]
    return picked
