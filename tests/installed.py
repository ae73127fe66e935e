"""Try the installed package: `tests/run` starts this with a clean environment's interpreter, outside the checkout.

The environment's folder of programs is all there is on PATH, so the embedded store must find the server that came with
the installation.
"""

import json
import subprocess
import sys
import tomllib
from pathlib import Path
from typing import Any

import scoring
import service

PROGRAMS = Path(sys.executable).parent
BEATS = ("renewal", "learning", "mute", "withdrawal", "tomorrow")


def run(*arguments: str) -> str:
    """Run the installed command with nothing else on PATH and give what it prints."""
    environment = {"PATH": str(PROGRAMS), "TERM": "dumb"}
    command = [str(PROGRAMS / "waxwane"), *arguments]
    return subprocess.run(command, env=environment, check=True, stdout=subprocess.PIPE, text=True, timeout=300).stdout


def files_of(package: Path) -> set[str]:
    """List a package's files, without what the interpreter makes of them."""
    return {
        path.relative_to(package).as_posix() for path in package.rglob("*") if path.is_file() and path.suffix != ".pyc"
    }


def check_files(checkout: Path) -> None:
    """See that every file of the packages was installed: modules, scripts, policies and type markers."""
    for package in (service, scoring):
        installed = Path(str(package.__file__)).parent
        assert checkout not in installed.parents, f"{installed} is the checkout, not an installation"
        missing = files_of(checkout / installed.name) - files_of(installed)
        assert not missing, f"not in the wheel: {sorted(missing)}"


def check_version(checkout: Path) -> None:
    """See that the command tells the project's version."""
    project: dict[str, Any] = tomllib.loads((checkout / "pyproject.toml").read_text())["project"]
    told = run("--version").strip()
    assert told == f"waxwane {project['version']}", told


def check_demo() -> None:
    """See that a whole service works: embedded store, scripts, events over HTTP, feeds, a policy."""
    shown: dict[str, Any] = json.loads(run("demo", "--json"))
    assert shown["first_feed"]["complete"], shown["first_feed"]
    assert [beat["name"] for beat in shown["beats"]] == list(BEATS), shown["beats"]


def main() -> None:
    """Run all checks; the argument is the checkout's folder."""
    checkout = Path(sys.argv[1])
    check_files(checkout)
    check_version(checkout)
    check_demo()


if __name__ == "__main__":
    main()
