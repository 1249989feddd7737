"""What a monitoring system may read about one process; each app has its own registry."""

from collections.abc import Callable

from prometheus_client import CollectorRegistry, Counter, Gauge, Histogram, generate_latest
from prometheus_client.exposition import CONTENT_TYPE_LATEST

METHODS = frozenset({"GET", "HEAD", "OPTIONS", "POST", "QUERY", "PUT", "PATCH", "DELETE"})
SECONDS = (0.001, 0.0025, 0.005, 0.01, 0.025, 0.05, 0.1, 0.25, 0.5, 1.0, 2.5, 5.0, 10.0, 30.0, 60.0)
NO_ROUTE = "none"


class Metrics:
    """Counters of one process, labelled by method, path template, status and code: by no word of a caller."""

    content_type = CONTENT_TYPE_LATEST

    def __init__(self) -> None:
        self.registry = CollectorRegistry()
        self._duration = Histogram(
            "http_server_request_duration_seconds",
            "Time from the first byte of a request to the last byte of its answer.",
            ("method", "route", "status"),
            registry=self.registry,
            buckets=SECONDS,
        )
        self._refused = Counter(
            "tailrace_refused", "Requests answered by a problem.", ("reason",), registry=self.registry
        )
        self._scenarios = Counter(
            "tailrace_scenarios", "Scenarios behind the figures of all answers.", registry=self.registry
        )
        self._seen: dict[tuple[str, str, int], Histogram] = {}

    def watch(self, *, computing: Callable[[], float], waiting: Callable[[], float]) -> None:
        """Read these two counts whenever the metrics are asked for."""
        Gauge("tailrace_calculations_in_flight", "Calculations that compute now.", registry=self.registry).set_function(
            computing
        )
        Gauge(
            "tailrace_calculations_waiting", "Calculations that wait for a place.", registry=self.registry
        ).set_function(waiting)

    def answered(self, method: str, route: str | None, status: int, seconds: float) -> None:
        """Count one answer."""
        key = (method if method in METHODS else "other", route or NO_ROUTE, status)
        histogram = self._seen.get(key)
        if histogram is None:
            histogram = self._seen[key] = self._duration.labels(*map(str, key))
        histogram.observe(seconds)

    def refused(self, reason: str) -> None:
        """Count one problem by its code."""
        self._refused.labels(reason).inc()

    def computed(self, scenarios: int) -> None:
        """Count the scenarios behind one answer."""
        self._scenarios.inc(scenarios)

    def exposition(self) -> bytes:
        """Return the text that a monitoring system reads."""
        return generate_latest(self.registry)
