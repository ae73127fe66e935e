"""The bank: the few half-lives for which running sums are kept, and how a curve is made of them.

A curve is followed by a sum of the bank's exponentials, Σ c_i · 2^(-age / h_i) (Beylkin and Monzón, "On approximation
of functions by exponential sums", Applied and Computational Harmonic Analysis 19, 2005). The coefficients are fitted
once, when a policy is loaded: a linear programme makes the largest absolute error at some 600 ages as small as it can.

Why the default bank is what it is: certified largest errors in thousandths, ages 0 to 30 days, scipy 1.17 (HiGHS), as
`fit` computes them. The half-lives are 2 h, 4 h, 18 h, 2 d, 5 d and 14 d ("=" is exact); the powers are
(1 + age / scale)^-exponent with scales of 1, 3, 6 and 24 h. A fit takes some 10 to 15 ms.

| bank | sums | half-lives | exponent 1 | exponent 1.5 |
| --- | --- | --- | --- | --- |
| 1, 3, 6, 12 h, 1, 3, 7, 30 d ("eight") | 8 | 29 12 12 29 18 33 | 43.0 1.7 0.5 0.3 | 102.0 4.9 0.9 0.2 |
| 0.25 h · 3^k, k = 0 to 7 | 8 | 12 31 12 22 29 20 | 0.4 0.4 0.3 0.6 | 1.3 0.7 0.6 0.6 |
| eight and 0.25 h | 9 | 29 12 12 29 18 33 | 2.5 0.4 0.5 0.3 | 3.5 0.9 0.9 0.2 |
| eight and 0.5 h | 9 | 29 12 12 29 18 33 | 7.5 0.5 0.5 0.3 | 20.1 0.8 0.9 0.2 |
| **eight, 0.25 h and 14 d** | 10 | 29 12 12 29 18 = | 2.5 0.4 0.5 0.2 | 3.5 0.9 0.9 0.2 |
| the same, coefficients from -4 to 4 | 10 | 2.8 0.8 0.6 1.1 0.3 = | 2.3 0.3 0.4 0.2 | 2.6 0.9 0.6 0.1 |
| eight, 0.25 h, 0.5 h, 2 d and 14 d | 12 | 29 12 12 = 18 = | 0.5 0.3 0.5 0.1 | 1.4 0.5 0.9 0.0 |

The quarter of an hour is what fast power curves need, and the fortnight is what signed fits need (without it they miss
14 d, 5.5, and 90 d, 15.6; with it 90 d is 1.1). Two sums more would only make 2 d exact.
"""

import math
from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from scoring.curves import Curve, HalfLife
from scoring.durations import UNITS_MS, format_ms

MAX_HALF_LIVES = 12
"""Each half-life costs one running sum for every post and kind."""

LARGEST_ERROR = 0.005
"""A fit may stray this far from the curve, whose value at age 0 is 1."""

_EXACT_RATIO = 1e-9
_LARGEST_SIGNED = 4.0
_FITTED_AGES = 600
_CHECKED_AGES = 4096

Values = NDArray[np.float64]


class CurveError(ValueError):
    """The bank cannot follow a curve closely enough.

    Attributes:
        error: The certified largest error of the best fit found.
        allowed: The largest error that would have been accepted.
    """

    def __init__(self, message: str, error: float, allowed: float) -> None:
        super().__init__(message)
        self.error = error
        self.allowed = allowed


