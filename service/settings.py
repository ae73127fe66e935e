"""Settings: command-line options override environment variables, which override defaults."""

import difflib
import os
from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Any, Literal, NamedTuple, Self

from pydantic import AfterValidator, BeforeValidator, Field, PrivateAttr, ValidationError
from pydantic_settings import BaseSettings, NoDecode, SettingsConfigDict

from scoring.durations import parse_ms
from service.addresses import ALLOWED_STORES, EMBEDDED, StoreKind, check_store, mask_secrets, store_kind
from service.errors import WaxwaneError

PREFIX = "WAXWANE_"
BUILT_IN_POLICY = Path(__file__).parent / "policies" / "allotments.toml"

_MIN_RETENTION_MS = 3_600_000
_MAX_RETENTION_MS = 3_650 * 86_400_000


class SettingsError(WaxwaneError):
    """One or more settings have a value that is not allowed.

    Args:
        problems: one sentence for each setting at fault.

    """

    def __init__(self, problems: list[str]) -> None:
        super().__init__("\n".join(problems))
        self.problems = problems


class SettingRow(NamedTuple):
    """A setting in force: its value as text without secrets, and where the value came from."""

    name: str
    value: str
    origin: str


def _list(value: object) -> object:
    return tuple(part.strip() for part in value.split(",") if part.strip()) if isinstance(value, str) else value


def _lower(value: object) -> object:
    return value.lower() if isinstance(value, str) else value


def _retention(text: str) -> str:
    if not _MIN_RETENTION_MS <= parse_ms(text) <= _MAX_RETENTION_MS:
        raise ValueError(text)
    return text


def _half_lives(texts: tuple[str, ...]) -> tuple[str, ...]:
    half_lives_ms = [parse_ms(text) for text in texts]
    if half_lives_ms != sorted(set(half_lives_ms)):
        raise ValueError(texts)
    return texts


def _setting(default: object, description: str, allowed: str) -> Any:  # noqa: ANN401  a default of any field's type
    return Field(default=default, description=description, json_schema_extra={"allowed": allowed})


Ms = Annotated[int, Field(ge=1, le=600_000)]
Folder = Annotated[Path, AfterValidator(Path.expanduser)]


class Settings(BaseSettings):
    """Everything that can be set. Use `Settings.load`, which knows where each value came from."""

    model_config = SettingsConfigDict(
        env_prefix=PREFIX, env_ignore_empty=True, frozen=True, extra="forbid", hide_input_in_errors=True
    )
    _origins: dict[str, str] = PrivateAttr(default_factory=dict)

    store: Annotated[str, AfterValidator(check_store)] = _setting(EMBEDDED, "where the state is kept", ALLOWED_STORES)
    data: Folder = _setting(Path("waxwane-data"), "folder of the embedded store", "a folder's path")
    redis_binary: Folder | None = _setting(None, "server program of the embedded store", "path of a program")
    appendfsync: Annotated[Literal["everysec", "always"], BeforeValidator(_lower)] = _setting(
        "everysec", "when the embedded store forces its file to disk", "everysec or always"
    )
    host: Annotated[str, Field(min_length=1)] = _setting("127.0.0.1", "address to listen on", "a name or an address")
    port: Annotated[int, Field(ge=0, le=65_535)] = _setting(
        8321, "port to listen on; 0 takes a free one", "an integer from 0 to 65535"
    )
    workers: Annotated[int, Field(ge=1, le=256)] = _setting(1, "processes that answer", "an integer from 1 to 256")
    policies: Annotated[tuple[Folder, ...], NoDecode, BeforeValidator(_list), Field(min_length=1)] = _setting(
        (BUILT_IN_POLICY,), "policy files to load", "paths of TOML files, with commas between them"
    )
    default_policy: Annotated[str, Field(min_length=1)] | None = _setting(
        None, "policy of a reader without one; not set: the first that is loaded", "the name of a loaded policy"
    )
    exposure: Annotated[Literal["off", "log"], BeforeValidator(_lower)] = _setting(
        "off", "whether what feeds have shown, and with what chance, is logged", "off or log"
    )
    budget_ms: Annotated[float, Field(gt=0, le=60_000, allow_inf_nan=False)] = _setting(
        50.0, "time that ranking a feed may take", "milliseconds above 0, up to 60000"
    )
    retention: Annotated[str, AfterValidator(_retention)] = _setting(
        "30d", "age at which edges may be forgotten", "a duration from 1h to 3650d, such as 30d"
    )
    bank: Annotated[tuple[str, ...], NoDecode, BeforeValidator(_list), AfterValidator(_half_lives)] = _setting(
        (), "half-lives of the running sums; not set: the built-in bank", "rising durations, such as 1h,6h,1d"
    )
    store_timeout_ms: Ms = _setting(500, "time a read of the store may take", "an integer from 1 to 600000")
    write_timeout_ms: Ms = _setting(5_000, "time a write to the store may take", "an integer from 1 to 600000")
    cache_mb: Annotated[int, Field(ge=0, le=65_536)] = _setting(
        64, "memory for rows that each worker remembers between reads, and again for posts", "megabytes, 0 to 65536"
    )
    max_body_bytes: Annotated[int, Field(ge=1_024, le=1 << 30)] = _setting(
        8 << 20, "largest request body", "an integer from 1024 to 1073741824"
    )
    max_batch: Annotated[int, Field(ge=1, le=100_000)] = _setting(
        1_000, "most events in one call", "an integer from 1 to 100000"
    )
    log_level: Annotated[Literal["debug", "info", "warning", "error", "critical"], BeforeValidator(_lower)] = _setting(
        "info", "least severe messages to log", "debug, info, warning, error or critical"
    )
    log_format: Annotated[Literal["json", "text"], BeforeValidator(_lower)] = _setting(
        "json", "form of the log", "json or text"
    )
    shutdown_grace_s: Annotated[int, Field(ge=0, le=3_600)] = _setting(
        10, "time that requests may take to finish at a stop", "an integer from 0 to 3600"
    )

    @classmethod
    def load(cls, overrides: Mapping[str, object] | None = None) -> Self:
        """Read the settings.

        Args:
            overrides: values given as options, by name; None stands for an option not given.

        Returns:
            The settings in force.

        Raises:
            SettingsError: a value is not allowed; every such setting is named.

        """
        given = {name: value for name, value in (overrides or {}).items() if value is not None}
        origins = _origins(given)
        try:
            settings = cls(**given)  # type: ignore[arg-type]  # validated by the model
        except ValidationError as error:
            raise SettingsError(_problems(error, given, origins)) from None
        settings._origins.update(origins)
        return settings

    @property
    def store_kind(self) -> StoreKind:
        """Which sort of store: embedded, single or cluster."""
        return store_kind(self.store)

    @property
    def retention_ms(self) -> int:
        """The retention in milliseconds."""
        return round(parse_ms(self.retention))

    @property
    def bank_half_lives_ms(self) -> tuple[float, ...]:
        """The bank's half-lives in milliseconds, rising; empty for the built-in bank."""
        return tuple(parse_ms(text) for text in self.bank)

    def origin(self, name: str) -> str:
        """Tell where a setting's value came from: `option`, `environment variable NAME` or `default`."""
        return self._origins.get(name, "default")

    def __repr_args__(self) -> list[tuple[str | None, Any]]:
        return [(row.name, row.value) for row in describe(self)]


