"""huey's consumer with our own worker, scheduler and signals: it starts, watches, restarts and stops the processes."""

import contextlib
import logging
import os
import signal
from typing import Any

from huey.consumer import Consumer, ProcessEnvironment, Scheduler, Worker
from sqlalchemy.exc import SQLAlchemyError

from service.errors import LeastbendError
from service.settings import Settings
from service.store.database import Database, open_database
from service.store.shared_clock import SharedClock
from service.store.transport import QueueAway, Transport
from service.worker.desk import Desk
from service.worker.heartbeat import Heartbeat
from service.worker.notifier import start_notifiers
from service.worker.process import die_with, end, is_gone, worker_name
from service.workflows.provenance import this_machine
from service.workflows.sweep import sweep

POLL_SECONDS = 0.01
AWAY_SECONDS = 0.5
HEALTH_SECONDS = 0.5
GRACEFUL = (signal.SIGTERM, signal.SIGINT, signal.SIGHUP)
INTERRUPT = signal.SIGUSR1  # from the consumer to its workers, when the time for a graceful stop is over

logger = logging.getLogger(__name__)


class JobWorker(Worker):  # type: ignore[misc]  # huey has no types
    """A message makes it look for a job; which one is the table's choice."""

    def __init__(self, settings: Settings, transport: Transport, **options: Any) -> None:
        super().__init__(**options)
        self._settings = settings
        self._transport = transport
        self._away = False
        self._desk: Desk | None = None
        self._clock: SharedClock | None = None

    def initialize(self) -> None:
        """In the new process: its own connections, its own heartbeat."""
        database = open_database(self._settings, durable=False)
        self._clock = clock = SharedClock(database)
        heartbeat = Heartbeat(self._settings, database, clock=clock)
        heartbeat.start()
        self._desk = Desk(self._settings, database, heartbeat, this_machine(), worker=worker_name(), clock=clock)

    @property
    def busy(self) -> bool:
        """Whether a job is in hand."""
        return self._desk is not None and self._desk.busy

    def loop(self, now: Any = None) -> None:  # noqa: ARG002 (huey's form)
        """One message, if there is one."""
        try:
            received = self._transport.receive()
        except QueueAway as error:
            if not self._away:
                logger.warning("the queue does not answer: %s", error)
            self._away = True
            if self._desk is None or not self._desk.work_once():  # the table is the truth: look there unasked
                self.stop_flag.wait(AWAY_SECONDS)
            return
        self._away = False
        if received and self._desk is not None:
            self._set_clock()
            self._desk.work_once()
        elif not self._transport.waits:
            self.stop_flag.wait(POLL_SECONDS)

    def _set_clock(self) -> None:
        if self._clock is not None:
            with contextlib.suppress(LeastbendError, SQLAlchemyError):  # the claim will meet the same, and say so
                self._clock.keep_right()


class Sweeper(Scheduler):  # type: ignore[misc]
    """huey's scheduler process, with the sweep instead of a schedule."""

    def __init__(self, settings: Settings, transport: Transport, **options: Any) -> None:
        super().__init__(**options)
        self._settings = settings
        self._transport = transport
        self._database: Database | None = None
        self._clock: SharedClock | None = None
        self.busy = False

    def initialize(self) -> None:
        """In the new process: its own connections."""
        self._database = open_database(self._settings, durable=False)
        self._clock = SharedClock(self._database)
        start_notifiers(self._settings)

    def loop(self, now: Any = None) -> None:
        """One sweep."""
        if self._database is not None and self._clock is not None:
            try:
                self._clock.keep_right()
                swept = sweep(
                    self._database, self._transport, self._settings, now=now or self._clock(), is_gone=is_gone, end=end
                )
                if swept.requeued or swept.timed_out or swept.given_up:
                    logger.warning("%s", swept)
            except (LeastbendError, SQLAlchemyError) as error:
                logger.warning("the sweep could not reach the database: %s", error)
        self.stop_flag.wait(self.interval)


class Children(ProcessEnvironment):  # type: ignore[misc]
    """Worker processes die with the consumer and leave stopping to it, also when a terminal signals the whole group."""

    def __init__(self) -> None:
        super().__init__(signal.SIGTERM, INTERRUPT)
        self._parent = os.getpid()

    def init_child(self, process: Any) -> None:
        """First thing in a new process."""

        def interrupt(_signal: int, _frame: Any) -> None:
            if process.busy:
                raise KeyboardInterrupt

        signal.signal(INTERRUPT, interrupt)
        for ignored in GRACEFUL:
            signal.signal(ignored, signal.SIG_IGN)
        die_with(self._parent)


class JobConsumer(Consumer):  # type: ignore[misc]
    """`run()` works until SIGTERM, SIGINT or SIGHUP, then lets running jobs finish; a second signal does not wait."""

    def __init__(self, settings: Settings, transport: Transport) -> None:
        self._settings = settings
        self._transport = transport
        super().__init__(
            transport.huey,
            workers=max(1, settings.workers),
            periodic=False,
            scheduler_interval=settings.sweep_seconds,
            worker_type="process",
            health_check_interval=HEALTH_SECONDS,
            shutdown_timeout=settings.stop_seconds,
            graceful_signal="TERM",
        )
        self._signal_actions = dict.fromkeys(GRACEFUL, (False, True))  # (restart, graceful)

    def get_environment(self, worker_type: str) -> Children:  # noqa: ARG002 (huey's form)
        """Always processes."""
        return Children()

    def run(self) -> None:
        """Until stopped. What does not stop in time is killed; the next sweep sees to its job."""
        super().run()
        for _, process in [*self.worker_threads, (None, self.scheduler)]:
            if process.is_alive():
                process.kill()
            process.join()

    def _create_worker(self) -> JobWorker:
        return JobWorker(
            self._settings,
            self._transport,
            huey=self.huey,
            stop_flag=self.stop_flag,
            default_delay=POLL_SECONDS,
            max_delay=POLL_SECONDS,
            backoff=1.0,
        )

    def _create_scheduler(self) -> Sweeper:
        return Sweeper(
            self._settings,
            self._transport,
            huey=self.huey,
            stop_flag=self.stop_flag,
            interval=self.scheduler_interval,
            periodic=False,
        )