@dataclass(frozen=True, slots=True)
class Bank:
    """Half-lives for which sums are kept.

    Attributes:
        half_lives_ms: Milliseconds, positive, strictly ascending, 1 to 12 of them.
    """

    half_lives_ms: tuple[float, ...]

    def __post_init__(self) -> None:
        if not 1 <= len(self.half_lives_ms) <= MAX_HALF_LIVES:
            raise ValueError(
                f"half_lives_ms: {len(self.half_lives_ms)} half-lives are not allowed: a bank has 1 to {MAX_HALF_LIVES}"
            )
        rising = all(shorter < longer for shorter, longer in pairwise((0.0, *self.half_lives_ms)))
        if not (rising and math.isfinite(self.half_lives_ms[-1])):
            raise ValueError(
                f"half_lives_ms: {self.half_lives_ms} is not allowed: they are above 0 and strictly ascending"
            )

    def freshness(self, age_ms: Values) -> Values:
        """Return what each half-life leaves at each age.

        Args:
            age_ms: Ages in milliseconds, shape (n,); an age below 0 counts as 0.

        Returns:
            Shape (n, m): a row for each age, a column for each half-life.
        """
        ages = np.maximum(age_ms, 0.0)
        left: Values = np.exp2(-ages[:, np.newaxis] / np.asarray(self.half_lives_ms))
        return left


@dataclass(frozen=True, slots=True)
class BankFit:
    """A curve as a linear combination of a bank's half-lives.

    Attributes:
        coefficients: Shape (m,), one for each half-life, in the bank's order.
        error: Certified bound of |curve - fit| at every age from 0 to the horizon; 0.0 where exact.
        exact: Whether the curve is one of the bank's own half-lives.
    """

    coefficients: Values = field(repr=False)
    error: float
    exact: bool


def fit(curve: Curve, bank: Bank, horizon_ms: float, *, signed: bool = False) -> BankFit:
    """Follow a curve by the bank's half-lives.

    A half-life that the bank holds (to 1e-9 of itself) is exact. Anything else gets the non-negative coefficients with
    the least largest error. A power curve has good ones; a half-life that lies between two of the bank has not, because
    a mixture of exponentials is always more curved than one. With ``signed``, a curve that non-negative coefficients
    miss is tried again with coefficients from -4 to 4.

    Args:
        curve: The curve to follow.
        bank: The half-lives there are.
        horizon_ms: The oldest age that matters, in milliseconds, above 0: the retention.
        signed: Whether negative coefficients may be used where non-negative ones do not suffice. A fit with
            negative coefficients need not fall with age, and sums of it may be slightly below 0.

    Returns:
        The coefficients and their certified error.

    Raises:
        CurveError: If the certified error is above 0.005.

    >>> hours = DEFAULT_BANK.half_lives_ms.index(12 * 3_600_000.0)
    >>> exact = fit(HalfLife(12 * 3_600_000.0), DEFAULT_BANK, 30 * 86_400_000.0)
    >>> exact.exact, exact.error, exact.coefficients[hours]
    (True, 0.0, np.float64(1.0))
    """
    if not (math.isfinite(horizon_ms) and horizon_ms > 0):
        raise ValueError(f"horizon_ms: {horizon_ms} is not allowed: it is a finite number above 0")
    held = _held(curve, bank)
    if held is not None:
        return BankFit(np.eye(len(bank.half_lives_ms))[held], 0.0, exact=True)
    best = _fitted(curve, bank, horizon_ms, lowest=0.0, highest=None)
    if signed and best.error > LARGEST_ERROR:
        best = _fitted(curve, bank, horizon_ms, lowest=-_LARGEST_SIGNED, highest=_LARGEST_SIGNED)
    if best.error > LARGEST_ERROR:
        raise _too_far(curve, bank, best.error)
    return best


