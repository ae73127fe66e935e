"""Where each key of a TOML document stands, so that an error can name its line.

The standard library's parser gives values without positions. This scanner reads a document that the parser has accepted
(TOML 1.0) and finds the keys of tables and statements; keys inside an inline table stand in the line of the statement.
"""

import re
import tomllib
from collections.abc import Iterator, Mapping

Path = tuple[str, ...]
Tokens = list[tuple[str, int]]

_TOKEN = re.compile(
    r"""
    \"{3}(?:\\.|[^\\])*?\"{3,5}
    | '{3}.*?'{3,5}
    | "(?:\\.|[^"\\\n])*"
    | '[^'\n]*'
    | \#[^\n]*
    | \n
    | [\[\]{}=.,]
    | [^\[\]{}=.,"'\#\s]+
    """,
    re.VERBOSE | re.DOTALL,
)


def key_lines(text: str) -> dict[Path, int]:
    r"""Find the line of every key.

    Args:
        text: A valid TOML document.

    Returns:
        Line numbers from 1 by path, for tables and for settings; the first line where a path stands more than once.

    >>> key_lines('name = "a"\n[weights]\n"post.photo" = 3.0\n')
    {('name',): 1, ('weights',): 2, ('weights', 'post.photo'): 3}
    """
    lines: dict[Path, int] = {}
    table: Path = ()
    for tokens in _statements(text.replace("\r\n", "\n")):
        line = tokens[0][1]
        if tokens[0][0] == "[":
            table = path = _keys(token for token, _ in tokens)
        else:
            names = [token for token, _ in tokens]
            path = table + _keys(iter(names[: names.index("=")]))
        for length in range(1, len(path) + 1):
            lines.setdefault(path[:length], line)
    return lines


def line_of(path: Path, lines: Mapping[Path, int]) -> int | None:
    """Return the line of a path, or of the nearest table around it; None where there is none."""
    for length in range(len(path), 0, -1):
        if path[:length] in lines:
            return lines[path[:length]]
    return None


def _statements(text: str) -> Iterator[Tokens]:
    """Yield the tokens of each table header or setting, with their line numbers."""
    statement: Tokens = []
    line, depth = 1, 0
    for part in _TOKEN.findall(text):
        if part == "\n" and depth == 0 and statement:
            yield statement
            statement = []
        elif not part.startswith(("#", "\n")):
            statement.append((part, line))
        depth += (part in ("[", "{")) - (part in ("]", "}"))
        line += part.count("\n")
    if statement:
        yield statement


def _keys(tokens: Iterator[str]) -> Path:
    return tuple(_plain(token) for token in tokens if token not in ("[", "]", "."))


def _plain(token: str) -> str:
    """Return the key that a bare or quoted token stands for."""
    if token.startswith(("'", '"')):
        return str(tomllib.loads(f"key = {token}")["key"])
    return token
