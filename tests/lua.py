"""What can be known of a script without running it: its header, and the globals of its compiled form."""

import re
import struct
from dataclasses import dataclass, field
from itertools import takewhile
from typing import Any

from lupa import lua51  # type: ignore[import-untyped]  # it ships no types

GET_GLOBAL, SET_GLOBAL = 5, 7
"""Opcodes of Lua 5.1 (its source, lopcodes.h; from memory, confirmed by `globals_of` finding what a chunk names)."""


@dataclass(frozen=True)
class Fields:
    """How many keys or arguments there are: `fixed`, then for each group of a repeated tail so many."""

    fixed: int
    groups: tuple[int, ...]

    def count(self, *repeats: int) -> int:
        """Give the number for so many repeats of each group, all together."""
        assert len(repeats) == len(self.groups), (repeats, self)
        return self.fixed + sum(size * times for size, times in zip(self.groups, repeats, strict=True))


@dataclass(frozen=True)
class Header:
    """The comment lines at the head of a script."""

    pieces: tuple[str, ...]
    purpose: str
    keys: Fields
    args: Fields
    returns: str
    costs: str


def read_header(text: str) -> Header:
    """Read a script's header.

    Its sections begin with `KEYS`, `ARGV`, `Returns` and `Costs`; further lines continue the one before.
    """
    lines = [
        line.removeprefix("--").strip() for line in takewhile(lambda line: line.startswith("--"), text.split("\n"))
    ]
    pieces: tuple[str, ...] = ()
    if lines[0].startswith("use:"):
        pieces = tuple(piece.strip() for piece in lines.pop(0).removeprefix("use:").split(","))
    sections, name = {"purpose": ""}, "purpose"
    for line in lines:
        found = re.match(r"(KEYS|ARGV|Returns|Costs)\b", line)
        name = found[1] if found else name
        sections[name] = f"{sections.get(name, '')} {line}".strip()
    keys, args = read_fields(sections.get("KEYS", ""), "KEYS"), read_fields(sections["ARGV"], "ARGV")
    return Header(pieces, sections["purpose"], keys, args, sections["Returns"], sections["Costs"])


def read_fields(text: str, name: str) -> Fields:
    """Read an enumeration such as `KEYS[1] a · KEYS[2…] for each: b, c` or `… · then for each post: d, e`.

    >>> read_fields("KEYS[1] applied:{b} hash · then for each post: post, wait (packed list)", "KEYS")
    Fields(fixed=1, groups=(2,))
    >>> read_fields("ARGV[1] low · ARGV[2…] kinds", "ARGV")
    Fields(fixed=1, groups=(1,))
    """
    text = re.sub(r"\([^()]*\)", "", text)
    numbers = [int(found) for found in re.findall(rf"{name}\[(\d+)\]", text)]
    assert numbers == list(range(1, len(numbers) + 1)), f"not counted from 1 without gaps: {text}"
    open_tail = re.search(rf"{name}\[(\d+)…\]", text)
    assert open_tail is None or int(open_tail[1]) == len(numbers) + 1, text
    groups = [_named(part) for part in re.split(r"for each[^:]*:", text)[1:]]
    if open_tail and not groups:
        groups = [1]
    return Fields(len(numbers), tuple(groups))


def _named(text: str) -> int:
    """Count names with commas between them; a trailing `and` leads to the next group."""
    return len([part for part in re.split(r",", text) if part.strip() not in ("", "and", "and then")])


@dataclass
class _Reader:
    """Reads a dumped chunk of Lua 5.1 (its source, ldump.c; from memory)."""

    data: bytes
    at: int = 12
    read: set[str] = field(default_factory=set)
    written: set[str] = field(default_factory=set)

    def take(self, form: str) -> tuple[Any, ...]:
        found = struct.unpack_from("<" + form, self.data, self.at)
        self.at += struct.calcsize("<" + form)
        return found

    def string(self) -> str:
        (size,) = self.take("Q")
        self.at += size
        return self.data[self.at - size : self.at - 1].decode("latin-1") if size else ""

    def constant(self) -> str:
        (kind,) = self.take("B")
        if kind == 4:
            return self.string()
        self.take({0: "", 1: "B", 3: "d"}[kind])
        return ""

    def function(self) -> None:
        self.string()
        self.take("iiBBBB")
        (length,) = self.take("i")
        code = self.take(f"{length}I")
        constants = [self.constant() for _ in range(self.take("i")[0])]
        for word in code:
            if word & 63 in (GET_GLOBAL, SET_GLOBAL):
                (self.read if word & 63 == GET_GLOBAL else self.written).add(constants[word >> 14])
        for _ in range(self.take("i")[0]):
            self.function()
        self.take(f"{self.take('i')[0]}i")
        for _ in range(self.take("i")[0]):
            self.string()
            self.take("ii")
        for _ in range(self.take("i")[0]):
            self.string()


def globals_of(source: str) -> tuple[set[str], set[str]]:
    """Compile a chunk and list the globals that it reads and those that it writes.

    >>> [sorted(names) for names in globals_of("local a = KEYS[1]; local function f() b = math.huge end")]
    [['KEYS', 'math'], ['b']]
    """
    dump = lua51.LuaRuntime(encoding=None).eval("function(text) return string.dump(assert(loadstring(text))) end")
    reader = _Reader(dump(source.encode()))
    reader.function()
    return reader.read, reader.written
