"""Freshness: what is left of an edge at its age.

Both curves are 1 at age 0 and never rise, and their slopes only flatten: they are completely monotone, which
`scoring.bank` builds on.
"""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Ages = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class HalfLife:
    """Halve with every half-life: 2^(-age / half_life).

    Attributes:
        half_life_ms: Milliseconds, positive and finite.

    >>> HalfLife(3_600_000.0).freshness(np.array([0.0, 3_600_000.0, 7_200_000.0]))
    array([1.  , 0.5 , 0.25])
    """

    half_life_ms: float

    def __post_init__(self) -> None:
        _require_positive("half_life_ms", self.half_life_ms)

    def freshness(self, age_ms: Ages) -> Ages:
        """Return what is left at each age.

        Args:
            age_ms: Ages in milliseconds, any shape; an age below 0 counts as 0.

        Returns:
            Values from 0 to 1, of the same shape.
        """
        left: Ages = np.exp2(np.maximum(age_ms, 0.0) / -self.half_life_ms)
        return left

    def curvature(self, age_ms: Ages) -> Ages:
        """Return the second derivative by age, per square millisecond, at ages of 0 or more; it never rises."""
        return self.freshness(age_ms) * (math.log(2.0) / self.half_life_ms) ** 2


@dataclass(frozen=True, slots=True)
class Power:
    """Fall fast at first and slowly later: (1 + age / scale)^(-exponent).

    Attributes:
        scale_ms: Milliseconds, positive and finite.
        exponent: Positive and finite.

    >>> Power(3_600_000.0, 1.0).freshness(np.array([0.0, 3_600_000.0, 10_800_000.0]))
    array([1.  , 0.5 , 0.25])
    """

    scale_ms: float
    exponent: float

    def __post_init__(self) -> None:
        _require_positive("scale_ms", self.scale_ms)
        _require_positive("exponent", self.exponent)

    def freshness(self, age_ms: Ages) -> Ages:
        """Return what is left at each age.

        Args:
            age_ms: Ages in milliseconds, any shape; an age below 0 counts as 0.

        Returns:
            Values from 0 to 1, of the same shape.
        """
        left: Ages = np.power(1.0 + np.maximum(age_ms, 0.0) / self.scale_ms, -self.exponent)
        return left

    def curvature(self, age_ms: Ages) -> Ages:
        """Return the second derivative by age, per square millisecond, at ages of 0 or more; it never rises."""
        left: Ages = np.power(1.0 + np.maximum(age_ms, 0.0) / self.scale_ms, -self.exponent - 2.0)
        return left * (self.exponent / self.scale_ms) * ((self.exponent + 1.0) / self.scale_ms)


Curve = HalfLife | Power


def _require_positive(name: str, value: float) -> None:
    if not (math.isfinite(value) and value > 0):
        raise ValueError(f"{name}: {value} is not allowed: it is a finite number above 0")
