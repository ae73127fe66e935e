"""Prometheus metrics of the HTTP edge, for one process or several."""

import os
from collections.abc import Iterable
from functools import lru_cache
from typing import Final

from prometheus_client import CollectorRegistry, Counter, Histogram, disable_created_metrics, generate_latest
from prometheus_client.exposition import CONTENT_TYPE_PLAIN_0_0_4
from prometheus_client.multiprocess import MultiProcessCollector

CONTENT_TYPE: Final = CONTENT_TYPE_PLAIN_0_0_4
MULTIPROCESS_DIR: Final = "PROMETHEUS_MULTIPROC_DIR"
_DURATION_BUCKETS_S: Final = (0.001, 0.002, 0.005, 0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1.0, 2.0, 5.0)

# The time at which each counter began doubles the page, and nobody asks for it.
disable_created_metrics()  # type: ignore[no-untyped-call]


class WebMetrics:
    """The counters of one application.

    Args:
        registry: where they are kept; with several processes the page is put together from all of them.

    """

    def __init__(self, registry: CollectorRegistry | None = None) -> None:
        self.registry = registry or CollectorRegistry()
        requests = Counter(
            "waxwane_http_requests", "HTTP requests", ["route", "method", "status"], registry=self.registry
        )
        durations = Histogram(
            "waxwane_http_request_duration_seconds",
            "Time from arrival to the end of the answer",
            ["route"],
            buckets=_DURATION_BUCKETS_S,
            registry=self.registry,
        )
        events = Counter("waxwane_events", "Events by what became of them", ["type", "outcome"], registry=self.registry)
        # A lookup of labels costs more than the count itself.
        self._request = lru_cache(maxsize=1024)(requests.labels)
        self._duration = lru_cache(maxsize=256)(durations.labels)
        self._event = lru_cache(maxsize=256)(events.labels)

    def request(self, route: str, method: str, status: int, duration_s: float) -> None:
        """Count a request; `route` is the template of its path, never the path."""
        self._request(route, method, str(status)).inc()
        self._duration(route).observe(duration_s)

    def events(self, outcomes: Iterable[tuple[str, str]]) -> None:
        """Count events, each by its type and what became of it."""
        for kind, outcome in outcomes:
            self._event(kind, outcome).inc()

    def page(self) -> bytes:
        """Write the metrics page."""
        if MULTIPROCESS_DIR not in os.environ:
            return generate_latest(self.registry)
        registry = CollectorRegistry()
        MultiProcessCollector(registry)  # type: ignore[no-untyped-call]
        return generate_latest(registry)
