"""A policy: the weights, curves and rules a feed is ranked with, read from TOML.

A policy with an error is refused whole, with every problem in it. What a file leaves out, apart from its name and its
weights, has the value of the policy ``allotments`` that comes with the service.
"""

import re
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
import tomli_w
from numpy.typing import NDArray

from scoring import policy_fields as fields
from scoring.curves import Curve, HalfLife, Power
from scoring.durations import format_ms
from scoring.kinds import resolve
from scoring.policy_fields import PolicyError, Problem, Reader
from scoring.toml_lines import key_lines

__all__ = ["AffinityRule", "Policy", "PolicyError", "Problem", "parse_policy", "to_toml"]

DEFAULT_CURVE = HalfLife(12 * 3_600_000.0)
DEFAULT_GAINS: Mapping[str, float] = {"like": 0.1, "comment": 0.3, "share": 0.5, "hide": -1.0}

_TABLES = ("name", "weights", "freshness", "affinity", "explore", "arrange", "seen", "beyond")
_AFFINITY = ("stranger", "follow", "friend", "ceiling", "half_life", "gain")
_CURVES = {"half_life": ("half_life",), "power": ("scale", "exponent")}
_AT_LINE = re.compile(r"\(at line (\d+), column \d+\)")

_weight = fields.number("a weight is 0 or more", low=0.0)
_gain = fields.number("a gain is a finite number")
_affinity = fields.number("an affinity is 0 or more", low=0.0)
_ceiling = fields.number("the ceiling is above 0", above=0.0)
_exponent = fields.number("an exponent is above 0", above=0.0)
_temperature = fields.number("a temperature is 0 to 20", low=0.0, high=20.0)
_author_gap = fields.whole("an author gap is a whole number from 0 to 50", low=0, high=50)
_share = fields.number("a share is from 0 to 1", low=0.0, high=1.0)
_seen_factor = fields.number("a factor is from 0 to 1", low=0.0, high=1.0)


@dataclass(frozen=True, slots=True)
class AffinityRule:
    """How much a reader cares about an actor: a base by relation plus decaying gains, kept from 0 to the ceiling.

    Attributes:
        stranger: Base without a tie, 0 or more.
        follow: Base for someone the reader follows, 0 or more.
        friend: Base for someone the reader declared a friend, 0 or more.
        ceiling: The largest affinity, above 0.
        half_life_ms: Half-life of each gain, milliseconds.
        gains: What one interaction adds, by kind; may be negative.
    """

    stranger: float = 0.02
    follow: float = 1.0
    friend: float = 2.0
    ceiling: float = 10.0
    half_life_ms: float = 30 * 86_400_000.0
    gains: Mapping[str, float] = field(default_factory=lambda: dict(DEFAULT_GAINS))

    @property
    def crowd(self) -> float:
        """Affinity to everybody without a tie or an interaction: the base of a stranger, under the ceiling."""
        return min(self.stranger, self.ceiling)


