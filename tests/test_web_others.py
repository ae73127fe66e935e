"""People, policies, health and metrics over HTTP."""

import pytest
from fastapi.testclient import TestClient
from prometheus_client.parser import text_string_to_metric_families
from structlog.testing import capture_logs

from service.errors import StoreUnavailable
from service.web.app import create_app
from service.web.examples import EVENTS, POLICY_TOML
from service.web.metrics import MULTIPROCESS_DIR
from tests.fake_engine import FakeEngine
from tests.web_client import client, client_of, engine, is_problem

__all__ = ["client", "engine"]


def samples(client: TestClient, name: str) -> dict[tuple[str, ...], float]:
    """Read one metric's samples, by the values of their labels."""
    families = text_string_to_metric_families(client.get("/metrics").text)
    found = [sample for family in families for sample in family.samples if sample.name == name]
    return {tuple(sample.labels.values()): sample.value for sample in found}


def test_a_person_is_exported(client: TestClient) -> None:
    """What is stored about a person is returned as the engine has it."""
    client.post("/v1/events", json=list(EVENTS.values()))
    assert client.get("/v1/people/mina").json() == {"person": "mina", "events": ["e1", "e5"]}


def test_exposures_are_lines(client: TestClient, engine: FakeEngine) -> None:
    """What was shown is newline-delimited JSON; where to go on and how much are checked."""
    answer = client.get("/v1/exposures?after=5-1&count=7")
    assert answer.headers["content-type"].startswith("application/x-ndjson")
    assert answer.text == '{"id":"1-1","reader":"joel"}\n'
    assert engine.asked[-1][0] == ("5-1", 7)
    for query, field in (("after=x", "after"), ("count=1001", "count"), ("k=1", "k")):
        assert is_problem(client.get(f"/v1/exposures?{query}"), 422)["errors"][0]["field"] == field


def test_a_person_with_a_slash(client: TestClient) -> None:
    """A person's id is percent-encoded too."""
    assert client.get("/v1/people/a%2Fb").json() == {"person": "a/b", "events": []}


def test_policies_are_listed(client: TestClient) -> None:
    """Each loaded policy is listed with what is certified about it."""
    assert client.get("/v1/policies").json() == {
        "policies": [{"name": "allotments", "default": True, "exact": True, "error": 0.0, "settings": {}, "toml": ""}]
    }


@pytest.mark.parametrize("content_type", ["application/toml", "text/plain; charset=utf-8", None])
def test_a_policy_is_loaded(client: TestClient, content_type: str | None) -> None:
    """A policy comes as TOML and is answered with what was loaded."""
    headers = {} if content_type is None else {"Content-Type": content_type}
    response = client.put("/v1/policies/allotments", content=POLICY_TOML.encode(), headers=headers)
    assert (response.status_code, response.json()["name"]) == (200, "allotments")
    assert response.json()["toml"] == POLICY_TOML


def test_a_wrong_policy_is_refused_by_line(client: TestClient) -> None:
    """A policy with an error is refused with the line and the reason."""
    text = POLICY_TOML.replace("comment = 1.0", "comment = -1.0")
    errors = is_problem(client.put("/v1/policies/allotments", content=text.encode()), 422)["errors"]
    assert [(error["field"], error["line"]) for error in errors] == [("weights.comment", 5)]
    assert "-1.0" in errors[0]["reason"]


def test_a_policy_of_another_media_type(client: TestClient) -> None:
    """A policy in JSON is 415."""
    assert is_problem(client.put("/v1/policies/a", json={}), 415)["errors"][0]["value"] == "application/json"


def test_a_policy_that_is_not_utf8(client: TestClient) -> None:
    """A policy that is not UTF-8 is 400 and the byte is named."""
    [error] = is_problem(client.put("/v1/policies/a", content=b"ab\xff"), 400)["errors"]
    assert error == {"field": "body", "value": "byte 0xff at 2", "allowed": "TOML in UTF-8"}


