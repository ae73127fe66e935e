"""The loaded policies, made ready to rank."""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

from scoring.bank import Bank, BankFit, CurveError, fit
from scoring.policy import Policy, PolicyError, parse_policy
from scoring.ranking import Ranking, compile_policy
from service.errors import PolicyRefused, UnknownPolicy
from service.feed.board import BoardReader
from service.feed.types import PolicyInfo

POST_LIVES = 13
"""A post, and with it the oldest edge in its sums, leaves before this many times the retention."""

AHEAD_MS = 30 * 24 * 60 * 60 * 1000
"""How far ahead of now a feed may be ranked: its edges are so much older then, milliseconds."""


@dataclass(frozen=True, slots=True)
class LoadedPolicy:
    """A policy, the file it was read from, and its curve on the bank."""

    policy: Policy
    toml: str
    fit: BankFit


@dataclass(frozen=True, slots=True)
class PreparedPolicy:
    """A policy ready to rank: compiled for the kinds there are, with the board that bounds its crowd."""

    ranking: Ranking
    board: BoardReader


class PolicyBook:
    """Loads policies and compiles them for the kinds there are.

    Args:
        bank: of the store.
        board_slots: slots of the bank that have a board.
        horizon_ms: greatest age that a curve must be followed to, milliseconds.

    """

    def __init__(self, bank: Bank, board_slots: tuple[int, ...], horizon_ms: float) -> None:
        self._bank = bank
        self._board_slots = board_slots
        self._horizon_ms = horizon_ms
        self._loaded: dict[str, LoadedPolicy] = {}
        self._prepared: dict[str, PreparedPolicy] = {}
        self.default = ""

    def read(self, text: str, name: str | None = None) -> LoadedPolicy:
        """Read a policy without putting it in force.

        Args:
            text: TOML.
            name: what it must be called; None takes what the file says.

        Raises:
            PolicyRefused: anything in it is wrong, or the bank can't follow its curve.

        """
        try:
            policy = parse_policy(text)
        except PolicyError as error:
            raise PolicyRefused(name or "of the file", error.reason, error.line, error.field, error.problems) from error
        if name is not None and policy.name != name:
            reason = f"name: {policy.name!r} is not allowed: the address says {name!r}"
            raise PolicyRefused(name, reason, field="name")
        try:
            return LoadedPolicy(policy, text, fit(policy.curve, self._bank, self._horizon_ms, signed=True))
        except CurveError as error:
            raise PolicyRefused(policy.name, str(error), field="freshness") from error

    def put(self, loaded: LoadedPolicy) -> None:
        """Put a policy in force; the first one becomes the default."""
        name = loaded.policy.name
        self._loaded[name] = loaded
        self._prepared.pop(name, None)
        self.default = self.default or name

    def load_all(self, texts: Mapping[str, str]) -> None:
        """Put policies in force that others have pushed; those already in force as they are stay."""
        for name, text in texts.items():
            held = self._loaded.get(name)
            if held is None or held.toml != text:
                self.put(self.read(text, name))

    def knows(self, kind: str) -> bool:
        """Say whether some loaded policy knows a kind."""
        return any(loaded.policy.knows(kind) for loaded in self._loaded.values())

    def known_kinds(self) -> list[str]:
        """List the kinds that loaded policies name, sorted."""
        return sorted({kind for loaded in self._loaded.values() for kind in loaded.policy.known_kinds()})

    def prepared(self, name: str | None, kinds: list[str]) -> PreparedPolicy:
        """Give a policy made ready to rank.

        Args:
            name: of the policy; None takes the default.
            kinds: name of each kind code.

        Raises:
            UnknownPolicy: it is not loaded.

        """
        name = name or self.default
        prepared = self._prepared.get(name)
        if prepared is None or len(prepared.ranking.weights) != len(kinds):
            if name not in self._loaded:
                raise UnknownPolicy(name, list(self._loaded))
            ranking = compile_policy(self._loaded[name].policy, self._bank, kinds, self._horizon_ms)
            longest_ms = POST_LIVES * self._horizon_ms + AHEAD_MS
            prepared = PreparedPolicy(ranking, BoardReader(ranking, self._board_slots, longest_ms))
            self._prepared[name] = prepared
        return prepared

    def infos(self, names: Iterable[str] | None = None) -> list[PolicyInfo]:
        """Describe loaded policies, all of them where no names are given."""
        wanted = sorted(self._loaded) if names is None else names
        return [self._info(name, self._loaded[name]) for name in wanted]

    def _info(self, name: str, loaded: LoadedPolicy) -> PolicyInfo:
        return PolicyInfo(
            name=name,
            toml=loaded.toml,
            exact=loaded.fit.exact,
            error=loaded.fit.error,
            default=name == self.default,
            settings=loaded.policy.as_settings(),
        )
