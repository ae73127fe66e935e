"""The store's scripts: one file each, with the shared pieces named in its `use:` line put before it."""

import hashlib
from dataclasses import dataclass
from functools import cache
from importlib.resources import files

_FOLDER = files("service.store") / "scripts"


@dataclass(frozen=True, slots=True)
class Script:
    """A script as the server is given it."""

    name: str
    source: str
    sha: str


@cache
def load(name: str) -> Script:
    """Read a script by its file's name, without the ending.

    Raises:
        FileNotFoundError: there is no such script.

    """
    text = (_FOLDER / f"{name}.lua").read_text()
    head, _, _ = text.partition("\n")
    pieces = [piece.strip() for piece in head.removeprefix("-- use:").split(",")] if head.startswith("-- use:") else []
    source = "".join((_FOLDER / "lib" / f"{piece}.lua").read_text() for piece in pieces) + text
    return Script(name, source, hashlib.sha1(source.encode(), usedforsecurity=False).hexdigest())


def names() -> list[str]:
    """List all scripts."""
    return sorted(entry.name.removesuffix(".lua") for entry in _FOLDER.iterdir() if entry.name.endswith(".lua"))
