"""Rebuild ``mpmath_tails_location.toml``: upper tails of the chi-square and F laws in 50 digits.

Run from the root of the project: ``python -m tests.reference.make_tails > tests/reference/mpmath_tails_location.toml``.
It takes a minute, mostly for the F law, whose tail is the integral of its
density over the logarithm of the argument; the service takes neither this way
nor that of mpmath's incomplete gamma function.
"""

from __future__ import annotations

import itertools
import sys
from typing import NamedTuple

import mpmath as mp

DIGITS = 50
CHI_SQUARE_DOF = (0.5, 1, 2, 3, 5, 10, 55, 1000, 1e4)
CHI_SQUARE_SHARES = (1e-4, 0.01, 0.5, 0.9, 1, 1.1, 2, 4, 10, 30)
CHI_SQUARE_FAR = (80, 1300, 1330, 1400, 3000, 1e4, 1e5, 461000)
F_DOF = ((1, 1), (2, 5), (3, 17), (5, 25), (5.5, 23.7), (20, 4), (50, 50), (50, 1000), (5, 1e5), (3, 1e9))
F_ARGUMENTS = (1e-6, 0.01, 0.5, 1, 1.5, 4, 20, 66.7, 250, 1e3, 1e5, 1e12, 1e60, 1e250)


class Point(NamedTuple):
    """An upper tail: the probability (0 where a float cannot hold it) and its decimal logarithm."""

    p_value: float
    log10_p_value: float


def _point(upper: mp.mpf, lower: mp.mpf) -> Point:
    log10 = mp.log10(upper) if upper < lower else mp.log1p(-lower) / mp.log(10)
    return Point(float(upper), float(log10))


def chi_square(x: float, dof: float) -> Point:
    """Return P(chi-square > x) from mpmath's incomplete gamma function."""
    a, half = mp.mpf(dof) / 2, mp.mpf(x) / 2
    return _point(mp.gammainc(a, half, mp.inf, regularized=True), mp.gammainc(a, 0, half, regularized=True))


def f(x: float, dof1: float, dof2: float) -> Point:
    """Return P(F > x) by integrating the density of ln F away from its mode."""
    b, a = mp.mpf(dof1) / 2, mp.mpf(dof2) / 2
    start = mp.log(b * mp.mpf(x) / a)
    constant = mp.loggamma(a + b) - mp.loggamma(a) - mp.loggamma(b)

    def log_density(s: mp.mpf) -> mp.mpf:
        return constant + b * s - (a + b) * mp.log1p(mp.exp(s))

    share = mp.exp(start) / (1 + mp.exp(start))
    slope = b - (a + b) * share
    side = 1 if slope < 0 else -1
    # The density of ln F is log-concave: it falls by e at least within this width.
    width = 1 / (abs(slope) + mp.sqrt((a + b) * share * (1 - share) / 8))
    height = log_density(start)
    ends = [start + side * width * k for k in itertools.chain(range(0, 40, 2), range(40, 600, 20))]
    area = mp.quad(lambda s: mp.exp(log_density(s) - height), ends)
    tail = mp.exp(height + mp.log(abs(area)))
    return _point(tail, 1 - tail) if side > 0 else _point(1 - tail, tail)


def _case(name: str, calculation: str, points: list[tuple[float, ...]], tails: list[Point]) -> str:
    rows = "\n".join(f"  {[float(value) for value in point]}," for point in points)
    return f"""
[[case]]
id = "{name}"
page = "computed in {DIGITS} digits by make_tails.py"
read_in = "computed with mpmath {mp.__version__}"
tier = "recomputed"
calculation = "{calculation}"
[case.inputs]
points = [
{rows}
]
[case.recomputed]
p_value = {[tail.p_value for tail in tails]}
log10_p_value = {[tail.log10_p_value for tail in tails]}
"""


def main() -> None:
    """Write the tables to standard output."""
    mp.mp.dps = DIGITS
    far = itertools.product(CHI_SQUARE_FAR, CHI_SQUARE_DOF)
    near = ((share * dof, dof) for share, dof in itertools.product(CHI_SQUARE_SHARES, CHI_SQUARE_DOF))
    chi_squares: list[tuple[float, ...]] = [*near, *far]
    fs: list[tuple[float, ...]] = [(x, *dof) for dof, x in itertools.product(F_DOF, F_ARGUMENTS)]
    text = (
        f'text = "Upper tails of the chi-square and F laws, computed with mpmath in {DIGITS} digits (make_tails.py)"\n'
    )
    text += _case("grid-chi2", "grid_of_chi_square_tails", chi_squares, [chi_square(*point) for point in chi_squares])
    text += _case("grid-f", "grid_of_f_tails", fs, [f(*point) for point in fs])
    sys.stdout.write(text)


if __name__ == "__main__":
    main()