def test_a_policy_has_a_limit(client: TestClient) -> None:
    """A policy of more than 64 KiB is 413."""
    is_problem(client.put("/v1/policies/a", content=b"#" * 65_537), 413)


@pytest.mark.parametrize("path", ["/v1/people/joel", "/v1/policies"])
def test_no_parameters(client: TestClient, path: str) -> None:
    """Where there are no parameters a query is refused by name."""
    assert is_problem(client.get(f"{path}?full=1"), 422)["errors"][0]["field"] == "full"


def test_the_engine_runs_with_the_application(engine: FakeEngine) -> None:
    """The engine is started before the first call and closed after the last."""
    with client_of(engine):
        assert engine.running
    assert not engine.running


def test_ready_and_alive(client: TestClient) -> None:
    """A process whose store answers is alive and ready."""
    assert client.get("/livez").json() == {"status": "ok"}
    assert client.get("/readyz").json() == {"status": "ok"}


def test_alive_without_its_store(client: TestClient, engine: FakeEngine) -> None:
    """A process whose store is away is alive and not ready."""
    engine.failure = StoreUnavailable()
    assert client.get("/livez").status_code == 200
    assert is_problem(client.get("/readyz"), 503)["title"] == "The store is unavailable"


def test_draining_is_not_ready(engine: FakeEngine) -> None:
    """A process that is going away is alive and not ready."""
    app = create_app(engine)
    with TestClient(app) as client:
        app.state.waxwane.draining = True
        assert client.get("/livez").status_code == 200
        assert is_problem(client.get("/readyz"), 503)["title"] == "Not ready"


def test_requests_are_counted_by_template(client: TestClient) -> None:
    """Requests are counted by the template of their path, never by an id in it."""
    for path in ("/v1/feeds/joel", "/v1/feeds/mina", "/v1/feeds/a/b", "/v1/feeds/joel?k=0"):
        client.get(path)
    assert samples(client, "waxwane_http_requests_total") == {
        ("GET", "/v1/feeds/{reader}", "200"): 2,
        ("GET", "/v1/feeds/{reader}", "422"): 1,
        ("GET", "unmatched", "404"): 1,
    }
    assert samples(client, "waxwane_http_request_duration_seconds_count")["/v1/feeds/{reader}",] == 3


def test_odd_methods_are_counted_as_one(client: TestClient) -> None:
    """A method that nobody knows adds no label of its own."""
    client.request("HARVEST", "/livez")
    assert samples(client, "waxwane_http_requests_total") == {("other", "/livez", "405"): 1}


def test_failures_are_counted(client: TestClient, engine: FakeEngine) -> None:
    """An unforeseen error is counted as a 500."""
    engine.failure = RuntimeError()
    with capture_logs():
        client.get("/v1/policies")
    assert samples(client, "waxwane_http_requests_total") == {("GET", "/v1/policies", "500"): 1}


def test_events_are_counted(client: TestClient) -> None:
    """Events are counted by type and by what became of them."""
    client.post("/v1/events", json=[*EVENTS.values(), EVENTS["tie"], {"id": "x"}])
    counted = samples(client, "waxwane_events_total")
    assert counted["applied", "tie"] == counted["duplicate", "tie"] == counted["rejected", "unknown"] == 1


def test_metrics_have_the_text_format(client: TestClient) -> None:
    """Prometheus text format 0.0.4: the content type says so and the last line ends."""
    response = client.get("/metrics")
    assert response.headers["content-type"] == "text/plain; version=0.0.4; charset=utf-8"
    assert response.text.endswith("\n")


def test_metrics_of_several_processes(
    client: TestClient, monkeypatch: pytest.MonkeyPatch, tmp_path_factory: pytest.TempPathFactory
) -> None:
    """Where processes share a folder the page is put together from it."""
    monkeypatch.setenv(MULTIPROCESS_DIR, str(tmp_path_factory.mktemp("metrics")))
    client.get("/livez")
    assert client.get("/metrics").text == ""
