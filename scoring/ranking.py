"""A policy made ready to rank: weights and gains by kind code, the curve on the bank."""

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from scoring.bank import Bank, BankFit, fit
from scoring.compiled import Rule, UnknownCodeError, numbers
from scoring.curves import HalfLife
from scoring.policy import Policy

Values = NDArray[np.float64]

_CHECKED_AGES = 1 << 15


@dataclass(frozen=True, slots=True)
class Ranking:
    """A compiled policy.

    Attributes:
        policy: The policy.
        bank: The bank of the store.
        fit: The curve on the bank.
        weights: Weight by kind code, shape (codes,).
        gains: Gain by kind code, shape (codes,).
        rule: The same for the compiled passes.
    """

    policy: Policy
    bank: Bank
    fit: BankFit
    weights: Values
    gains: Values
    rule: Rule = field(init=False, repr=False, compare=False)
    _packed: tuple[bytes, ...] = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        packed = (numbers(self.weights), numbers(np.array(self.bank.half_lives_ms)), numbers(self.fit.coefficients))
        object.__setattr__(self, "_packed", packed)
        object.__setattr__(self, "rule", self._rule(*packed))

    def _rule(self, weights: bytes, half_lives_ms: bytes, coefficients: bytes) -> Rule:
        curve = self.policy.curve
        scale_ms, exponent = (
            (curve.half_life_ms, 1.0) if isinstance(curve, HalfLife) else (curve.scale_ms, curve.exponent)
        )
        return Rule(
            power=not isinstance(curve, HalfLife),
            exact=self.fit.exact,
            scale_ms=scale_ms,
            exponent=exponent,
            stranger=self.policy.affinity.crowd,
            codes=len(self.weights),
            weights=weights,
            terms=len(self.bank.half_lives_ms),
            half_lives_ms=half_lives_ms,
            coefficients=coefficients,
        )

    def freshness(self, age_ms: Values) -> Values:
        """Return the policy's freshness at ages, of the same shape."""
        return self.policy.curve.freshness(age_ms)

    def crowd_freshness(self, age_ms: Values) -> Values:
        """Return what the bank makes of the freshness at ages, of the same shape: what running sums decay by."""
        if self.fit.exact:
            return self.policy.curve.freshness(age_ms)
        half_lives = np.array(self.bank.half_lives_ms)
        followed: Values = np.exp2(np.maximum(age_ms, 0.0)[..., None] / -half_lives) @ self.fit.coefficients
        return followed

    def weights_of(self, codes: NDArray[np.intp]) -> Values:
        """Return the weight of each kind code, of the same shape.

        Raises:
            UnknownCodeError: A code is newer than the compiled policy.
        """
        return _looked_up(self.weights, codes)

    def gains_of(self, codes: NDArray[np.intp]) -> Values:
        """Return the gain of each kind code, of the same shape.

        Raises:
            UnknownCodeError: A code is newer than the compiled policy.
        """
        return _looked_up(self.gains, codes)

    def ceiling_over(self, slot: int, horizon_ms: float) -> float:
        """Bound the crowd's freshness by a multiple of one half-life of the bank.

        Args:
            slot: Place of the half-life in the bank.
            horizon_ms: Greatest age, milliseconds.

        Returns:
            The smallest c found with crowd_freshness(age) <= c · 2^(-age / half_life) at ages 0 to horizon; each
            step between checked ages is allowed for.
        """
        half_life, curve = self.bank.half_lives_ms[slot], self.policy.curve
        if self.fit.exact and isinstance(curve, HalfLife) and curve.half_life_ms <= half_life:
            return 1.0
        ages = np.linspace(0.0, horizon_ms, _CHECKED_AGES)
        step = ages[1]
        with np.errstate(over="ignore", invalid="ignore"):
            ratio = np.max(self._relative(ages, half_life))
        return float(ratio * 2.0 ** (step / half_life)) if np.isfinite(ratio) else float("inf")

    def _relative(self, age_ms: Values, half_life_ms: float) -> Values:
        """Return crowd_freshness(age) / 2^(-age / half_life); a long age over- or underflows neither by itself."""
        curve, parts = self.policy.curve, self.fit.coefficients != 0.0
        half_lives, coefficients = np.array(self.bank.half_lives_ms)[parts], self.fit.coefficients[parts]
        if self.fit.exact and isinstance(curve, HalfLife):
            half_lives = np.array([curve.half_life_ms])
        ratio: Values = np.exp2(age_ms[:, None] * (1.0 / half_life_ms - 1.0 / half_lives)) @ coefficients
        return ratio


def compile_policy(policy: Policy, bank: Bank, kinds: Sequence[str], horizon_ms: float) -> Ranking:
    """Make a policy ready to rank.

    Args:
        policy: The policy.
        bank: The bank of the store.
        kinds: Name of each kind code.
        horizon_ms: Greatest age that the curve must be followed to: retention, milliseconds.

    Raises:
        CurveError: The bank cannot follow the policy's curve.
    """
    curve_fit = fit(policy.curve, bank, horizon_ms, signed=True)
    return Ranking(policy, bank, curve_fit, policy.weights_for(kinds), policy.gains_for(kinds))


def _looked_up(table: Values, codes: NDArray[np.intp]) -> Values:
    if len(codes) and codes.max() >= len(table):
        raise UnknownCodeError(int(codes.max()))
    found: Values = table[codes]
    return found
