"""Six robust first guesses of a covariance, none of them random.

Each guess is a matrix whose eigenvectors give the axes; scales along the axes
and the centre are then found robustly.  All functions take many batches at once.

References
----------
.. [1] M. Hubert, P. J. Rousseeuw and T. Verdonck, "A deterministic algorithm for
   robust location and scatter", Journal of Computational and Graphical
   Statistics 21 (2012) 618-637, section 3.
.. [2] P. J. Rousseeuw and C. Croux, "Alternatives to the median absolute
   deviation", JASA 88 (1993) 1273-1283: the scale Qn.
.. [3] R. A. Maronna and R. H. Zamar, "Robust estimates of location and dispersion
   for high-dimensional datasets", Technometrics 44 (2002) 307-317.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
import numpy.typing as npt
from scipy import special

from service.stats.arrays import Matrix, Vector

MOST_UNITS_FOR_QN = 1000
"""Qn compares all pairs of units; beyond this many the median absolute deviation takes its place."""

_QN_CONSTANT = 2.21914
_MAD_CONSTANT = 1.482602218505602
_FEWEST_PAIRS_AT_ONCE = 1 << 22


@lru_cache(maxsize=64)
def _pairs(n: int) -> tuple[npt.NDArray[np.intp], npt.NDArray[np.intp]]:
    first, second = np.triu_indices(n, 1)
    return first, second


def robust_scale(columns: Matrix) -> Vector:
    """Return the scale Qn of each column [2]_, or its median absolute deviation beyond 1,000 units.

    Parameters
    ----------
    columns : ndarray, shape (..., n, q)
        Any numbers; a column with more than half its values alike has scale 0.

    Returns
    -------
    ndarray, shape (..., q)
        Consistent for the standard deviation of a normal law.
    """
    n = columns.shape[-2]
    if n > MOST_UNITS_FOR_QN:
        centred = np.abs(columns - np.median(columns, axis=-2, keepdims=True))
        return np.asarray(_MAD_CONSTANT * np.median(centred, axis=-2))
    rows = np.ascontiguousarray(np.moveaxis(columns, -2, -1)).reshape(-1, n)
    first, second = _pairs(n)
    half = n // 2 + 1
    order = half * (half - 1) // 2 - 1
    step = max(1, _FEWEST_PAIRS_AT_ONCE // first.size)
    scales = [
        np.partition(np.abs(part[:, first] - part[:, second]), order, axis=1)[:, order]
        for part in np.split(rows, range(step, rows.shape[0], step))
    ]
    return np.asarray(_QN_CONSTANT * np.concatenate(scales).reshape(columns.shape[:-2] + columns.shape[-1:]))


def six_guesses(z: Matrix) -> Matrix:
    """Return six guesses of the shape of each batch's covariance.

    Parameters
    ----------
    z : ndarray, shape (b, n, p)
        Columns with median 0 and robust scale 1.

    Returns
    -------
    ndarray, shape (b, 6, p, p)
        In the order of [1]_: hyperbolic tangent, Spearman, normal scores, spatial sign,
        the half nearest the centre, pairwise robust covariance [3]_.
    """
    n = z.shape[1]
    ranks = average_ranks(z)
    lengths = np.sqrt(np.einsum("bij,bij->bi", z, z))
    signs = z / np.where(lengths > 0, lengths, 1.0)[:, :, None]
    nearest = np.argpartition(lengths, (n + 1) // 2 - 1, axis=1)[:, : (n + 1) // 2]
    guesses = (
        _correlation(np.tanh(z)),
        _correlation(ranks),
        _correlation(special.ndtri((ranks - 1 / 3) / (n + 1 / 3))),
        signs.transpose(0, 2, 1) @ signs / n,
        _covariance(np.take_along_axis(z, nearest[:, :, None], axis=1)),
        _pairwise(z),
    )
    return np.stack(guesses, axis=1)


def average_ranks(values: Matrix) -> Matrix:
    """Return ranks from 1 within each column, equal values sharing the mean of theirs; shape (b, n, p)."""
    n = values.shape[1]
    order = np.argsort(values, axis=1, kind="stable")
    ordered = np.take_along_axis(values, order, axis=1)
    places = np.broadcast_to(np.arange(n)[None, :, None], values.shape)
    new = np.ones(values.shape, dtype=bool)
    new[:, 1:] = ordered[:, 1:] != ordered[:, :-1]
    first = np.maximum.accumulate(np.where(new, places, 0), axis=1)
    last = np.roll(new, -1, axis=1)
    last[:, -1] = True
    end = np.minimum.accumulate(np.where(last, places, n)[:, ::-1], axis=1)[:, ::-1]
    ranks = np.empty(values.shape)
    np.put_along_axis(ranks, order, (first + end) / 2 + 1, axis=1)
    return ranks


def _covariance(rows: Matrix) -> Matrix:
    centred = rows - rows.mean(axis=1, keepdims=True)
    return np.asarray(centred.transpose(0, 2, 1) @ centred / rows.shape[1])


def _correlation(rows: Matrix) -> Matrix:
    covariance = _covariance(rows)
    scale = np.sqrt(np.einsum("bii->bi", covariance))
    return np.asarray(covariance / scale[:, :, None] / scale[:, None, :])


def _pairwise(z: Matrix) -> Matrix:
    """Return the covariances ``(Qn(x + y)^2 - Qn(x - y)^2)/4`` of all pairs, and 1 on the diagonal."""
    p = z.shape[2]
    first, second = _pairs(p)
    both = np.concatenate([z[:, :, first] + z[:, :, second], z[:, :, first] - z[:, :, second]], axis=2)
    squared = np.square(robust_scale(both))
    result = np.zeros((z.shape[0], p, p))
    result[:, first, second] = (squared[:, : first.size] - squared[:, first.size :]) / 4
    return result + result.transpose(0, 2, 1) + np.eye(p)


def squared_distances_from(z: Matrix, guesses: Matrix) -> Matrix:
    """Return how far each unit lies from the robust centre that a guess gives, shape (b, 6, n).

    Parameters
    ----------
    z : ndarray, shape (b, n, p)
        Standardised batches.
    guesses : ndarray, shape (b, 6, p, p)
        Symmetric matrices.

    Returns
    -------
    ndarray, shape (b, 6, n)
        Squared distances with the scales along the eigenvectors measured robustly, infinite
        scales' worth where a scale is 0.
    """
    axes = np.linalg.eigh(guesses)[1]
    along = z[:, None] @ axes
    scales = robust_scale(along)[:, :, None, :]
    along /= np.where(scales > 0, scales, np.finfo(np.float64).tiny ** 0.25)
    # The coordinatewise median of the sphered data, turned back to the axes of z.
    sphered = along @ axes.transpose(0, 1, 3, 2)
    centre = np.median(sphered, axis=2, keepdims=True) @ axes
    return np.asarray(np.square(along - centre).sum(axis=3))
