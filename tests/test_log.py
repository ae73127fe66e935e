"""Logs: form, level, the HTTP server's lines, ids and exceptions."""

import json
import logging

import pytest
import structlog

from service import log


def lines(capsys: pytest.CaptureFixture[str]) -> list[str]:
    """What was logged; nothing goes to standard output."""
    captured = capsys.readouterr()
    assert captured.out == ""
    return captured.err.splitlines()


def test_json_line(capsys: pytest.CaptureFixture[str]) -> None:
    """A message is one JSON object with its time, level, logger and fields."""
    log.configure("info", "json")
    structlog.get_logger("shed").info("feed ranked", k=20, took_ms=1.5)
    [line] = lines(capsys)
    entry = json.loads(line)
    assert entry.pop("timestamp").endswith("Z")
    assert entry == {"event": "feed ranked", "level": "info", "logger": "shed", "k": 20, "took_ms": 1.5}


def test_text_line(capsys: pytest.CaptureFixture[str]) -> None:
    """The form for people holds the same fields."""
    log.configure("info", "text")
    structlog.get_logger("shed").info("feed ranked", k=20)
    [line] = lines(capsys)
    assert "feed ranked" in line
    assert "k=20" in line


def test_level(capsys: pytest.CaptureFixture[str]) -> None:
    """Messages below the level are not written, of the standard library's loggers neither."""
    log.configure("warning", "json")
    structlog.get_logger("shed").info("quiet")
    logging.getLogger("uvicorn.error").info("quiet")
    structlog.get_logger("shed").warning("heard")
    assert [json.loads(line)["event"] for line in lines(capsys)] == ["heard"]


def test_http_server_lines(capsys: pytest.CaptureFixture[str]) -> None:
    """The HTTP server's messages have the same form; its access log is off."""
    log.configure("info", "json")
    logging.getLogger("uvicorn.error").info("Started server process [%d]", 7, extra={"color_message": "x"})
    logging.getLogger("uvicorn.access").info("GET /v1/feeds/joel")
    [line] = lines(capsys)
    entry = json.loads(line)
    assert (entry["event"], entry["logger"]) == ("Started server process [7]", "uvicorn.error")
    assert "color_message" not in entry


def test_ids_only_at_debug(capsys: pytest.CaptureFixture[str]) -> None:
    """Ids of people and posts are written at debug level only."""
    log.configure("debug", "json")
    structlog.get_logger("shed").info("feed", reader="joel", posts=["p1"], k=1)
    structlog.get_logger("shed").debug("feed", reader="joel")
    first, second = (json.loads(line) for line in lines(capsys))
    assert "reader" not in first
    assert "posts" not in first
    assert first["k"] == 1
    assert second["reader"] == "joel"


@pytest.mark.parametrize("form", ["json", "text"])
def test_exception_without_locals(capsys: pytest.CaptureFixture[str], form: str) -> None:
    """A traceback is written without the values of variables."""
    log.configure("info", form)
    hidden = "pass" + "word-7"
    try:
        [][len(hidden)]
    except IndexError:
        structlog.get_logger("shed").exception("failed")
    text = "\n".join(lines(capsys))
    assert "IndexError: list index out of range" in text
    assert hidden not in text


def test_second_configuration_replaces_the_first(capsys: pytest.CaptureFixture[str]) -> None:
    """Configuring twice writes each message once."""
    log.configure("info", "json")
    log.configure("info", "json")
    structlog.get_logger("shed").info("once")
    assert len(lines(capsys)) == 1
