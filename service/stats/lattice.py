"""Fixed points that fill the unit cube evenly: shifted copies of one rank-1 lattice.

References
----------
.. [1] D. Nuyens and R. Cools, "Fast algorithms for component-by-component
   construction of rank-1 lattice rules in shift-invariant reproducing kernel
   Hilbert spaces", Mathematics of Computation 75 (2006) 903-920.
.. [2] F. J. Hickernell, "Obtaining O(N^(-2+eps)) convergence for lattice quadrature
   rules", in Monte Carlo and Quasi-Monte Carlo Methods 2000, Springer 2002: the tent.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
import numpy.typing as npt

from service.stats.randomisation import uniforms, word_source

POINTS = 4093
"""Points of a lattice, a prime."""

SHIFTS = 12
"""Copies of the lattice, each with its own shift."""

_PRIMITIVE_ROOT = 2


@lru_cache(maxsize=16)
def shifted_lattices(dimension: int) -> npt.NDArray[np.float64]:
    """Return shifted copies of a lattice, folded into a tent, shape (SHIFTS, dimension, POINTS).

    Parameters
    ----------
    dimension : int
        Of the cube.

    Returns
    -------
    ndarray
        Read-only; the shifts are counter-based, so the points never change.
    """
    generator = np.array(generating_vector(dimension), dtype=np.int64)
    lattice = (generator[:, None] * np.arange(POINTS) % POINTS) / POINTS
    shifts = uniforms(word_source(f"lattice:{dimension}").random_raw(SHIFTS * dimension))
    shifted = (lattice + shifts.reshape(SHIFTS, dimension, 1)) % 1.0
    folded = np.abs(2.0 * shifted - 1.0)
    folded.setflags(write=False)
    return folded


def generating_vector(dimension: int) -> list[int]:
    """Return the lattice's generating vector, each component the best beside those before it.

    The criterion is the worst-case error in a space of periodic functions with one
    square-integrable derivative, where coordinate s has weight ``1/s^2``.  A component
    used before, or its mirror image, would line two coordinates up and is left out.

    Parameters
    ----------
    dimension : int
        Below POINTS/2.
    """
    # In the order of powers of a primitive root the sums over points are circular convolutions.
    powers = np.array([pow(_PRIMITIVE_ROOT, i, POINTS) for i in range(POINTS - 1)])
    kernel = 2 * np.pi**2 * ((powers / POINTS) ** 2 - powers / POINTS + 1 / 6)
    transform = np.fft.rfft(kernel)
    product, allowed = np.ones(POINTS - 1), powers <= POINTS // 2
    chosen: list[int] = []
    for s in range(dimension):
        errors = np.fft.irfft(np.fft.rfft(product) * transform, POINTS - 1)
        i = int(np.argmin(np.where(allowed, errors, np.inf))) if s else 0
        chosen.append(int(powers[i]))
        allowed[i] = False
        product *= 1.0 + kernel[(i - np.arange(POINTS - 1)) % (POINTS - 1)] / (s + 1) ** 2
    return chosen
