"""The benchmark beside other ways: they answer the same, and its figures have their fields."""

from contextlib import contextmanager
from typing import Any

import pytest

from loadtests.peers import postgres, report, side_by_side
from loadtests.peers.side_by_side import COLD, FLOOR, WARM, close_enough
from loadtests.peers.world import Shape, columns
from service.embedded import EmbeddedServer

TINY = Shape(ties=12, edges=10, own_posts=5, strangers=40, crowd_edges=300)


@contextmanager
def no_programs() -> Any:
    """Stand for a machine without PostgreSQL."""
    yield None


async def test_all_ways_agree_and_are_timed(tmp_path: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    """In a tiny world every way gives the same top, each is timed, and one that is not there is said to be so."""
    monkeypatch.setattr(postgres, "server", no_programs)
    monkeypatch.setattr(side_by_side.served, "read_feeds", lambda *_: {"p50_us": 1.0, "p99_us": 2.0, "cpu_us": 1.0})
    with EmbeddedServer(tmp_path / "data") as server:
        figures = await side_by_side.compare(server, TINY, rounds=1)
    assert figures["edges"] == 120
    assert figures["agreed"] == [FLOOR, "Redis alone, ZUNIONSTORE", "plain Python"]
    assert figures["rows"]["PostgreSQL, one SELECT"] is None
    for name in (FLOOR, COLD, WARM, "Redis alone, ZUNIONSTORE", "plain Python"):
        assert set(figures["rows"][name]) == {"cpu_us", "reads", "least_us", "p50_us", "p90_us"}
    targets = report.ratios(
        {
            "reads": figures,
            "growth": [
                {"ties": 300, "edges": 18_000, "cold_us": 1.0},
                {"ties": 3_000, "edges": 180_000, "cold_us": 11.0},
            ],
            "ingest": [{"batch": 500, "events_per_s": 9.0}],
            "import": {"events_per_s": 5.0, "peak_mib": 6.0},
            "memory": {"bytes_per_edge_of_rows": 7.0, "bytes_per_post": 8.0},
        }
    )
    by_name = {name: value for name, value, _ in targets}
    assert by_name["cost per edge, 3,000 ties / 300 ties, cold"] == pytest.approx(1.1)
    assert by_name["PostgreSQL, one SELECT / waxwane, cold rows"] is None
    assert by_name["Redis alone, ZUNIONSTORE / waxwane, warm rows"] == pytest.approx(
        figures["rows"]["Redis alone, ZUNIONSTORE"]["p50_us"] / figures["rows"][WARM]["p50_us"]
    )


def test_answers_that_differ_are_noticed() -> None:
    """A score off by more than a billionth, another post or a missing one is no agreement; ties may swap."""
    top = [("a", 3.0), ("b", 2.0), ("c", 2.0)]
    assert close_enough(top, [("a", 3.0 + 1e-10), ("c", 2.0), ("b", 2.0)])
    assert not close_enough(top, [("a", 3.0 + 1e-8), ("b", 2.0), ("c", 2.0)])
    assert not close_enough(top, [("b", 3.0), ("a", 2.0), ("c", 2.0)])
    assert not close_enough(top, top[:2])
    assert not close_enough(top, [("a", 3.0), ("b", 2.0), ("b", 2.0)])


def test_the_columns_hold_the_world() -> None:
    """Every edge of the reference world is there, and the reader's ties are friends or followed."""
    world = columns(TINY, 1_777_885_200_000)
    assert len(world.post) == 12 * 10 + 40 * 4 + 300
    assert sorted(set(world.affinity.tolist())) == [0.0, 1.0, 2.0]
    assert len(world.tied()) == 12
