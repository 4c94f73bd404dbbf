"""Minimum covariance determinant: the h units that lie closest together.

References
----------
.. [1] M. Hubert, P. J. Rousseeuw and T. Verdonck, "A deterministic algorithm for
   robust location and scatter", Journal of Computational and Graphical
   Statistics 21 (2012) 618-637.
.. [2] P. J. Rousseeuw and K. Van Driessen, "A fast algorithm for the minimum
   covariance determinant estimator", Technometrics 41 (1999) 212-223, theorem 1:
   the concentration step.
.. [3] D. M. Hawkins, "The feasible solution algorithm for the minimum covariance
   determinant estimator in multivariate data", Computational Statistics and Data
   Analysis 17 (1994) 197-210: the exchange of two units.
"""

from __future__ import annotations

import itertools
import math
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from service.stats.arrays import Matrix, Vector
from service.stats.starts import six_guesses, squared_distances_from

Indices = npt.NDArray[np.intp]

MOST_SUBSETS = 100_000
"""Up to this many subsets of h units all are tried."""

_CHUNK = 1 << 14
_MOST_STEPS = 100
# A determinant that falls by less than this share is the same determinant.
_SAME = 1e-10


class Subsets(NamedTuple):
    """Subsets of h units with the moments that they give.

    Parameters
    ----------
    members : ndarray of int, shape (m, h)
        Units of each subset, ascending.
    centre : ndarray, shape (m, p)
        Their mean.
    scatter : ndarray, shape (m, p, p)
        Their covariance, divisor h.
    log_determinant : ndarray, shape (m,)
        Of `scatter`; minus infinity where it is singular.
    """

    members: Indices
    centre: Matrix
    scatter: Matrix
    log_determinant: Vector

    def at(self, index: Indices | npt.NDArray[np.bool_]) -> Subsets:
        """Return some of the subsets."""
        return Subsets(self.members[index], self.centre[index], self.scatter[index], self.log_determinant[index])

    def put(self, index: Indices, others: Subsets) -> None:
        """Replace some of the subsets, in place."""
        for field, changed in zip(self, others, strict=True):
            field[index] = changed


def half(n: int, p: int) -> int:
    """Return ``h = floor((n + p + 1)/2)``, which withstands the most outlying units."""
    return (n + p + 1) // 2


def all_can_be_tried(n: int, p: int) -> bool:
    """Return whether `exhaustive` is quick: for one characteristic always."""
    return p == 1 or math.comb(n, half(n, p)) <= MOST_SUBSETS


def measure(z: Matrix, members: Indices) -> Subsets:
    """Return the moments of subsets.

    Parameters
    ----------
    z : ndarray, shape (m, n, p)
        A batch for each subset.
    members : ndarray of int, shape (m, h)
        Units of each subset.
    """
    rows = np.take_along_axis(z, members[:, :, None], axis=1)
    centre = rows.mean(axis=1)
    rows -= centre[:, None]
    scatter = rows.transpose(0, 2, 1) @ rows / members.shape[1]
    return Subsets(members, centre, scatter, np.linalg.slogdet(scatter)[1])


def distances(z: Matrix, subsets: Subsets) -> Matrix:
    """Return the squared distance of every unit under each subset's moments, shape (m, n)."""
    deviations = z - subsets.centre[:, None]
    return np.asarray(np.einsum("mnp,mnp->mn", deviations @ np.linalg.inv(subsets.scatter), deviations))


def nearest(squared: Matrix, h: int) -> Indices:
    """Return the h units of smallest squared distance, ascending, shape (m, h)."""
    return np.sort(np.argpartition(squared, h - 1, axis=1)[:, :h], axis=1)


def concentrate(z: Matrix, members: Indices) -> Subsets:
    """Replace each subset by the h units nearest to it until its determinant stands still [2]_.

    Parameters
    ----------
    z : ndarray, shape (m, n, p)
        A batch for each subset.
    members : ndarray of int, shape (m, h)
        Subsets to begin with.
    """
    now = measure(z, members)
    going = np.flatnonzero(np.isfinite(now.log_determinant))
    for _ in range(_MOST_STEPS):
        if not going.size:
            break
        part = now.at(going)
        after = measure(z[going], nearest(distances(z[going], part), members.shape[1]))
        now.put(going, after)
        falls = part.log_determinant - after.log_determinant > _SAME
        going = going[falls & np.isfinite(after.log_determinant)]
    return now


def exchange(z: Matrix, subsets: Subsets) -> Subsets:
    """Exchange a member for a unit outside while that lowers the determinant, then concentrate again [3]_.

    Concentration alone stops where no set of nearest units is better; a pair of
    exchanged units may still be.
    """
    now = subsets
    going = np.flatnonzero(np.isfinite(now.log_determinant))
    for _ in range(_MOST_STEPS):
        if not going.size:
            break
        part = now.at(going)
        after = concentrate(z[going], _best_exchange(z[going], part))
        better = part.log_determinant - after.log_determinant > _SAME
        going = going[better]
        now.put(going, after.at(better))
    return now


