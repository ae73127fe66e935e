"""What the documents say exists, exists; what they show is valid."""

import json
import os
import re
from functools import cache
from pathlib import Path
from typing import Any

import pytest
import typer.main
from pydantic import BaseModel
from starlette.routing import Route

from scoring.bank import DEFAULT_BANK, fit
from scoring.policy import parse_policy
from service.cli.main import build
from service.events import cloudevents
from service.events.model import EVENT_TYPES, parse_event
from service.settings import BUILT_IN_POLICY, PREFIX, Settings, variable
from service.web import schemas
from service.web.app import create_app
from service.web.metrics import WebMetrics
from tests import documents
from tests.documents import DOCUMENTS, ROOT, Block
from tests.fake_engine import FakeEngine

RETENTION_MS = 30 * 86_400_000
BASE_URL = "http://127.0.0.1:8321"
ANSWERS: dict[str, type[BaseModel]] = {
    "applied": schemas.EventsAnswer,
    "next": schemas.FeedPage,
    "items": schemas.PopularPage,
    "why": schemas.Post,
    "parts": schemas.ExplanationAnswer,
    "title": schemas.Problem,
}
NAMED = pytest.mark.parametrize("document", DOCUMENTS, ids=lambda document: document.name)


@cache
def options() -> dict[str, set[str]]:
    """List the options of each command; those of `waxwane` itself are under the empty name."""
    root = typer.main.get_command(build())
    found = {name: {opt for param in one.params for opt in param.opts} for name, one in root.commands.items()}
    return {**found, "": {opt for param in root.params for opt in param.opts} | {"--help"}}


@cache
def routes() -> dict[str, set[str]]:
    """List the methods of each address, with parameters in braces."""
    app = create_app(FakeEngine())
    found: dict[str, set[str]] = {"/openapi.json": {"GET"}}
    for path, methods in app.openapi()["paths"].items():
        found.setdefault(path, set()).update(method.upper() for method in methods)
    assert all(route.path in {"/openapi.json", *found} for route in app.routes if isinstance(route, Route))
    return found


def methods_at(path: str) -> set[str]:
    """List the methods of the address that a path leads to, none where it leads nowhere."""
    for template, methods in routes().items():
        if re.fullmatch(re.sub(r"\{\w+\}", "[^/]+", template), path):
            return methods
    return set()


def test_every_command_that_is_told_exists() -> None:
    """Every `waxwane` command in the documents exists, with each of its options."""
    told = list(documents.commands())
    assert len(told) > 10
    for document, words in told:
        name = words[0] if words and not words[0].startswith("-") else ""
        assert name in options(), f"{document.name}: waxwane {name}"
        given = {word.partition("=")[0] for word in words if word.startswith("--")}
        assert given <= options()[name], f"{document.name}: waxwane {' '.join(words)}"


@NAMED
def test_every_option_named_exists(document: Path) -> None:
    """Every option named in running text is one of some command."""
    for text in documents.code(document):
        if re.match("--[a-z]", text):
            assert any(text.split()[0] in each for each in options().values()), text


@NAMED
def test_every_variable_named_is_a_setting(document: Path) -> None:
    """Every environment variable with the prefix names a setting."""
    known = {variable(name) for name in Settings.model_fields}
    assert set(re.findall(rf"{PREFIX}[A-Z_]+", document.read_text())) <= known


@NAMED
def test_every_address_named_exists(document: Path) -> None:
    """Every method and address named in running text is one of the service."""
    for text in documents.code(document):
        method, _, path = text.partition(" ")
        if method.isupper() and path.startswith("/"):
            assert method in methods_at(path), text


@NAMED
def test_every_address_called_exists(document: Path) -> None:
    """Every address that an example calls is one of the service."""
    for address in re.findall(rf"{BASE_URL}(/[^\s'?]*)", document.read_text()):
        assert methods_at(address), address


def test_every_address_is_described() -> None:
    """Each method of each address of the service has its row in the description of the interface."""
    told = set(documents.code(ROOT / "docs" / "http.md"))
    for path, methods in routes().items():
        assert {f"{method} {path}" for method in methods} <= told


