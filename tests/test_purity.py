"""What the mathematics may import: arithmetic, and nothing that knows a network, a store or a clock."""

import ast
import subprocess
import sys
from pathlib import Path

import pytest

import scoring

FOLDER = Path(scoring.__file__).parent
FILES = sorted(FOLDER.rglob("*.py"))
CLOCKS = {"time", "datetime", "timeit", "calendar", "sched", "zoneinfo"}
IO = {
    "asyncio",
    "socket",
    "ssl",
    "http",
    "urllib",
    "subprocess",
    "threading",
    "multiprocessing",
    "sqlite3",
    "logging",
    "os",
}
# tomli_w writes text from a dict: it is to policies what tomllib is, which the standard library has.
ALLOWED = ({"numpy", "scipy", "scoring", "tomli_w"} | sys.stdlib_module_names) - CLOCKS - IO


def imported(source: str) -> set[str]:
    """Return the top-level names of all modules that a source imports, inside functions too."""
    names: set[str] = set()
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            names |= {alias.name.split(".")[0] for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            names.add("." if node.level else str(node.module).split(".")[0])
    return names


@pytest.mark.parametrize("file", FILES, ids=lambda file: file.name)
def test_scoring_imports_only_arithmetic(file: Path) -> None:
    """A file of scoring imports numpy, scipy, scoring and the standard library without clocks, sockets and threads."""
    assert imported(file.read_text(encoding="utf-8")) <= ALLOWED


@pytest.mark.parametrize("file", FILES, ids=lambda file: file.name)
def test_scoring_imports_by_name_only(file: Path) -> None:
    """No file of scoring gets round the check by importing a module from a string."""
    called = {node.id for node in ast.walk(ast.parse(file.read_text(encoding="utf-8"))) if isinstance(node, ast.Name)}
    assert not called & {"__import__", "importlib", "eval", "exec"}


def test_the_check_finds_what_it_looks_for() -> None:
    """Imports at the top, inside functions, of submodules and relative ones are all seen."""
    source = (
        "import redis.asyncio\ndef now():\n    from time import time\n    from . import edges\n    import numpy as np\n"
    )
    assert imported(source) == {"redis", "time", ".", "numpy"}
    assert not imported(source) <= ALLOWED


def test_importing_scoring_loads_neither_the_service_nor_scipy() -> None:
    """All modules of scoring load without web framework, Redis client or service, and leave scipy for the first fit."""
    modules = [f"scoring.{file.stem}" for file in FILES if file.stem != "__init__"]
    script = "import importlib, sys\n" + "".join(f"importlib.import_module({name!r})\n" for name in modules)
    script += "print(*{name.split('.')[0] for name in sys.modules})"
    loaded = subprocess.run(
        [sys.executable, "-c", script], check=True, capture_output=True, text=True, cwd=FOLDER.parent
    )
    assert not set(loaded.stdout.split()) & {"scipy", "service", "redis", "fastapi", "pydantic", "starlette", "uvicorn"}
