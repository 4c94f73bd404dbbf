"""Null law of a quadratic form in a mean difference, known and estimated covariance alike."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property, lru_cache

from service.errors import TooFewUnitsError
from service.stats import tails


@dataclass(frozen=True)
class QuadraticLaw:
    """Law of ``T2 = k d' Sigma^-1 d`` where the mean agrees with its target.

    With a known covariance ``T2`` is chi-square(p).  With one estimated on ``nu``
    degrees of freedom ``T2 (nu - p + 1)/(nu p)`` is F(p, nu - p + 1).

    Parameters
    ----------
    dimension : int
        Number p of characteristics in the form.
    degrees_of_freedom : float
        Degrees of freedom nu of the covariance, infinite where it is known.

    Raises
    ------
    TooFewUnitsError
        Where nu < p: the law does not exist.

    References
    ----------
    .. [1] T. W. Anderson, An Introduction to Multivariate Statistical Analysis,
       3rd ed., Wiley 2003, sections 3.3 and 5.2.
    .. [2] G. A. F. Seber, Multivariate Observations, Wiley 1984, section 2.4.
    """

    dimension: int
    degrees_of_freedom: float

    def __post_init__(self) -> None:
        """Refuse a law that does not exist."""
        if self.degrees_of_freedom < self.dimension:
            raise TooFewUnitsError(
                f"T-squared over {self.dimension} characteristics needs a covariance with at least "
                f"{self.dimension} degrees of freedom; this one has {self.degrees_of_freedom:g}. "
                "Measure more units, or use a specification with a reference covariance."
            )

    @cached_property
    def is_chi_square(self) -> bool:
        """Whether the covariance is known."""
        return math.isinf(self.degrees_of_freedom)

    @cached_property
    def parameters(self) -> tuple[float, ...]:
        """Degrees of freedom of the chi-square law, or of the F law."""
        p = float(self.dimension)
        return (p,) if self.is_chi_square else (p, self.degrees_of_freedom - p + 1)

    @cached_property
    def factor(self) -> float:
        """The number that turns ``T2`` into its chi-square or F equivalent."""
        if self.is_chi_square:
            return 1.0
        nu, p = self.degrees_of_freedom, self.dimension
        return (nu - p + 1) / (nu * p)

    def tail(self, statistic: float) -> tails.Tail:
        """Return P(T2 > statistic) and its logarithm."""
        scaled = statistic * self.factor
        if self.is_chi_square:
            return tails.chi_square_tail(scaled, self.dimension)
        return tails.f_tail(scaled, *self.parameters)

    def critical_value(self, level: float) -> float:
        """Return the value, in units of ``T2``, exceeded with probability `level`."""
        return _critical_value(self, level)

    def over(self, size: int) -> QuadraticLaw:
        """Return the law of the same form over `size` of the characteristics."""
        return quadratic_law(size, self.degrees_of_freedom)


@lru_cache(maxsize=1024)
def quadratic_law(dimension: int, degrees_of_freedom: float) -> QuadraticLaw:
    """Return the law, the same object for the same numbers.

    Raises
    ------
    TooFewUnitsError
        Where the law does not exist.
    """
    return QuadraticLaw(dimension, degrees_of_freedom)


@lru_cache(maxsize=4096)
def _critical_value(law: QuadraticLaw, level: float) -> float:
    if law.is_chi_square:
        return tails.chi_square_critical(level, law.dimension)
    return tails.f_critical(level, *law.parameters) / law.factor
