"""
Figures of the running service in the text format of Prometheus.

One process counts in memory. Several that serve the same port share a folder of small files, one set for each, named by
PROMETHEUS_MULTIPROC_DIR before they start: whichever is asked adds all of them up. Counters and histograms of a process
that ended stay in the sums, as counters must; what is open or waiting ends with its process.
"""

import os
from collections.abc import Iterable, Sequence
from contextlib import suppress
from datetime import datetime
from pathlib import Path

from prometheus_client import CONTENT_TYPE_LATEST, CollectorRegistry, Counter, Gauge, Histogram, generate_latest
from prometheus_client.metrics_core import GaugeMetricFamily, Metric
from prometheus_client.multiprocess import MultiProcessCollector, mark_process_dead

from service.domain.notices import NoticeState
from service.ingest.commands import Outcome, Posted, Settled
from service.storage.notices import OutboxFigures

MEDIA_TYPE = CONTENT_TYPE_LATEST
FOLDER_VARIABLE = "PROMETHEUS_MULTIPROC_DIR"

SECONDS = (0.001, 0.0025, 0.005, 0.01, 0.025, 0.05, 0.1, 0.25, 0.5, 1.0, 2.5, 5.0, 10.0)
GROUP_SIZES = tuple(2.0**power for power in range(11))
DELIVERY_OUTCOMES = {NoticeState.DELIVERED: "delivered", NoticeState.WAITING: "failed", NoticeState.DEAD: "dead"}
METHODS = {"GET", "HEAD", "POST", "PUT", "PATCH", "DELETE", "OPTIONS"}


class Metrics:
    """What this process counts; safe from every thread."""

    def __init__(self) -> None:
        own = self._registry = CollectorRegistry()
        self._requests = Counter(
            "sprt_requests", "Requests by method, route and status.", ["method", "route", "status"], registry=own
        )
        self._seconds = Histogram(
            "sprt_request_seconds",
            "From the head of a request to the end of its answer.",
            ["method", "route"],
            registry=own,
            buckets=SECONDS,
        )
        self._waiting = Gauge(
            "sprt_commands_waiting",
            "Commands that wait to be written or are being written.",
            registry=own,
            multiprocess_mode="livesum",
        )
        self._groups = Histogram(
            "sprt_group_commands", "Commands committed together.", registry=own, buckets=GROUP_SIZES
        )
        self._commits = Histogram(
            "sprt_commit_seconds", "From the beginning of a transaction to its commit.", registry=own, buckets=SECONDS
        )
        self._failures = Counter("sprt_commit_failures", "Transactions that did not go through.", registry=own)
        self._observations = Counter("sprt_observations", "Observations stored, overrun included.", registry=own)
        self._decisions = Counter("sprt_decisions", "Decisions by kind of subject.", ["kind", "decision"], registry=own)
        self._deliveries = Counter(
            "sprt_notice_deliveries",
            "Attempts to deliver a notice: delivered, failed and tried again, or failed for the last time.",
            ["outcome"],
            registry=own,
        )
        self._streams = Gauge(
            "sprt_event_streams", "Open streams of events.", registry=own, multiprocess_mode="livesum"
        )

    def request(self, method: str, route: str, status: str, seconds: float) -> None:
        """A request was answered."""
        method = method if method in METHODS else "other"
        self._requests.labels(method, route, status).inc()
        self._seconds.labels(method, route).observe(seconds)

    def queued(self) -> None:
        """A command waits."""
        self._waiting.inc()

    def answered(self) -> None:
        """It waits no longer."""
        self._waiting.dec()

    def grouped(self, outcomes: Sequence[Outcome | BaseException], seconds: float) -> None:
        """A group was committed."""
        self._groups.observe(len(outcomes))
        self._commits.observe(seconds)
        for outcome in outcomes:
            if isinstance(outcome, Posted) and not outcome.is_replay:
                self._posted(outcome)
            elif isinstance(outcome, Settled) and outcome.is_recorded:
                self._deliveries.labels(DELIVERY_OUTCOMES[outcome.notice.state]).inc()

    def failed(self) -> None:
        """A group was not."""
        self._failures.inc()

    def streaming(self, change: int) -> None:
        """Streams were opened, or ended where `change` is below 0."""
        self._streams.inc(change)

    def text(self) -> bytes:
        """All figures; of all processes where several share a folder."""
        folder = os.environ.get(FOLDER_VARIABLE)
        if folder is None:
            return generate_latest(self._registry)
        _forget_dead(Path(folder))
        shared = CollectorRegistry()
        MultiProcessCollector(shared, path=folder)  # type: ignore[no-untyped-call]
        return generate_latest(shared)

    def _posted(self, posted: Posted) -> None:
        self._observations.inc(posted.last_sequence - posted.first_sequence + 1)
        decided = posted.test.state.decided
        if decided is not None and posted.first_sequence <= decided.sequence <= posted.last_sequence:
            self._decisions.labels(posted.test.subject.kind.value, posted.test.state.decision.value).inc()


class _OutboxCollector:
    """Figures that all processes share, for they are those of the database at the moment of the question."""

    def __init__(self, outbox: OutboxFigures, now: datetime) -> None:
        self._outbox, self._now = outbox, now

    def collect(self) -> Iterable[Metric]:
        """Each figure."""
        since = self._outbox.oldest_waiting_at
        age = 0.0 if since is None else max(0.0, (self._now - since).total_seconds())
        yield GaugeMetricFamily(
            "sprt_oldest_notice_seconds", "Age of the oldest notice that waits; 0 without any.", value=age
        )
        yield GaugeMetricFamily("sprt_notices_waiting", "Notices that wait.", value=self._outbox.waiting)
        yield GaugeMetricFamily("sprt_notices_dead", "Notices that were given up.", value=self._outbox.dead)


def outbox_text(outbox: OutboxFigures, now: datetime) -> bytes:
    """The figures of the outbox, to stand beside those of the processes."""
    registry = CollectorRegistry()
    registry.register(_OutboxCollector(outbox, now))
    return generate_latest(registry)


def _forget_dead(folder: Path) -> None:
    """What was open in a process that was killed is open no more."""
    for number in {int(file.stem.rpartition("_")[2]) for file in folder.glob("gauge_live*_*.db")}:
        if not _is_alive(number):
            with suppress(FileNotFoundError):  # another process did the same
                mark_process_dead(number, str(folder))  # type: ignore[no-untyped-call]


def _is_alive(number: int) -> bool:
    try:
        os.kill(number, 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        return True
    return True
