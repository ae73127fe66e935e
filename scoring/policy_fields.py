"""Checks of single settings, and a reader that collects every problem with its line."""

import json
import math
import re
from collections.abc import Callable, Collection, Mapping
from dataclasses import dataclass
from typing import TypeVar

from scoring import durations, kinds
from scoring.toml_lines import Path, line_of

LARGEST = 1e9
"""No number in a policy is larger, so that no score leaves the range of a double."""

NAME_PATTERN = r"^[a-z0-9][a-z0-9_-]{0,63}$"
"""What the name of a policy looks like."""

_BARE = re.compile(r"[A-Za-z0-9_-]+")
_NAME = re.compile(NAME_PATTERN)
_SHOWN = 60

T = TypeVar("T")
Check = Callable[[object], T]
"""Takes a value as TOML gave it and returns the setting; raises ValueError with what is allowed."""


@dataclass(frozen=True, slots=True)
class Problem:
    """One thing that is wrong with a policy.

    Attributes:
        line: Line of the file, from 1; None where the file has no line for it.
        field: The setting, like ``weights.like``; None where the file is not TOML.
        reason: What was found and what is allowed.
    """

    line: int | None
    field: str | None
    reason: str

    def __str__(self) -> str:
        line = f"line {self.line}" if self.line is not None else None
        return ": ".join(part for part in (line, self.field, self.reason) if part is not None)


class PolicyError(ValueError):
    """A policy was refused whole.

    Attributes:
        problems: Everything that is wrong, in the order of the file's lines; at least one.
    """

    def __init__(self, problems: Collection[Problem]) -> None:
        self.problems = tuple(problems)
        super().__init__("\n".join(str(problem) for problem in self.problems))

    @property
    def line(self) -> int | None:
        """The first problem's line."""
        return self.problems[0].line

    @property
    def field(self) -> str | None:
        """The first problem's setting."""
        return self.problems[0].field

    @property
    def reason(self) -> str:
        """The first problem's reason."""
        return self.problems[0].reason


def number(allowed: str, *, low: float = -LARGEST, above: float = -math.inf, high: float = LARGEST) -> Check[float]:
    """Make a check for a finite number.

    Args:
        allowed: What is allowed, in words.
        low: The smallest value that is allowed.
        above: What every value is above.
        high: The largest value that is allowed.
    """

    def check(value: object) -> float:
        if isinstance(value, bool) or not isinstance(value, (int, float)) or not low <= value <= high:
            raise ValueError(allowed)
        if value <= above:
            raise ValueError(allowed)
        return float(value) + 0.0

    return check


def whole(allowed: str, *, low: int, high: int) -> Check[int]:
    """Make a check for a whole number from low to high."""

    def check(value: object) -> int:
        if isinstance(value, bool) or not isinstance(value, int) or not low <= value <= high:
            raise ValueError(allowed)
        return value

    return check


def switch(value: object) -> bool:
    """Check a true or false."""
    if not isinstance(value, bool):
        raise ValueError("it is true or false")  # noqa: TRY004  # a check has one way to refuse
    return value


def choice(*names: str) -> Check[str]:
    """Make a check for one of several names."""

    def check(value: object) -> str:
        if not isinstance(value, str) or value not in names:
            raise ValueError("it is one of " + ", ".join(names))
        return value

    return check


def duration_ms(value: object) -> float:
    """Check a duration and return its milliseconds."""
    if not isinstance(value, str):
        raise ValueError(durations.ALLOWED)  # noqa: TRY004  # a check has one way to refuse
    return durations.parse_ms(value)


def name(value: object) -> str:
    """Check the name of a policy."""
    if not isinstance(value, str) or _NAME.fullmatch(value) is None:
        raise ValueError("a name has 1 to 64 of a-z, 0-9, _ and -, and starts with a letter or a digit")
    return value


def shown(value: object) -> str:
    """Write a value for a message, shortened, without line breaks."""
    if isinstance(value, Mapping):
        return "a table"
    if isinstance(value, int) and not isinstance(value, bool) and abs(value) > LARGEST:
        return "a number that large"
    if isinstance(value, float):
        return repr(value)
    text = json.dumps(value, default=str, ensure_ascii=False)
    return text if len(text) <= _SHOWN else text[: _SHOWN - 1] + "…"


def dotted(path: Path) -> str:
    """Write a path of keys as TOML does.

    >>> dotted(("weights", "post.photo")), dotted(("affinity", "gain", "like"))
    ('weights."post.photo"', 'affinity.gain.like')
    """
    return ".".join(part if _BARE.fullmatch(part) else json.dumps(part, ensure_ascii=False) for part in path)


class Reader:
    """Reads settings out of a parsed document, and keeps what is wrong with them."""

    def __init__(self, lines: Mapping[Path, int]) -> None:
        self._lines = lines
        self._problems: list[Problem] = []

    @property
    def problems(self) -> list[Problem]:
        """All problems so far, in the order of their lines, those without one last."""
        return sorted(self._problems, key=lambda problem: math.inf if problem.line is None else problem.line)

    def refuse(self, path: Path, reason: str) -> None:
        """Keep a problem with the setting at a path."""
        self._problems.append(Problem(line_of(path, self._lines), dotted(path), reason))

    def table(self, parent: Mapping[str, object], path: Path) -> dict[str, object]:
        """Return the table at a path, empty where there is none."""
        value = parent.get(path[-1], {})
        if isinstance(value, dict):
            return value
        self.refuse(path, f"{shown(value)} is not allowed: it is a table")
        return {}

    def only(self, table: Mapping[str, object], path: Path, allowed: Collection[str]) -> None:
        """Refuse every key of a table that is not among the allowed ones."""
        for key in table:
            if key not in allowed:
                self.refuse((*path, key), "is not known: allowed here are " + ", ".join(allowed))

    def take(self, table: Mapping[str, object], path: Path, check: Check[T], default: T) -> T:
        """Return a checked setting; the default where it is missing, or wrong and so refused."""
        if path[-1] not in table:
            return default
        value = table[path[-1]]
        try:
            return check(value)
        except ValueError as refusal:
            self.refuse(path, f"{shown(value)} is not allowed: {refusal}")
            return default

    def by_kind(self, table: Mapping[str, object], path: Path, check: Check[float]) -> dict[str, float]:
        """Return a table of numbers by kind."""
        values: dict[str, float] = {}
        for kind in table:
            if not kinds.is_kind(kind):
                self.refuse(
                    (*path, kind),
                    "is not the name of a kind: words of letters, digits, _ and - joined by dots, "
                    f"{kinds.MAX_KIND_BYTES} bytes at most; a dotted kind stands in quotes",
                )
            elif isinstance(table[kind], Mapping):
                self.refuse(
                    (*path, kind), f'a table is not allowed: a dotted kind stands in quotes, like "{kind}.photo"'
                )
            else:
                values[kind] = self.take(table, (*path, kind), check, 0.0)
        return values
