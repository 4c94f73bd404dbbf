"""Tail probabilities in 40 digits, by other routes than the service takes."""

from __future__ import annotations

import mpmath as mp

mp.mp.dps = 40


def two_sided_t_log10(t: float, dof: float) -> float:
    """Return log10 of the two-sided tail by integrating Student's density, scaled by its value at t."""
    t, nu = mp.mpf(t), mp.mpf(dof)

    def relative_density(s: mp.mpf) -> mp.mpf:
        return mp.exp((nu + 1) / 2 * (mp.log1p(t * t / nu) - mp.log1p(s * s / nu)))

    # The density falls by e over about this width, so the panels follow it.
    width = min(1 / t, 1) * (1 + t * t / nu)
    panels = [t + width * k for k in range(0, 80, 2)] + ([mp.inf] if nu < 1000 else [])
    constant = mp.loggamma((nu + 1) / 2) - mp.loggamma(nu / 2) - mp.log(nu * mp.pi) / 2
    logarithm = constant + mp.log(2 * mp.quad(relative_density, panels)) - (nu + 1) / 2 * mp.log1p(t * t / nu)
    return float(logarithm / mp.log(10))


def noncentral_chi_square(x: float, dof: float, noncentrality: float, *, upper: bool) -> float:
    """Return a tail of the noncentral chi-square law by its density, a Bessel function, integrated."""
    d, lam = mp.mpf(dof), mp.mpf(noncentrality)

    def density(y: mp.mpf) -> mp.mpf:
        bessel = mp.besseli(d / 2 - 1, mp.sqrt(lam * y))
        return mp.exp(-(y + lam) / 2) * (y / lam) ** (d / 4 - mp.mpf("0.5")) * bessel / 2

    if not upper:
        return float(mp.quad(density, mp.linspace(0, x, 9)))
    step = 4 * mp.sqrt(2 * (d + 2 * lam)) / 4
    return float(mp.quad(density, [x + step * k for k in range(40)]))


def noncentral_f(x: float, dof1: float, dof2: float, noncentrality: float, *, upper: bool) -> float:
    """Return a tail of the noncentral F law by its Poisson mixture in 40 digits."""
    a, b, half = mp.mpf(dof1) / 2, mp.mpf(dof2) / 2, mp.mpf(noncentrality) / 2
    share = mp.mpf(dof1) * x / (mp.mpf(dof1) * x + dof2)
    total, j = mp.mpf(0), 0
    while True:
        weight = mp.exp(-half + j * mp.log(half) - mp.loggamma(j + 1))
        ends = (share, 1) if upper else (0, share)
        term = weight * mp.betainc(a + j, b, *ends, regularized=True)
        total, j = total + term, j + 1
        if j > 2 * half + 20 and term < total * mp.mpf(10) ** -25:
            return float(total)
