"""PostgreSQL as a way of ranking: started from the installed programs, everything cached, one SELECT a read."""

import glob
import importlib.util
import os
import pwd
import shutil
import signal
import subprocess
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import numpy as np

from loadtests.peers.ways import Top, Way
from loadtests.peers.world import TOP, Columns

_SELECT = """
SELECT s.post, s.score + %(stranger)s * c.sum AS score
FROM (SELECT e.post, sum((t.affinity - %(stranger)s) * e.weight * exp((e.at - %(now)s) * %(rate)s)) AS score
      FROM tie t JOIN edge e ON e.person = t.person GROUP BY e.post) s
JOIN crowd c ON c.post = s.post
ORDER BY score DESC LIMIT %(top)s
"""


def programs() -> Path | None:
    """Find the folder with the server's programs."""
    found = shutil.which("postgres")
    folders = [Path(found).resolve().parent] if found else []
    folders += [Path(folder) for folder in sorted(glob.glob("/usr/lib/postgresql/*/bin"), reverse=True)]  # noqa: PTH207
    return next((folder for folder in folders if (folder / "initdb").exists()), None)


def _as_other_user() -> dict[str, int]:
    """PostgreSQL does not run as root; give the arguments that let it run as somebody else."""
    if os.geteuid() != 0:
        return {}
    for name in ("postgres", "nobody"):
        try:
            entry = pwd.getpwnam(name)
        except KeyError:
            continue
        return {"user": entry.pw_uid, "group": entry.pw_gid}
    return {}


@contextmanager
def server() -> Iterator[str | None]:
    """Run a server on a unix socket in a folder of its own; gives how to reach it, None where there are no programs."""
    folder = programs()
    if folder is None or importlib.util.find_spec("psycopg") is None:
        yield None
        return
    user = _as_other_user()
    with tempfile.TemporaryDirectory() as home:
        data = Path(home) / "data"
        if user:
            os.chown(home, user["user"], user["group"])
        quiet = {"stdout": subprocess.DEVNULL, "stderr": subprocess.DEVNULL}
        command = [folder / "initdb", "-D", data, "-U", "bench", "-A", "trust", "--no-sync", "--locale=C", "-E", "UTF8"]
        subprocess.run(command, check=True, cwd=home, **user, **quiet)  # type: ignore[call-overload]
        settings = ["-c", "listen_addresses=", "-c", f"unix_socket_directories={home}", "-c", "fsync=off"]
        settings += ["-c", "shared_buffers=512MB", "-c", "work_mem=64MB", "-c", "jit=off"]
        child = subprocess.Popen([folder / "postgres", "-D", data, *settings], cwd=home, **user, **quiet)  # type: ignore[call-overload]
        try:
            yield f"host={home} user=bench dbname=postgres"
        finally:
            child.send_signal(signal.SIGINT)  # the fast stop: it does not wait for its clients
            child.wait()


def way(address: str, world: Columns) -> Way:
    """Load a world, and read it with one SELECT over a covering index."""
    import psycopg  # noqa: PLC0415  only where there is a server

    connection = _connected(address)
    with connection.cursor() as cursor:
        cursor.execute("CREATE TABLE edge (person int, post int, weight float8, at float8)")
        cursor.execute("CREATE TABLE tie (person int PRIMARY KEY, affinity float8)")
        cursor.execute("CREATE TABLE crowd (post int PRIMARY KEY, sum float8)")
        columns = (world.person, world.post, world.weight, world.at_ms)
        _copy(cursor, "edge", np.column_stack([column.astype(np.float64) for column in columns]), whole=2)
        tied = world.tied()
        _copy(cursor, "tie", np.column_stack((tied, world.affinity[tied])), whole=1)
        _copy(cursor, "crowd", np.column_stack((np.arange(len(world.posts)), world.crowd())), whole=1)
        cursor.execute("CREATE INDEX ON edge (person) INCLUDE (post, weight, at)")
        cursor.execute("VACUUM ANALYZE")
    rate = float(np.log(2.0)) / world.policy.curve.half_life_ms  # type: ignore[union-attr]
    values = {"stranger": world.stranger, "now": float(world.t_ms), "rate": rate, "top": TOP}

    def read() -> list[tuple[int, float]]:
        found: list[tuple[int, float]] = connection.execute(_SELECT, values, prepare=True).fetchall()
        return found

    def top() -> Top:
        return [(world.posts[post], score) for post, score in read()]

    assert isinstance(connection, psycopg.Connection)  # noqa: S101  for the type checker
    return Way("PostgreSQL, one SELECT", read, top, connection.close)


def _connected(address: str):  # type: ignore[no-untyped-def]  # noqa: ANN202  a psycopg connection
    import time  # noqa: PLC0415

    import psycopg  # noqa: PLC0415

    until_s = time.monotonic() + 30.0
    while True:
        try:
            return psycopg.connect(address, autocommit=True)
        except psycopg.OperationalError:
            if time.monotonic() > until_s:
                raise
            time.sleep(0.1)


def _copy(cursor, table: str, rows: np.ndarray, *, whole: int) -> None:  # type: ignore[no-untyped-def,type-arg]  # noqa: ANN001
    with cursor.copy(f"COPY {table} FROM STDIN") as copy:
        for row in rows.tolist():
            copy.write_row([int(value) if place < whole else value for place, value in enumerate(row)])