@dataclass(frozen=True, slots=True)
class Policy:
    """Everything a feed is ranked with.

    Attributes:
        name: What requests call it.
        weights: What an edge is worth, by kind; 0 or more.
        curve: Freshness by age.
        affinity: How much a reader cares about an actor.
        temperature: Scale of the randomness on the log score; 0 is none.
        author_gap: Posts between two by one author, 0 to 50.
        seen_factor: Factor on the score of a seen post, 0 to 1.
        beyond_share: Share of a feed's places that go to posts from beyond the reader's ties, 0 to 1.
        beyond_fill: Whether such posts also fill the places that ties leave empty.
    """

    name: str
    weights: Mapping[str, float]
    curve: Curve = DEFAULT_CURVE
    affinity: AffinityRule = field(default_factory=AffinityRule)
    temperature: float = 0.0
    author_gap: int = 0
    seen_factor: float = 1.0
    beyond_share: float = 0.0
    beyond_fill: bool = False

    @property
    def goes_beyond(self) -> bool:
        """Whether feeds may hold posts that no one followed or befriended has an edge on."""
        return self.beyond_share > 0.0 or self.beyond_fill

    def knows(self, kind: str) -> bool:
        """Say whether the kind, or a stem of it, has a weight here, be it 0.0."""
        return resolve(kind, self.weights) is not None

    def known_kinds(self) -> tuple[str, ...]:
        """Return the kinds that the policy gives a weight, sorted; their refinements are known too."""
        return tuple(sorted(self.weights))

    def weight(self, kind: str) -> float:
        """Return what an edge of a kind is worth, 0.0 where neither it nor a stem of it is listed."""
        found = resolve(kind, self.weights)
        return 0.0 if found is None else found

    def gain(self, kind: str) -> float:
        """Return what an interaction of a kind adds to affinity, 0.0 where neither it nor a stem of it is listed."""
        found = resolve(kind, self.affinity.gains)
        return 0.0 if found is None else found

    def weights_for(self, kinds: Sequence[str]) -> NDArray[np.float64]:
        """Return the weight of each kind, shape (n,), finite and 0 or more."""
        return np.array([self.weight(kind) for kind in kinds], dtype=np.float64)

    def gains_for(self, kinds: Sequence[str]) -> NDArray[np.float64]:
        """Return the gain of each kind, shape (n,), finite."""
        return np.array([self.gain(kind) for kind in kinds], dtype=np.float64)

    def as_settings(self) -> dict[str, object]:
        """Return all settings, defaults included, as the policy file nests them: tables, texts and numbers only."""
        rule = self.affinity
        return {
            "name": self.name,
            "weights": dict(self.weights),
            "freshness": _curve_settings(self.curve),
            "affinity": {
                "stranger": rule.stranger,
                "follow": rule.follow,
                "friend": rule.friend,
                "ceiling": rule.ceiling,
                "half_life": format_ms(rule.half_life_ms),
                "gain": dict(rule.gains),
            },
            "explore": {"temperature": self.temperature},
            "arrange": {"author_gap": self.author_gap},
            "seen": {"factor": self.seen_factor},
            "beyond": {"share": self.beyond_share, "fill": self.beyond_fill},
        }


def parse_policy(text: str) -> Policy:
    r"""Read a policy file.

    Args:
        text: TOML.

    Returns:
        The policy, with defaults where the file says nothing.

    Raises:
        PolicyError: If anything in it is wrong; it holds every problem.

    >>> parse_policy('name = "plain"\n[weights]\nlike = 0.5\n').weight("like.photo")
    0.5
    >>> parse_policy('name = "plain"\n[weights]\nlike = -1\n')
    Traceback (most recent call last):
    scoring.policy_fields.PolicyError: line 3: weights.like: -1 is not allowed: a weight is 0 or more
    """
    document = _load(text)
    reader = Reader(key_lines(text))
    policy = _read(reader, document)
    if reader.problems:
        raise PolicyError(reader.problems)
    return policy


def to_toml(policy: Policy) -> str:
    """Write a policy as a file that `parse_policy` reads as the same policy."""
    return tomli_w.dumps(policy.as_settings())


def _load(text: str) -> dict[str, object]:
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        at_line = _AT_LINE.search(str(error))
        line = int(at_line[1]) if at_line else text.count("\n", 0, len(text.rstrip())) + 1
        raise PolicyError([Problem(line, None, f"not TOML: {error}")]) from error
    except (ValueError, RecursionError) as error:
        raise PolicyError([Problem(None, None, f"not TOML that can be read: {error}")]) from error


