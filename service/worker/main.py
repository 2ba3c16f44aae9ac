"""Run the worker processes of one installation in the foreground."""

import gc
import logging

import threadpoolctl

from service.core.analysis import analyse
from service.core.observations import observe
from service.core.plan import Plan
from service.errors import LeastbendError
from service.logs import log_as_json
from service.settings import Settings
from service.store.codec import result_document
from service.store.database import open_database
from service.store.migrate import migrate
from service.store.transport import open_transport
from service.worker.consumer import JobConsumer
from service.worker.keeper import keep
from service.worker.process import die_with

EXIT_UNUSABLE = 3

logger = logging.getLogger(__name__)


def work(settings: Settings, *, parent: int | None = None) -> int:
    """Work until SIGTERM or SIGINT; answers the exit status. With `parent`, all processes die when it does."""
    if parent is not None:
        die_with(parent)
    log_as_json(settings.log_level)
    # One thread each: the processes are the parallelism, and sums come out the same however busy the machine is.
    threadpoolctl.threadpool_limits(1)
    try:
        database = open_database(settings, durable=True)
        migrate(database)
        database.close()
        transport = open_transport(settings)
    except LeastbendError as error:
        logger.error("%s", error.message)
        return EXIT_UNUSABLE
    transport.close()  # each process opens its own
    warm_up()
    return keep(lambda: JobConsumer(settings, transport).run())


def warm_up() -> None:
    """Load and use the numeric libraries once, so that the processes forked from this one start warm."""
    x = [float(i) for i in range(12)]
    y = [1.0 + 2.0 * value + 0.01 * (-1) ** i for i, value in enumerate(x)]
    result_document(analyse(observe(x, y), Plan()))
    gc.collect()
    gc.freeze()  # shared pages stay shared