def largest_error(curve: Curve, bank: Bank, coefficients: Values, horizon_ms: float) -> float:
    """Bound how far a combination strays from a curve at any age from 0 to the horizon, between checked ages too.

    The ages are cut into some 4,000 cells. In a cell [a, b] the difference d of the two differs from the chord through
    d(a) and d(b) by at most (b - a)² / 8 times the largest |d''| (the remainder of linear interpolation), and |d''| is
    at most curve''(a) + Σ |c_i| u_i''(a), since the second derivative of a completely monotone function never rises.
    Neither can d leave its ends by more than the curve and every |c_i| u_i fall within the cell. So the error in the
    cell is at most the larger of |d(a)| and |d(b)| plus the smaller of these two bounds.

    Args:
        curve: The curve to follow.
        bank: The half-lives, m of them.
        coefficients: Shape (m,), of either sign.
        horizon_ms: The oldest age, in milliseconds.

    Returns:
        The bound; it is above the true largest error by about 1e-6 times the sum of the coefficients' sizes.
    """
    ages_ms = _ages(bank, horizon_ms, _CHECKED_AGES)
    left = bank.freshness(ages_ms)
    sizes = np.abs(coefficients)
    at_ages = np.abs(curve.freshness(ages_ms) - left @ coefficients)
    falls = -np.diff(curve.freshness(ages_ms) + left @ sizes)
    rates = math.log(2.0) / np.asarray(bank.half_lives_ms)
    with np.errstate(over="ignore", invalid="ignore"):
        bends = (curve.curvature(ages_ms) + left @ (sizes * rates**2))[:-1] * np.diff(ages_ms) ** 2 / 8.0
    return float(np.max(np.maximum(at_ages[:-1], at_ages[1:]) + np.fmin(falls, bends)))


def _held(curve: Curve, bank: Bank) -> int | None:
    """Return the place of a half-life in the bank, or None."""
    if not isinstance(curve, HalfLife):
        return None
    for place, half_life_ms in enumerate(bank.half_lives_ms):
        if math.isclose(curve.half_life_ms, half_life_ms, rel_tol=_EXACT_RATIO):
            return place
    return None


def _ages(bank: Bank, horizon_ms: float, count: int) -> Values:
    """Return age 0 and ages at equal ratios up to the horizon."""
    youngest_ms = min(bank.half_lives_ms[0], horizon_ms) / 1000.0
    ages: Values = np.concatenate(([0.0], np.geomspace(youngest_ms, horizon_ms, count)))
    return ages


def _fitted(curve: Curve, bank: Bank, horizon_ms: float, lowest: float, highest: float | None) -> BankFit:
    """Solve: least e such that |curve - Σ c_i u_i| <= e at every fitted age, with each c_i in bounds."""
    from scipy.optimize import linprog  # noqa: PLC0415  # a slow import that only a loading policy needs

    ages_ms = _ages(bank, horizon_ms, _FITTED_AGES)
    left, wanted = bank.freshness(ages_ms), curve.freshness(ages_ms)
    count = len(bank.half_lives_ms)
    error = np.ones((len(ages_ms), 1))
    solved = linprog(
        np.append(np.zeros(count), 1.0),
        A_ub=np.block([[left, -error], [-left, -error]]),
        b_ub=np.concatenate((wanted, -wanted)),
        bounds=[(lowest, highest)] * count + [(0.0, None)],
        method="highs",
    )
    if solved.x is None:
        raise CurveError(f"{_named(curve)} could not be fitted: {solved.message}", math.inf, LARGEST_ERROR)
    coefficients: Values = np.clip(np.asarray(solved.x[:count], dtype=np.float64), lowest, highest)
    return BankFit(coefficients, largest_error(curve, bank, coefficients, horizon_ms), exact=False)


def _too_far(curve: Curve, bank: Bank, error: float) -> CurveError:
    held = ", ".join(format_ms(half_life_ms) for half_life_ms in bank.half_lives_ms)
    return CurveError(
        f"{_named(curve)}: the running sums follow it to {error:.4f} of its value at age 0, and "
        f"{LARGEST_ERROR} is allowed; the half-lives {held} are exact",
        error,
        LARGEST_ERROR,
    )


def _named(curve: Curve) -> str:
    if isinstance(curve, HalfLife):
        return f"curve half_life with half_life {format_ms(curve.half_life_ms)}"
    return f"curve power with scale {format_ms(curve.scale_ms)} and exponent {curve.exponent:g}"


_HOURS = (0.25, 1, 3, 6, 12, 24, 3 * 24, 7 * 24, 14 * 24, 30 * 24)

DEFAULT_BANK = Bank(tuple(hours * float(UNITS_MS["h"]) for hours in _HOURS))
"""The half-lives kept unless a setting says otherwise: 15 min, 1, 3, 6 and 12 h, 1, 3, 7, 14 and 30 d."""
