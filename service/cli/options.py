"""Command-line options: one for each setting, for every command that asks for them."""

import functools
import inspect
from collections.abc import Callable, Sequence
from typing import Annotated, Any

import typer
from pydantic.fields import FieldInfo

from service.settings import Settings, variable

OVERRIDES = "overrides"

Json = Annotated[bool, typer.Option("--json", help="Print JSON in place of a table.")]


def with_settings(command: Callable[..., None], names: Sequence[str] | None = None) -> Callable[..., None]:
    """Give a command an option for each setting.

    Args:
        command: a function with a parameter `overrides`, which receives the options by name, None where not given;
            its other parameters stay options and arguments of its own.
        names: the settings that get an option; None for all.

    Returns:
        The function to register.

    """
    chosen = list(Settings.model_fields) if names is None else list(names)
    own = [p for p in inspect.signature(command, eval_str=True).parameters.values() if p.name != OVERRIDES]

    @functools.wraps(command)
    def run(**given: Any) -> None:  # noqa: ANN401  each parameter has its own type
        overrides = {name: given.pop(name) for name in chosen}
        command(**{OVERRIDES: overrides}, **given)

    parameters = [p.replace(kind=inspect.Parameter.KEYWORD_ONLY) for p in own]
    parameters += [_parameter(name) for name in chosen]
    run.__signature__ = inspect.Signature(parameters)  # type: ignore[attr-defined]  # inspect reads it
    run.__annotations__ = {p.name: p.annotation for p in parameters}
    return run


def _parameter(name: str) -> inspect.Parameter:
    field = Settings.model_fields[name]
    option = typer.Option("--" + name.replace("_", "-"), help=_help(name, field), rich_help_panel="Settings")
    return inspect.Parameter(
        name, inspect.Parameter.KEYWORD_ONLY, default=None, annotation=Annotated[str | None, option]
    )


def _help(name: str, field: FieldInfo) -> str:
    extra = field.json_schema_extra
    allowed = extra["allowed"] if isinstance(extra, dict) else ""
    # A path of this installation would say nothing to the reader.
    default = "the built-in policy" if name == "policies" else field.default
    shown = "" if default in (None, ()) else f" Default {default}."
    description = str(field.description)
    return f"{description[0].upper()}{description[1:]} ({allowed}).{shown} {variable(name)}"
