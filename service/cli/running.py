"""Commands that run the service: serve, worker, migrate, demo."""

import gc
import signal
import socket
from contextlib import ExitStack
from typing import Any

import uvicorn

from service.cli.common import migrate_now, opened, settings_of
from service.demo.run import run_demo
from service.errors import Unusable
from service.logs import log_as_json
from service.settings import Settings
from service.web.app import create_app
from service.web.callers import is_loopback
from service.web.server import BoundedHead, Server
from service.worker.main import work
from service.worker.supervise import Companion
from service.workflows.callers import list_keys

ANSWER_SECONDS = 5  # for requests under way when the service is stopped
SAID_WHEN_UP = "Leastbend listens on "


def serve(asked: dict[str, Any]) -> int:
    """API and, unless told otherwise, worker processes."""
    if asked.pop("no_workers", False):
        asked["workers"] = 0
    settings = settings_of(asked)
    log_as_json(settings.log_level)
    with opened(settings, make=True) as database:
        guarded = bool(list_keys(database))
    if not guarded and not is_loopback(settings.host):
        raise Unusable(
            f"there are no keys, so whoever reaches {settings.host} could do everything: make one with"
            " `leastbend keys create`, or listen on a loopback address",
            code="no_keys",
        )
    app = create_app(settings)
    listener = _listener(settings)
    host, port = listener.getsockname()[:2]
    config = uvicorn.Config(
        app,
        http=BoundedHead,
        log_config=None,
        access_log=False,
        server_header=False,
        timeout_graceful_shutdown=ANSWER_SECONDS,
    )
    signal.signal(signal.SIGTERM, _leave)
    with ExitStack() as stack:
        stack.enter_context(listener)
        if settings.workers:
            stack.enter_context(Companion(settings))
        shown = f"[{host}]" if ":" in host else host
        print(f"{SAID_WHEN_UP}http://{shown}:{port} with {settings.workers} worker processes", flush=True)
        if not guarded:
            print("There are no keys: it answers this machine only (`leastbend keys create` makes one)", flush=True)
        gc.collect()
        gc.freeze()  # what stays for good is not looked through again and again
        Server(config, app).run(sockets=[listener])
    return 0


def _leave(_number: int, _frame: Any) -> None:
    """After its own shutdown uvicorn sends the signal on: workers are stopped on the way out, not killed."""
    raise SystemExit(0)


def worker(asked: dict[str, Any]) -> int:
    """Worker processes only, for an installation whose API runs elsewhere."""
    settings = settings_of(asked)
    migrate_now(settings)
    return work(settings)


def demo(asked: dict[str, Any]) -> int:
    """Start the real service, post the demo datasets over HTTP and show what comes back."""
    return run_demo(data_dir=asked.get("data_dir"), keep=asked["keep"], said_when_up=SAID_WHEN_UP)


def _listener(settings: Settings) -> socket.socket:
    family = socket.AF_INET6 if ":" in settings.host else socket.AF_INET
    try:
        return socket.create_server((settings.host, settings.port), family=family, backlog=2048)
    except OSError as error:
        raise Unusable(f"cannot listen on {settings.host} port {settings.port}: {error.strerror}") from error
