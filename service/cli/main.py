"""The command `waxwane`."""

import importlib
import importlib.metadata
from typing import Annotated

import typer

from service.errors import WaxwaneError

# Each module has `register(app)`, which adds its commands; heavy imports belong inside the commands.
MODULES = (
    "service.cli.serve",
    "service.cli.demo",
    "service.cli.import_",
    "service.cli.feed",
    "service.cli.check",
)

USAGE_ERROR = 2


def _show_version(wanted: bool) -> None:  # noqa: FBT001  typer passes the value so
    if wanted:
        typer.echo(f"waxwane {importlib.metadata.version('waxwane')}")
        raise typer.Exit


Version = Annotated[
    bool, typer.Option("--version", callback=_show_version, is_eager=True, help="Print the version, and end.")
]


def _root(*, version: Version = False) -> None:
    """Rank feeds: events in over HTTP, each reader's exact top posts out."""


def build() -> typer.Typer:
    """Build the application with every module's commands."""
    app = typer.Typer(no_args_is_help=True, pretty_exceptions_show_locals=False, add_completion=False)
    app.callback()(_root)
    for name in MODULES:
        importlib.import_module(name).register(app)
    return app


def main() -> None:
    """Run the command line; an error that waxwane raises on purpose is one message and exit status 2."""
    try:
        build()()
    except WaxwaneError as error:
        typer.echo(f"waxwane: {error}", err=True)
        raise SystemExit(USAGE_ERROR) from None