def describe(settings: Settings) -> list[SettingRow]:
    """List the settings in force, passwords masked, with where each came from."""
    return [
        SettingRow(name, mask_secrets(_text(getattr(settings, name))), settings.origin(name))
        for name in Settings.model_fields
    ]


def to_environment(settings: Settings) -> dict[str, str]:
    """Write the settings as environment variables, for worker processes.

    Returns:
        A variable for every setting that has not its default. It holds the store's password, if there is one.

    """
    return {
        variable(name): _text(getattr(settings, name))
        for name, field in Settings.model_fields.items()
        if getattr(settings, name) != field.default or settings.origin(name) != "default"
    }


def variable(name: str) -> str:
    """Name the environment variable of a setting.

    >>> variable("port")
    'WAXWANE_PORT'

    """
    return PREFIX + name.upper()


def unknown_variables(environment: Mapping[str, str]) -> dict[str, str | None]:
    """Find variables that carry the prefix and name no setting.

    Args:
        environment: variables by name.

    Returns:
        For each one, the known variable it resembles, if any.

    >>> unknown_variables({"WAXWANE_PROT": "1", "WAXWANE_HOST": "::1", "HOME": "/"})
    {'WAXWANE_PROT': 'WAXWANE_PORT'}

    """
    prefixed = {name: name.upper().removeprefix(PREFIX).lower() for name in sorted(environment) if _is_ours(name)}
    return {name: _similar(short) for name, short in prefixed.items() if short not in Settings.model_fields}


def _is_ours(name: str) -> bool:
    return name.upper().startswith(PREFIX)


def _similar(name: str) -> str | None:
    similar = difflib.get_close_matches(name, Settings.model_fields, n=1)
    return variable(similar[0]) if similar else None


def _text(value: object) -> str:
    if isinstance(value, tuple):
        return ",".join(map(str, value))
    return "" if value is None else str(value)


def _origins(given: Mapping[str, object]) -> dict[str, str]:
    present = {name.upper(): name for name, value in os.environ.items() if value}
    origins = {
        name: f"environment variable {present[variable(name)]}"
        for name in Settings.model_fields
        if variable(name) in present
    }
    return origins | dict.fromkeys(given, "option")


def _problems(error: ValidationError, given: Mapping[str, object], origins: Mapping[str, str]) -> list[str]:
    names = dict.fromkeys(str(detail["loc"][0]) for detail in error.errors(include_input=False, include_url=False))
    return [_problem(name, given, origins) for name in names]


def _problem(name: str, given: Mapping[str, object], origins: Mapping[str, str]) -> str:
    field = Settings.model_fields.get(name)
    if field is None:
        return f"{name}: no such setting; allowed: {', '.join(Settings.model_fields)}"
    values = {key.upper(): value for key, value in os.environ.items()}
    value = given.get(name, values.get(variable(name)))
    extra = field.json_schema_extra
    allowed = extra["allowed"] if isinstance(extra, dict) else ""
    origin = origins.get(name, "default")
    return f"{name} {mask_secrets(str(value))!r} (from {origin}) is not allowed; allowed: {allowed}"
