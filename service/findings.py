"""What `waxwane check` looks at: each function returns findings and changes nothing."""

import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

from scoring.bank import DEFAULT_BANK, Bank, CurveError, fit
from scoring.policy import PolicyError, parse_policy
from service.data_folder import DataFolder, is_held
from service.server_binary import OLDEST_VERSION, ServerBinaryError, find_binary
from service.settings import Settings, unknown_variables, variable

Level = Literal["ok", "warning", "error"]

MAX_CLOCK_DIFFERENCE_MS = 1_000
MEMORY_WARNING_SHARE = 0.8


@dataclass(frozen=True, slots=True)
class Finding:
    """One thing looked at.

    Args:
        level: ok, warning or error.
        what: what was found.
        advice: what to do about it; empty where nothing need be done.

    """

    level: Level
    what: str
    advice: str = ""


def environment_findings(environment: Mapping[str, str]) -> Iterator[Finding]:
    """Report variables that carry the prefix and name no setting."""
    for name, similar in unknown_variables(environment).items():
        advice = f"did you mean {similar}?" if similar else "remove it; --print-settings lists the settings"
        yield Finding("warning", f"environment variable {name} names no setting", advice)


def policy_findings(settings: Settings) -> Iterator[Finding]:
    """Parse each policy file and fit its curve to the bank."""
    names = []
    for path in settings.policies:
        finding, name = _policy(path, settings)
        names += [name] if name else []
        yield finding
    if settings.default_policy is not None and settings.default_policy not in names:
        yield Finding(
            "error",
            f"default_policy {settings.default_policy!r} is in none of the policy files",
            f"allowed: {', '.join(names) or 'none, since no file holds a policy'}",
        )


def _policy(path: Path, settings: Settings) -> tuple[Finding, str | None]:
    bank = Bank(settings.bank_half_lives_ms) if settings.bank else DEFAULT_BANK
    try:
        policy = parse_policy(path.read_text(encoding="utf-8"))
        curve = fit(policy.curve, bank, settings.retention_ms)
    except PolicyError as error:
        return Finding("error", f"policy {path}: {error}", "correct the file"), None
    except CurveError as error:
        advice = f"choose another curve, or a {variable('bank')} that can follow it"
        return Finding("error", f"policy {path}: {error}", advice), None
    except (OSError, UnicodeDecodeError) as error:
        return Finding("error", f"policy {path} cannot be read: {error}", "name a TOML file in UTF-8"), None
    held = "exactly" if curve.exact else f"with an error up to {curve.error:.2g} of the value at age 0"
    return Finding("ok", f"policy {policy.name!r} in {path}: the bank holds its curve {held}"), policy.name


def embedded_findings(settings: Settings) -> Iterator[Finding]:
    """Report the embedded store's program and folder, without starting it."""
    try:
        yield Finding("ok", f"embedded store: server program {find_binary(settings.redis_binary)}")
    except ServerBinaryError as error:
        yield Finding("error", "embedded store: no usable server program", str(error))
    yield from _folder(DataFolder(settings.data.absolute()))


def _folder(folder: DataFolder) -> Iterator[Finding]:
    fault = folder.fault()
    if fault:
        yield Finding("error", fault, f"make it writable, or set {variable('data')} to another folder")
        return
    if not folder.path.exists():
        yield Finding("ok", f"data folder {folder.path} will be made at the first start")
        return
    if folder.path.stat().st_mode & 0o077:
        yield Finding("warning", f"data folder {folder.path} is open to other users", f"run chmod 700 {folder.path}")
    state = f"in use by process {folder.holder_pid()}" if is_held(folder) else "not in use"
    yield Finding("ok", f"data folder {folder.path} is writable and {state}")


def version_finding(server: Mapping[str, Any]) -> Finding:
    """Judge the server's version.

    Args:
        server: the reply of INFO.

    """
    # Valkey gives the Redis version it is compatible with, beside its own.
    name = "Valkey" if "valkey_version" in server else "Redis"
    text = str(server.get("valkey_version") or server.get("redis_version", "unknown"))
    compatible = tuple(map(int, re.findall(r"\d+", str(server.get("redis_version", "0")))[:3]))
    if compatible < OLDEST_VERSION[:2]:
        return Finding("error", f"server: {name} {text}", "use version 6.2 or newer")
    return Finding("ok", f"server: {name} {text}")


def persistence_findings(info: Mapping[str, Any], appendfsync: str | None) -> Iterator[Finding]:
    """Judge whether what is acknowledged outlives a crash of the server.

    Args:
        info: the reply of INFO.
        appendfsync: the server's configuration; None where it may not be read.

    """
    if not int(info.get("aof_enabled", 0)):
        yield Finding(
            "warning",
            "persistence: no append-only file; a crash of the server loses acknowledged events",
            "set appendonly yes on the server",
        )
    elif appendfsync == "no":
        yield Finding(
            "warning",
            "persistence: append-only file, forced to disk at the system's leisure",
            "set appendfsync everysec or always on the server",
        )
    else:
        yield Finding("ok", f"persistence: append-only file, appendfsync {appendfsync or 'not readable'}")
    for field, job in _JOBS.items():
        if info.get(field, "ok") != "ok":
            yield Finding("error", f"persistence: the last {job} failed", "see the server's log and its disk space")


_JOBS = {
    "aof_last_write_status": "write to the append-only file",
    "aof_last_bgrewrite_status": "rewrite of the append-only file",
    "rdb_last_bgsave_status": "snapshot",
}


def memory_findings(info: Mapping[str, Any]) -> Iterator[Finding]:
    """Judge the eviction policy and how much of the allowed memory is used.

    Args:
        info: the reply of INFO.

    """
    policy = str(info.get("maxmemory_policy", "unknown"))
    if policy == "noeviction":
        yield Finding("ok", "maxmemory-policy is noeviction")
    else:
        yield Finding(
            "error", f"maxmemory-policy is {policy}: the server may drop state", "set maxmemory-policy noeviction"
        )
    used, limit = int(info.get("used_memory", 0)), int(info.get("maxmemory", 0))
    if limit == 0:
        yield Finding("ok", f"memory: {_mib(used)} used, no maxmemory")
    elif used > limit * MEMORY_WARNING_SHARE:
        yield Finding(
            "warning", f"memory: {_mib(used)} used of {_mib(limit)}", "raise maxmemory, or shorten the retention"
        )
    else:
        yield Finding("ok", f"memory: {_mib(used)} used of {_mib(limit)}")


def clock_finding(server_ms: int, here_ms: int) -> Finding:
    """Judge the difference between the server's clock and this machine's.

    Args:
        server_ms: the server's time, Unix milliseconds.
        here_ms: the time here at the same moment, Unix milliseconds.

    """
    difference_ms = abs(server_ms - here_ms)
    what = f"clocks of the server and of this machine differ by {difference_ms} ms"
    if difference_ms > MAX_CLOCK_DIFFERENCE_MS:
        return Finding("warning", what, "set both by NTP")
    return Finding("ok", what)


def _mib(size_bytes: int) -> str:
    return f"{size_bytes / (1 << 20):.1f} MiB"
