"""Real signatures as events: the rows of `tests/data/keyring-2014-2015.jsonl.gz`, described in its README.

`python -m tests.keyring OUT.ndjson[.gz]` writes them for `waxwane import`; start the service with
`WAXWANE_RETENTION` at `RETENTION`, since the window spans 16 months.
"""

import argparse
import gzip
import io
import json
import time
from collections.abc import Iterable, Iterator
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

Row = dict[str, Any]

FIXTURE = Path(__file__).parent / "data" / "keyring-2014-2015.jsonl.gz"
WINDOW_START_S = int(datetime(2014, 6, 1, tzinfo=UTC).timestamp())
WINDOW_END_S = int(datetime(2015, 10, 1, tzinfo=UTC).timestamp())
RETENTION = "500d"
POLICY_TOML = """\
name = "keyring"

[weights]
"post.identity" = 1.0
"cert.generic" = 1.0
"cert.casual" = 2.0
"cert.positive" = 3.0

[freshness]
curve = "half_life"
half_life = "7d"

[affinity]
stranger = 0.1
follow = 1.0
friend = 2.0
ceiling = 10.0
half_life = "30d"

[affinity.gain]

[explore]
temperature = 0.0

[arrange]
author_gap = 0

[seen]
factor = 1.0
"""


def rows() -> list[Row]:
    """Read the fixture's rows, oldest first; `time` in Unix seconds."""
    with gzip.open(FIXTURE, "rt", encoding="utf-8") as lines:
        return [json.loads(line) for line in lines]


def keyring_events(now_ms: int) -> Iterator[dict[str, Any]]:
    """Turn the window's rows into events, in order of time, all shifted so that the last happens at `now_ms`.

    V follows U from the moment V first signs an identity of U. What stood before the window stands from its
    start: identities that are signed or revoked in it, and ties by earlier signatures among the rows.

    Args:
        now_ms: Time of the last event, Unix milliseconds.
    """
    whole = rows()
    start_ms = WINDOW_START_S * 1000
    shift_ms = now_ms - max(row["time"] for row in whole) * 1000
    touched = {row["post"] for row in whole if row["type"] != "post" and row["time"] >= WINDOW_START_S}
    authors = {row["id"]: row["author"] for row in whole if row["type"] == "post"}
    followed: set[tuple[str, str]] = set()
    for index, row in enumerate(whole):
        inside = row["time"] >= WINDOW_START_S
        at = {"at": max(row["time"] * 1000, start_ms) + shift_ms}
        if row["type"] == "interaction" and (row["actor"], authors[row["post"]]) not in followed:
            pair = row["actor"], authors[row["post"]]
            followed.add(pair)
            yield _tie(*pair) | at
        if inside or (row["type"] == "post" and row["id"] in touched):
            yield {"id": f"keyring-{index}"} | _fields(row) | at


def _tie(actor: str, target: str) -> dict[str, Any]:
    named = {"actor": actor, "target": target, "relation": "follow"}
    return {"id": f"keyring-{actor}-{target}", "type": "tie"} | named


def _fields(row: Row) -> dict[str, Any]:
    if row["type"] == "post":
        named = {"actor": row["author"], "post": row["id"]}
        return {"type": "post", "form": "identity", "audience": "everyone", "topics": []} | named
    named = {"actor": row["actor"], "post": row["post"]}
    if row["type"] == "delete":
        return {"type": "withdraw"} | named
    return {"type": "interaction", "kind": row["kind"].replace("_", ".")} | named


def write(path: Path, events: Iterable[dict[str, Any]]) -> int:
    """Write events as newline-delimited JSON, compressed where the name ends in .gz, and count them."""
    lines = [json.dumps(event, separators=(",", ":")) + "\n" for event in events]
    content = "".join(lines).encode()
    path.write_bytes(_compress(content) if path.suffix == ".gz" else content)
    return len(lines)


def _compress(content: bytes) -> bytes:
    packed = io.BytesIO()
    with gzip.GzipFile(filename="", mode="wb", fileobj=packed, mtime=0) as stream:
        stream.write(content)
    return packed.getvalue()


def main(arguments: list[str] | None = None) -> None:
    """Write the events to the file named on the command line."""
    parser = argparse.ArgumentParser(prog="python -m tests.keyring", description="Write real signatures as events.")
    parser.add_argument("out", type=Path, help="file to write, .ndjson or .ndjson.gz")
    parser.add_argument("--now-ms", type=int, help="time of the last event, Unix milliseconds; default: now")
    parser.add_argument("--policy", type=Path, help="also write the policy to this file")
    given = parser.parse_args(arguments)
    now_ms = int(time.time() * 1000) if given.now_ms is None else given.now_ms
    write(given.out, keyring_events(now_ms))
    if given.policy is not None:
        given.policy.write_text(POLICY_TOML, encoding="utf-8")


if __name__ == "__main__":
    main()