def test_every_metric_is_described() -> None:
    """The table of metrics names exactly those that the service has."""
    families = {family.name: family.type for family in WebMetrics().registry.collect()}
    own = {f"{name}_total" if kind == "counter" else name for name, kind in families.items()}
    assert {text for text in documents.code(ROOT / "docs" / "operations.md") if text.startswith("waxwane_")} == own


@pytest.mark.parametrize("name", documents.TABLES)
def test_generated_tables_are_current(name: str) -> None:
    """Tables taken from the code stand as the code has them; `python -m tests.documents` writes them."""
    assert documents.standing(name) == documents.table(name)


@pytest.mark.parametrize("block", documents.blocks("toml"), ids=str)
def test_policies_shown_are_valid(block: Block) -> None:
    """Every policy shown can be loaded as it is."""
    policy = parse_policy(block.text)
    assert fit(policy.curve, DEFAULT_BANK, RETENTION_MS, signed=True).error <= 0.005


def test_built_in_policy_is_shown_as_it_is() -> None:
    """The policy called as the built-in one is that one wherever it is shown, and is what a file may leave out."""
    shown = [parse_policy(block.text) for block in documents.blocks("toml")]
    built_in = parse_policy(BUILT_IN_POLICY.read_text())
    assert [policy for policy in shown if policy.name == built_in.name] == [built_in, built_in]
    least = parse_policy('name = "allotments"\n[weights]\nlike = 0.5\n').as_settings()
    assert {**built_in.as_settings(), "weights": {"like": 0.5}} == least


def check_json(value: Any) -> None:
    """Check an object as what its members make it: a CloudEvent, an event, or an answer."""
    if "specversion" in value:
        cloudevents.to_event(cloudevents.from_object(value))
    elif value.get("type") in EVENT_TYPES:
        parse_event(value)
    else:
        model = next(model for member, model in ANSWERS.items() if member in value)
        model.model_validate(value)


@pytest.mark.parametrize("block", documents.blocks("json"), ids=str)
def test_json_shown_is_valid(block: Block) -> None:
    """Every event shown is one that the service takes, and every answer has the shape of its kind."""
    check_json(json.loads(block.text))


def test_events_sent_by_examples_are_valid() -> None:
    """Every line of events that a shell example sends is an event, once the shell has put in the time."""
    lines = [line for block in documents.blocks("sh") for line in block.text.splitlines() if line.startswith("{")]
    assert len(lines) == 6
    for line in lines:
        check_json(json.loads(line.replace("$now", "2026-05-04T08:15:00Z")))


def test_every_event_type_has_an_example() -> None:
    """The description of the interface shows an event of each type."""
    shown = [json.loads(block.text) for block in documents.blocks("json") if block.document.name == "http.md"]
    assert {value["type"] for value in shown if value.get("type") in EVENT_TYPES} == set(EVENT_TYPES)


@NAMED
def test_files_named_exist(document: Path) -> None:
    """Every module, script, document and folder named in running text is in the checkout."""
    folders = ("service", "scoring", "tests", "loadtests", "docs")
    names = {path.name for folder in folders for path in (ROOT / folder).rglob("*.*")}
    for text in documents.code(document):
        if re.fullmatch(r"(?:\w+/)+[\w.]*", text) and not text.startswith("application/"):
            assert (ROOT / text).exists() or list(ROOT.glob(f"service/*/{text}")), text
        elif re.fullmatch(r"\w+\.(?:py|lua|md|toml)", text):
            assert text in names or (ROOT / text).exists(), text


@NAMED
def test_links_lead_somewhere(document: Path) -> None:
    """Every link leads to a file of the checkout, and to a heading that it has."""
    for target in re.findall(r"\]\(([^)]+)\)", documents.prose(document)):
        name, _, anchor = target.partition("#")
        file = document.parent / name if name else document
        assert file.exists(), target
        assert not anchor or anchor in documents.anchors(file), target


def test_the_readme_begins_with_the_job_and_the_two_commands() -> None:
    """The first paragraph says what the service does; then come the command that shows it and the one that tests it."""
    _, first, *_ = (ROOT / "README.md").read_text().split("\n\n")
    assert first.startswith("waxwane ranks feeds.")
    show, test = [block.text for block in documents.blocks("sh")][:2]
    assert show.endswith("waxwane demo\n")
    assert test == "bash tests/run\n"
    assert os.access(ROOT / "tests" / "run", os.X_OK)
