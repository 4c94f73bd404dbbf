"""Array types and the one way in: finite float64, read-only."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

Vector = npt.NDArray[np.float64]
Matrix = npt.NDArray[np.float64]


def squared_lengths(rows: Matrix) -> Vector:
    """Return the squared length of each row, shape (n,) from (n, p)."""
    return np.asarray(np.add.reduce(rows * rows, axis=1))


def frozen(values: npt.ArrayLike) -> npt.NDArray[np.float64]:
    """Return a read-only float64 copy, with -0.0 made 0.0.

    Parameters
    ----------
    values : array_like
        Numbers of any shape.  Integers are turned into floats here, once, so
        that nothing later computes in the type of its input.

    Returns
    -------
    ndarray of float64
        A copy that refuses assignment.
    """
    # One layout, whatever the input's: linear algebra gives the same bits for the same numbers.
    array = np.array(values, dtype=np.float64, order="C") + 0.0
    array.setflags(write=False)
    return array
