"""The documents, taken apart for `tests/test_documents.py`; `python -m tests.documents` writes their tables anew.

A generated table stands between the comments `<!-- name -->` and `<!-- /name -->`.
"""

import re
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from service.settings import Settings
from service.store import keys

ROOT = Path(__file__).parent.parent
DOCUMENTS = (ROOT / "README.md", ROOT / "DEVELOPERS.md", *sorted((ROOT / "docs").glob("*.md")))
TABLES = {"keys": ROOT / "DEVELOPERS.md", "settings": ROOT / "docs" / "operations.md"}

_FENCE = re.compile(r"^```(\w+)\n(.*?)^```$", re.DOTALL | re.MULTILINE)
_HEADING = re.compile(r"^#+ (.+)$", re.MULTILINE)


@dataclass(frozen=True)
class Block:
    """A fenced block: the document it stands in, its language and its text."""

    document: Path
    language: str
    text: str

    def __str__(self) -> str:
        return f"{self.document.name}: {self.text[:60]!r}"


def blocks(*languages: str) -> list[Block]:
    """List the fenced blocks in some languages, of all documents."""
    return [
        Block(document, language, text)
        for document in DOCUMENTS
        for language, text in _FENCE.findall(document.read_text())
        if language in languages
    ]


def prose(document: Path) -> str:
    """Give a document's text without its fenced blocks."""
    return _FENCE.sub("", document.read_text())


def code(document: Path) -> list[str]:
    """List the inline code of a document."""
    return re.findall(r"`([^`\n]+)`", prose(document))


def anchors(document: Path) -> set[str]:
    """List the anchors of a document's headings, as hosts of Markdown make them."""
    headings = _HEADING.findall(prose(document))
    return {re.sub(r"[^\w\- ]", "", heading.lower()).replace(" ", "-") for heading in headings}


def commands() -> Iterator[tuple[Path, list[str]]]:
    """Give every `waxwane …` that the documents tell to run, in blocks or inline, as words."""
    for document in DOCUMENTS:
        shell = "\n".join(block.text for block in blocks("sh") if block.document == document)
        for line in [*shell.splitlines(), *code(document)]:
            for words in re.findall(r"(?:^|[\s/])waxwane((?: [^\s;&|)]+)*)", line):
                yield document, words.split()


def settings_table() -> str:
    """Write the table of settings."""
    rows = ["| setting | meaning | allowed | default |", "| --- | --- | --- | --- |"]
    for name, field in Settings.model_fields.items():
        extra = field.json_schema_extra
        allowed = extra["allowed"] if isinstance(extra, dict) else ""
        rows.append(f"| `{name}` | {field.description} | {allowed} | {_default(name, field.default)} |")
    return "\n".join(rows)


def _default(name: str, value: Any) -> str:
    if name == "policies":
        return "the built-in policy"
    return "" if value in (None, ()) else f"`{value}`"


def keys_table() -> str:
    """Take the table of keys out of the docstring of the module that builds them."""
    return "\n".join(line for line in str(keys.__doc__).splitlines() if line.startswith("|"))


def table(name: str) -> str:
    """Write a generated table as it should stand."""
    return {"keys": keys_table, "settings": settings_table}[name]()


def standing(name: str) -> str:
    """Read a generated table as it stands."""
    found = re.search(rf"<!-- {name} -->\n(.*?)\n?<!-- /{name} -->", TABLES[name].read_text(), re.DOTALL)
    assert found, f"{TABLES[name].name} has no place for the table {name}"
    return found[1]


def main() -> None:
    """Write every generated table anew."""
    for name, document in TABLES.items():
        text = document.read_text()
        stands, written = (f"<!-- {name} -->\n{body}\n<!-- /{name} -->" for body in (standing(name), table(name)))
        document.write_text(text.replace(f"<!-- {name} -->\n<!-- /{name} -->", written).replace(stands, written))


if __name__ == "__main__":
    main()
