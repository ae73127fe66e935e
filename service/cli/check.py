"""`waxwane check`: look at settings, policies and store, and say what to do."""

import dataclasses
import os
import time
from collections.abc import Iterator

import redis
import typer
from redis.backoff import NoBackoff
from redis.retry import Retry

from service.addresses import mask_secrets, store_kind
from service.cli.options import Json, with_settings
from service.cli.output import print_json, print_table
from service.data_folder import DataFolder, is_held
from service.embedded import socket_url
from service.findings import (
    Finding,
    clock_finding,
    embedded_findings,
    environment_findings,
    memory_findings,
    persistence_findings,
    policy_findings,
    version_finding,
)
from service.settings import Settings, SettingsError, variable

_TIMEOUT_S = 2
_STYLES = {"ok": "green", "warning": "yellow", "error": "bold red"}


def register(app: typer.Typer) -> None:
    """Add the command."""
    app.command("check")(with_settings(check))


def check(overrides: dict[str, str | None], *, json: Json = False) -> None:
    """Look at settings, policies and store; exit status 1 where there is an error. It changes nothing."""
    findings = list(find(overrides))
    if json:
        print_json([dataclasses.asdict(finding) for finding in findings])
    else:
        rows = [(finding.level, finding.what, finding.advice) for finding in findings]
        print_table(("", "what", "what to do"), rows, [_STYLES[finding.level] for finding in findings])
    raise typer.Exit(int(any(finding.level == "error" for finding in findings)))


def find(overrides: dict[str, str | None]) -> Iterator[Finding]:
    """Look at everything, with these options in force."""
    yield from environment_findings(os.environ)
    try:
        settings = Settings.load(overrides)
    except SettingsError as error:
        yield from (Finding("error", problem, "correct the setting") for problem in error.problems)
        return
    yield Finding("ok", "settings are valid")
    yield from policy_findings(settings)
    if settings.store_kind == "embedded":
        yield from embedded_findings(settings)
    url = _running(settings)
    if url is not None:
        yield from store_findings(url)


def _running(settings: Settings) -> str | None:
    if settings.store_kind != "embedded":
        return settings.store
    folder = DataFolder(settings.data.absolute())
    socket = folder.socket() if is_held(folder) else None
    return socket_url(socket) if socket else None


def store_findings(store: str) -> Iterator[Finding]:
    """Ask a running server about itself.

    Args:
        store: its URL.

    """
    shown = mask_secrets(store)
    if store_kind(store) == "cluster":
        yield Finding("error", f"store {shown}: a cluster is not supported yet", "name one server")
        return
    try:
        with redis.Redis.from_url(
            store, socket_timeout=_TIMEOUT_S, socket_connect_timeout=_TIMEOUT_S, retry=Retry(NoBackoff(), 0)
        ) as client:
            client.ping()
            yield Finding("ok", f"store {shown} answers")
            yield from _server_findings(client)
    except (redis.RedisError, ValueError) as error:
        advice = f"start it, or correct {variable('store')}"
        yield Finding("error", f"store {shown} does not answer: {mask_secrets(str(error))}", advice)


def _server_findings(client: redis.Redis) -> Iterator[Finding]:
    info = client.info()
    yield version_finding(info)
    yield from persistence_findings(info, _appendfsync(client))
    yield from memory_findings(info)
    before_ms = time.time() * 1_000
    seconds, micros = client.time()
    here_ms = (before_ms + time.time() * 1_000) / 2
    yield clock_finding(seconds * 1_000 + micros // 1_000, round(here_ms))


def _appendfsync(client: redis.Redis) -> str | None:
    # Hosted servers often forbid CONFIG.
    try:
        return client.config_get("appendfsync").get("appendfsync")
    except redis.ResponseError:
        return None
