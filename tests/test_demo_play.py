"""`waxwane demo` from start to end, with a real service over HTTP."""

import contextlib
import json
import os
import signal
import subprocess
import sys
import urllib.request
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from typer.testing import CliRunner

from service.cli.main import build
from tests.polling import until

ROOT = Path(__file__).parent.parent
COMMAND = [sys.executable, "-c", "from service.cli.main import main; main()", "demo"]
TIMEOUT_S = 120


def environment(temporary: Path, **more: str) -> dict[str, str]:
    """Variables for a demo whose temporary files lie in a folder of the test."""
    return {"PATH": os.environ["PATH"], "TMPDIR": str(temporary), "COLUMNS": "80", "LANG": "C.UTF-8", **more}


def run(temporary: Path, *arguments: str, **more: str) -> subprocess.CompletedProcess[str]:
    """Run a demo to its end."""
    return subprocess.run(
        [*COMMAND, *arguments],
        capture_output=True,
        text=True,
        cwd=ROOT,
        env=environment(temporary, **more),
        timeout=TIMEOUT_S,
        check=False,
    )


@pytest.fixture(scope="module")
def temporary(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder for temporary files."""
    return tmp_path_factory.mktemp("tmp")


@pytest.fixture(scope="module")
def told(temporary: Path) -> dict[str, Any]:
    """What a demo shows, as JSON; settings of another service in the environment do not reach it."""
    done = run(temporary, "--json", WAXWANE_STORE="redis://127.0.0.1:1", WAXWANE_MAX_BATCH="1")
    assert (done.returncode, done.stderr) == (0, "")
    document: dict[str, Any] = json.loads(done.stdout)
    return document


def beat(told: dict[str, Any], name: str) -> dict[str, Any]:
    """One beat of the story."""
    [found] = [one for one in told["beats"] if one["name"] == name]
    return dict(found)


def posts(feed: dict[str, Any]) -> list[str]:
    """The posts of a feed, best first."""
    return [item["post"] for item in feed["items"]]


def test_first_feed(told: dict[str, Any]) -> None:
    """The first feed is full and exact, its best first, and each post's reasons add up to its score."""
    feed = told["first_feed"]
    assert (told["people"], len(feed["items"]), feed["complete"]) == (320, 8, True)
    assert told["events"] > 12_000
    scores = [item["score"] for item in feed["items"]]
    assert scores == sorted(scores, reverse=True)
    for item in feed["items"]:
        # The explanation is read some milliseconds after the feed.
        assert sum(one["points"] for one in item["reasons"]) == pytest.approx(item["score"], rel=1e-4)
        assert item["author"] != told["reader"]


def test_story_is_whole(told: dict[str, Any]) -> None:
    """Five beats are told, each with what was sent, and each feed is exact."""
    assert [one["name"] for one in told["beats"]] == ["renewal", "learning", "mute", "withdrawal", "tomorrow"]
    assert [len(one["events"]) for one in told["beats"]] == [1, 5, 1, 1, 0]
    assert all(one["feed"]["complete"] for one in told["beats"])


def test_renewed_post_climbs(told: dict[str, Any]) -> None:
    """A friend's comment brings an old post from below into sight; its score grows by affinity times weight."""
    one = beat(told, "renewal")
    [item] = [item for item in one["feed"]["items"] if item["post"] in one["about"]]
    assert item["was_rank"] > 8 >= item["rank"]
    assert item["age_ms"] > 20 * 3_600_000
    # A friend's affinity is 2 at least, and a comment with a photo is worth 2.
    assert item["score"] - item["was_score"] >= 3.99


def test_new_post_of_a_liked_author_climbs(told: dict[str, Any]) -> None:
    """After three likes and a share the author's new post stands higher than it entered."""
    one = beat(told, "learning")
    [item] = [item for item in one["feed"]["items"] if item["post"] in one["about"]]
    assert item["rank"] < item["was_rank"]
    assert [event.get("kind") for event in one["events"]] == [None, "like", "like", "like", "share"]


def test_muted_author_is_gone(told: dict[str, Any]) -> None:
    """The author had a post in sight and has none there after the mute."""
    one = beat(told, "mute")
    author = one["events"][0]["target"]
    before = beat(told, "learning")["feed"]
    assert author in {item["author"] for item in before["items"]}
    for later in ("mute", "withdrawal", "tomorrow"):
        assert author not in {item["author"] for item in beat(told, later)["feed"]["items"]}
    assert {post["post"] for post in one["left"]} >= {
        item["post"] for item in before["items"] if item["author"] == author
    }


def test_withdrawn_post_is_gone(told: dict[str, Any]) -> None:
    """The post was in sight and is not there after its author withdrew it."""
    [post] = beat(told, "withdrawal")["about"]
    assert post in posts(beat(told, "mute")["feed"])
    assert post not in posts(beat(told, "withdrawal")["feed"])
    assert [one["rank"] for one in beat(told, "withdrawal")["left"] if one["post"] == post] == [None]


def test_tomorrow_a_quarter_is_left(told: dict[str, Any]) -> None:
    """Two half-lives ahead each score is a quarter, or a little less where affinity was learned."""
    for item in beat(told, "tomorrow")["feed"]["items"]:
        assert 0.235 < item["score"] / item["was_score"] <= 0.25


def test_nothing_stays_behind(told: dict[str, Any], temporary: Path) -> None:
    """After the demo its service does not answer and its temporary folder is gone."""
    assert list(temporary.iterdir()) == []
    with pytest.raises(OSError, match="refused"):
        urllib.request.urlopen(told["url"] + "/livez", timeout=5)  # noqa: S310  an address of our own


def test_text_reads_well_without_colour(tmp_path: Path) -> None:
    """In 80 columns without a terminal the whole text has no escape codes, no long lines and no traceback."""
    done = run(tmp_path, "--k", "5", "--people", "300")
    assert (done.returncode, done.stderr) == (0, "")
    assert "\x1b" not in done.stdout
    assert max(map(len, done.stdout.splitlines())) <= 80
    headings = [line for line in done.stdout.splitlines() if line and not line.startswith(" ")]
    assert headings[0] == "waxwane demo: 300 allotment gardeners and their week"
    assert [line[:2] for line in headings[2:7]] == ["1.", "2.", "3.", "4.", "5."]
    assert headings[7:] == ["How to go on"]


@contextlib.contextmanager
def started(temporary: Path, *arguments: str) -> Iterator[subprocess.Popen[str]]:
    """Run a demo in the background; it is killed where the test fails to end it."""
    with subprocess.Popen(
        [*COMMAND, *arguments],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        cwd=ROOT,
        env=environment(temporary),
    ) as process:
        try:
            yield process
        finally:
            process.kill()


def test_keep_stays_up_until_told(tmp_path: Path) -> None:
    """With --keep the service answers after the story; at Ctrl-C all ends, status 0, and the data given stays."""
    data, scratch = tmp_path / "data", tmp_path / "tmp"
    scratch.mkdir()
    with started(scratch, "--keep", "--people", "300", "--data", str(data)) as process:
        assert process.stdout is not None
        shown: list[str] = []
        while not shown or "waxwane --help" not in shown[-1]:
            shown.append(process.stdout.readline())
            assert shown[-1], "the output ended early"
        url = next(line.split("=")[1].strip() for line in shown if "FEED=" in line)
        with urllib.request.urlopen(url, timeout=10) as answer:  # noqa: S310  an address of our own
            assert json.load(answer)["items"]
        process.send_signal(signal.SIGINT)
        assert process.wait(30) == 0
    assert list(scratch.iterdir()) == []
    assert (data / "appendonlydir").is_dir()


def test_stop_midway_leaves_nothing(tmp_path: Path) -> None:
    """SIGTERM while events load ends the service, removes the temporary folder and gives status 130."""
    with started(tmp_path) as process:
        until(lambda: list(tmp_path.glob("waxwane-demo-*/data/appendonlydir")))
        process.send_signal(signal.SIGTERM)
        _, errors = process.communicate(timeout=30)
        assert (process.returncode, errors) == (130, "\nStopped; the service has ended.\n")
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["--reader", "nobody"], "reader 'nobody' is not allowed; allowed: one of the 320 people, such as "),
        (["--data", str(ROOT)], f"data '{ROOT}' is not allowed; allowed: a new or an empty folder"),
    ],
)
def test_refused_wishes(tmp_path: Path, arguments: list[str], message: str) -> None:
    """A reader who is nobody, or a folder that holds something, is refused with status 2 before anything starts."""
    done = run(tmp_path, *arguments)
    assert (done.returncode, done.stdout) == (2, "")
    assert done.stderr.startswith(f"waxwane: {message}")


def test_service_that_cannot_start_is_told(tmp_path: Path) -> None:
    """Where the service does not start, its own reason is shown and nothing stays behind."""
    done = run(tmp_path, WAXWANE_REDIS_BINARY="/no/such/program")
    assert done.returncode == 2
    assert done.stderr.startswith(
        "waxwane: the service did not start:\nwaxwane: redis_binary: /no/such/program does not"
    )
    assert list(tmp_path.iterdir()) == []


def test_too_few_people_are_refused() -> None:
    """Fewer than 300 people are refused, and the message says how many are allowed."""
    result = CliRunner().invoke(build(), ["demo", "--people", "299"], env={"COLUMNS": "200"})
    assert result.exit_code == 2
    assert "300" in result.output
