"""Prometheus metrics: requests as they are answered; queue, durations and verdicts from the tables when asked for."""

import threading
import time
from collections.abc import Callable, Iterator
from datetime import datetime

from prometheus_client import CollectorRegistry, Counter, Histogram, generate_latest
from prometheus_client.core import GaugeMetricFamily
from prometheus_client.registry import Collector
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from service.store.database import Database
from service.workflows.gauge import Ended, ended_since, gauge, last_verdict

SECONDS = (0.005, 0.01, 0.025, 0.05, 0.1, 0.25, 0.5, 1, 2.5, 5, 10, 30, 60, 300, 600)


class Metrics:
    """The numbers of one process."""

    def __init__(self) -> None:
        self.registry = CollectorRegistry()
        self.requests = Counter(
            "leastbend_requests_total", "Requests answered.", ["operation", "status"], registry=self.registry
        )
        self.answering = Histogram(
            "leastbend_request_seconds",
            "Time until the answer began.",
            ["operation"],
            buckets=SECONDS,
            registry=self.registry,
        )
        self.verdicts = Counter("leastbend_verdicts_total", "Verdicts issued.", ["verdict"], registry=self.registry)
        self.durations = Histogram(
            "leastbend_job_seconds",
            "Time that succeeded jobs spent in each stage: waiting (until the last start) and running.",
            ["stage"],
            buckets=SECONDS,
            registry=self.registry,
        )
        self._seen = 0
        self._counting = threading.Lock()

    def begin(self, database: Database) -> None:
        """When the process starts: verdicts from now on are counted, those from before are not."""
        self._seen = last_verdict(database)

    def exposition(self, database: Database, now: Callable[[], datetime]) -> bytes:
        """The text format, with what the tables say now."""
        self._count(database)
        registry = CollectorRegistry()
        registry.register(_Queue(database, now()))
        return generate_latest(self.registry) + generate_latest(registry)

    def _count(self, database: Database) -> None:
        """Jobs that ended since the last look, or since `begin`. Of two who ask at once, one counts."""
        with self._counting:
            for one in ended_since(database, self._seen):
                self._add(one)
                self._seen = one.sequence

    def _add(self, one: Ended) -> None:
        self.verdicts.labels(one.verdict).inc()
        self.durations.labels("waiting").observe((one.started_at - one.queued_at).total_seconds())
        self.durations.labels("running").observe((one.finished_at - one.started_at).total_seconds())


class _Queue(Collector):
    def __init__(self, database: Database, now: datetime) -> None:
        self._database = database
        self._now = now

    def collect(self) -> Iterator[GaugeMetricFamily]:
        """Prometheus's way to ask."""
        found = gauge(self._database, self._now)
        jobs = GaugeMetricFamily("leastbend_jobs", "Jobs that have not ended.", labels=["state"])
        jobs.add_metric(["queued"], found.queued)
        jobs.add_metric(["running"], found.running)
        yield jobs
        yield GaugeMetricFamily(
            "leastbend_oldest_queued_seconds",
            "Age of the job that waits longest; 0 if none does.",
            found.oldest_seconds,
        )
        yield GaugeMetricFamily(
            "leastbend_notifications_waiting", "Notifications of ended jobs not yet delivered.", found.notifications
        )


class Measured:
    """Counts requests by operation, not by path, which callers make up."""

    def __init__(self, app: ASGIApp, metrics: Metrics) -> None:
        self.app = app
        self.metrics = metrics

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """ASGI."""
        if scope["type"] != "http":
            await self.app(scope, receive, send)
            return
        began = time.perf_counter()

        async def measured(message: Message) -> None:
            if message["type"] == "http.response.start":
                operation = getattr(scope.get("route"), "operation_id", None) or "none"
                self.metrics.requests.labels(operation, str(message["status"])).inc()
                self.metrics.answering.labels(operation).observe(time.perf_counter() - began)
            await send(message)

        await self.app(scope, receive, measured)