def _read(reader: Reader, document: Mapping[str, object]) -> Policy:
    reader.only(document, (), _TABLES)
    if "name" not in document:
        reader.refuse(("name",), "is missing: every policy has a name")
    explore, arrange, seen, beyond = (
        _table(reader, document, key, *allowed)
        for key, *allowed in (
            ("explore", "temperature"),
            ("arrange", "author_gap"),
            ("seen", "factor"),
            ("beyond", "share", "fill"),
        )
    )
    return Policy(
        name=reader.take(document, ("name",), fields.name, ""),
        weights=_weights(reader, document),
        curve=_curve(reader, document),
        affinity=_affinity_rule(reader, document),
        temperature=reader.take(explore, ("explore", "temperature"), _temperature, 0.0),
        author_gap=reader.take(arrange, ("arrange", "author_gap"), _author_gap, 0),
        seen_factor=reader.take(seen, ("seen", "factor"), _seen_factor, 1.0),
        beyond_share=reader.take(beyond, ("beyond", "share"), _share, 0.0),
        beyond_fill=reader.take(beyond, ("beyond", "fill"), fields.switch, default=False),
    )


def _table(reader: Reader, document: Mapping[str, object], key: str, *allowed: str) -> dict[str, object]:
    table = reader.table(document, (key,))
    reader.only(table, (key,), allowed)
    return table


def _weights(reader: Reader, document: Mapping[str, object]) -> dict[str, float]:
    if document.get("weights", {}) == {}:
        reader.refuse(("weights",), "is missing or empty: a policy gives at least one kind a weight")
    return reader.by_kind(reader.table(document, ("weights",)), ("weights",), _weight)


def _curve(reader: Reader, document: Mapping[str, object]) -> Curve:
    """Read the freshness table; it has the settings of its curve, all of them and no others."""
    if "freshness" not in document:
        return DEFAULT_CURVE
    table = _table(reader, document, "freshness", "curve", "half_life", "scale", "exponent")
    curve = reader.take(table, ("freshness", "curve"), fields.choice(*_CURVES), "half_life")
    for key in ("half_life", "scale", "exponent"):
        belongs = key in _CURVES[curve]
        if belongs and key not in table:
            reader.refuse(("freshness", key), f"is missing: curve {curve} needs it")
        elif not belongs and key in table:
            reader.refuse(
                ("freshness", key), f"is not allowed with curve {curve}: it has " + " and ".join(_CURVES[curve])
            )
    half_life_ms = reader.take(table, ("freshness", "half_life"), fields.duration_ms, 1.0)
    scale_ms = reader.take(table, ("freshness", "scale"), fields.duration_ms, 1.0)
    exponent = reader.take(table, ("freshness", "exponent"), _exponent, 1.0)
    return HalfLife(half_life_ms) if curve == "half_life" else Power(scale_ms, exponent)


def _affinity_rule(reader: Reader, document: Mapping[str, object]) -> AffinityRule:
    table = _table(reader, document, "affinity", *_AFFINITY)
    default = AffinityRule()

    def base(key: str, otherwise: float) -> float:
        return reader.take(table, ("affinity", key), _affinity, otherwise)

    return AffinityRule(
        stranger=base("stranger", default.stranger),
        follow=base("follow", default.follow),
        friend=base("friend", default.friend),
        ceiling=reader.take(table, ("affinity", "ceiling"), _ceiling, default.ceiling),
        half_life_ms=reader.take(table, ("affinity", "half_life"), fields.duration_ms, default.half_life_ms),
        gains=_gains(reader, table),
    )


def _gains(reader: Reader, table: Mapping[str, object]) -> dict[str, float]:
    path = ("affinity", "gain")
    if "gain" not in table:
        return dict(DEFAULT_GAINS)
    return reader.by_kind(reader.table(table, path), path, _gain)


def _curve_settings(curve: Curve) -> dict[str, object]:
    if isinstance(curve, HalfLife):
        return {"curve": "half_life", "half_life": format_ms(curve.half_life_ms)}
    return {"curve": "power", "scale": format_ms(curve.scale_ms), "exponent": curve.exponent}
