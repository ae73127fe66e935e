"""Compile the passes in `scoring/passes/` into `scoring/_passes.so`.

Runs by itself when the project is built or installed (a build hook of hatchling), and by hand after a change:
`python build_passes.py`. Takes the compiler that `CC` names, else `cc`, `gcc` or `clang` from PATH, else the one in the
package `ziglang`, which the build asks for only where PATH has none.
"""

import hashlib
import os
import shutil
import subprocess
import sys
import sysconfig
from pathlib import Path
from typing import Any

ROOT = Path(__file__).parent
SOURCES = ROOT / "scoring" / "passes"
LIBRARY = ROOT / "scoring" / "_passes.so"
FLAGS = ("-std=c11", "-O3", "-Wall", "-Wextra", "-ffp-contract=off", "-fno-math-errno", "-shared", "-fPIC")


def digest() -> str:
    """Give the digest of the sources."""
    found = hashlib.sha256()
    for path in sorted(SOURCES.glob("*.[ch]")):
        found.update(path.name.encode() + b"\0" + path.read_bytes() + b"\0")
    return found.hexdigest()[:16]


def on_path() -> list[str] | None:
    """Find a compiler on this machine."""
    wanted = [os.environ["CC"]] if os.environ.get("CC") else ["cc", "gcc", "clang"]
    return next(([found] for name in wanted if (found := shutil.which(name))), None)


def build() -> Path:
    """Compile, and put the library in its place in one step."""
    compiler = on_path() or [sys.executable, "-m", "ziglang", "cc"]
    fresh = LIBRARY.with_name(f"_passes.{os.getpid()}.so")
    sources = [str(path) for path in sorted(SOURCES.glob("*.c"))]
    command = [*compiler, *FLAGS, f'-DBUILT_FROM="{digest()}"', "-o", str(fresh), *sources, "-lm"]
    done = subprocess.run(command, capture_output=True, text=True, check=False)  # noqa: S603  its own sources
    if done.returncode != 0:
        raise SystemExit(f"{' '.join(command)} failed:\n{done.stdout}{done.stderr}")
    fresh.replace(LIBRARY)
    return LIBRARY


def wheel_tag() -> str:
    """Name the platform of the wheel; the library does not depend on the version of Python."""
    return f"py3-none-{sysconfig.get_platform().replace('-', '_').replace('.', '_')}"


try:
    from hatchling.builders.hooks.plugin.interface import BuildHookInterface
except ImportError:  # by hand, without the build's tools
    pass
else:

    class PassesHook(BuildHookInterface[Any]):
        """Compiles while a wheel is built, or the project is installed to be edited."""

        def dependencies(self) -> list[str]:
            """Ask for a compiler where this machine has none."""
            return [] if on_path() else ["ziglang>=0.15"]

        def initialize(self, version: str, build_data: dict[str, Any]) -> None:  # noqa: ARG002  the hook's signature
            """Compile, and make the wheel one of this platform."""
            build()
            build_data["pure_python"] = False
            build_data["tag"] = wheel_tag()
            build_data["artifacts"].append("scoring/_passes.so")


if __name__ == "__main__":
    print(build())  # noqa: T201  a command's output