def _best_exchange(z: Matrix, subsets: Subsets) -> Indices:
    """Return each subset after the one exchange that gives the smallest determinant."""
    m, n, _ = z.shape
    h = subsets.members.shape[1]
    deviations = z - subsets.centre[:, None]
    # Gram matrix of the deviations in the metric of the scatter's sums of squares.
    gram = deviations @ np.linalg.inv(subsets.scatter) @ deviations.transpose(0, 2, 1) / h
    inside = np.zeros((m, n), dtype=bool)
    np.put_along_axis(inside, subsets.members, True, axis=1)
    own = np.einsum("mii->mi", gram)
    out = own[:, :, None]
    left = 1 - h / (h - 1) * out
    # Distance of the unit that comes in from the mean without the one that goes out.
    shifted = own[:, None, :] + 2 / (h - 1) * gram + out / (h - 1) ** 2
    across = gram + out / (h - 1)
    with np.errstate(divide="ignore", invalid="ignore"):
        came = shifted + h / (h - 1) * np.square(across) / left
        ratio = left * (1 + (h - 1) / h * came)
    ratio[~(inside[:, :, None] & ~inside[:, None, :])] = math.inf
    out_in = np.nanargmin(ratio.reshape(m, -1), axis=1)
    every = np.arange(m)
    inside[every, out_in // n], inside[every, out_in % n] = False, True
    return np.nonzero(inside)[1].reshape(m, h)


def deterministic(z: Matrix, *, exchanging: bool = True) -> Subsets:
    """Return the best subset of each batch from six fixed beginnings [1]_.

    Parameters
    ----------
    z : ndarray, shape (b, n, p)
        Columns with median 0 and robust scale 1.
    exchanging : bool, optional
        Whether the best is improved by `exchange`; not part of [1]_.

    Returns
    -------
    Subsets
        One for each batch.
    """
    b, n, p = z.shape
    h = half(n, p)
    # The half nearest to each guess gives moments of full efficiency to begin with.
    first = squared_distances_from(z, six_guesses(z)).reshape(6 * b, n)
    repeated = np.repeat(z, 6, axis=0)
    refined = measure(repeated, nearest(first, (n + 1) // 2))
    sound = np.isfinite(refined.log_determinant)
    second = first.copy()
    second[sound] = distances(repeated[sound], refined.at(sound))
    found = concentrate(repeated, nearest(second, h))
    best = np.arange(b) * 6 + found.log_determinant.reshape(b, 6).argmin(axis=1)
    chosen = found.at(best)
    return exchange(z, chosen) if exchanging else chosen


def searched(z: Matrix) -> Subsets:
    """Return nearly always the best subset of each of many small batches, from n beginnings more.

    Parameters
    ----------
    z : ndarray, shape (b, n, p)
        Batches whose units stand in no particular order: runs of p + 2 units are the beginnings.
    """
    b, n, p = z.shape
    runs = (np.arange(n)[:, None] + np.arange(p + 2)) % n
    repeated = np.repeat(z, n, axis=0)
    first = measure(repeated, np.tile(runs, (b, 1)))
    found = exchange(repeated, concentrate(repeated, nearest(distances(repeated, first), half(n, p))))
    best = np.arange(b) * n + found.log_determinant.reshape(b, n).argmin(axis=1)
    chosen, others = found.at(best), deterministic(z)
    better = np.flatnonzero(others.log_determinant < chosen.log_determinant)
    chosen.put(better, others.at(better))
    return chosen


def exhaustive(z: Matrix) -> Subsets:
    """Return the best of all subsets of h units.

    Parameters
    ----------
    z : ndarray, shape (1, n, p)
        One batch, columns with median 0 and robust scale 1.
    """
    n, p = z.shape[1:]
    h = half(n, p)
    if p == 1:
        # The best subset of a single characteristic is h neighbours in order of size.
        order = np.argsort(z[0, :, 0], kind="stable")
        windows = np.sort(np.lib.stride_tricks.sliding_window_view(order, h), axis=1)
        every = measure(np.repeat(z, windows.shape[0], axis=0), windows)
        return every.at(np.array([every.log_determinant.argmin()]))
    # Sums of squares lose digits; the steps from the best of them are measured afresh.
    return concentrate(z, _best_of_all(z[0], h)[None])


def _best_of_all(z: Matrix, h: int) -> Indices:
    """Return the subset of smallest determinant, by sums of squares and products."""
    n, p = z.shape
    first, second = np.triu_indices(p)
    features = np.concatenate([z, z[:, first] * z[:, second]], axis=1)
    best, members = math.inf, np.arange(h)
    combinations = itertools.combinations(range(n), h)
    while block := list(itertools.islice(combinations, _CHUNK)):
        index = np.array(block)
        inside = np.zeros((len(block), n))
        np.put_along_axis(inside, index, 1.0, axis=1)
        determinants = _log_determinants(inside @ features / h, p)
        smallest = int(determinants.argmin())
        if determinants[smallest] < best:
            best, members = float(determinants[smallest]), index[smallest]
    return members


def _log_determinants(means: Matrix, p: int) -> Vector:
    first, second = np.triu_indices(p)
    scatter = np.empty((means.shape[0], p, p))
    scatter[:, first, second] = means[:, p:] - means[:, first] * means[:, second]
    scatter[:, second, first] = scatter[:, first, second]
    return np.asarray(np.linalg.slogdet(scatter)[1])
