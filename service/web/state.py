"""What an application holds while it runs."""

from dataclasses import dataclass, field
from typing import cast

from fastapi import FastAPI, Request

from service.web.metrics import WebMetrics
from service.web.port import FeedEngine, Limits, WebSettings


@dataclass(slots=True)
class WebState:
    """The parts that handlers use; `draining` turns readiness off before the process goes."""

    engine: FeedEngine
    limits: WebSettings = field(default_factory=Limits)
    metrics: WebMetrics = field(default_factory=WebMetrics)
    draining: bool = False


def put_state(app: FastAPI, state: WebState) -> None:
    """Give an application its parts."""
    app.state.waxwane = state


def state_of(request: Request) -> WebState:
    """Find the parts of the application that handles a request."""
    return cast("WebState", request.app.state.waxwane)
