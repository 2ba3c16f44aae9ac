"""The `leastbend` command. Every option is also an environment variable, LEASTBEND_... (see README)."""

import argparse
import socket
import sys
from collections.abc import Sequence
from contextlib import ExitStack
from ipaddress import ip_address
from pathlib import Path
from typing import Any

import uvicorn
from pydantic import ValidationError

from service.demo.run import run_demo
from service.errors import LeastbendError, Unusable
from service.settings import PREFIX, Settings
from service.store.database import open_database
from service.store.migrate import migrate
from service.web.app import create_app
from service.worker.main import work
from service.worker.supervise import Companion

SAID_WHEN_UP = "Leastbend listens on "


def main(argv: Sequence[str] | None = None) -> int:
    """Run one command; answers the exit code."""
    asked = vars(_parser().parse_args(argv))
    command = asked.pop("command")
    try:
        return int(command(asked))
    except LeastbendError as error:
        print(f"leastbend: {error.message}", file=sys.stderr)
        return 1
    except KeyboardInterrupt:
        return 130


def serve(asked: dict[str, Any]) -> int:
    """API and, unless told otherwise, worker processes."""
    if asked.pop("no_workers", False):
        asked["workers"] = 0
    settings = _settings(asked)
    if not _is_loopback(settings.host):
        raise Unusable(
            f"{settings.host} is not a loopback address, and there are no keys: whoever reaches it could do all"
        )
    app = create_app(settings)
    migrate_now(settings)
    listener = _listener(settings)
    host, port = listener.getsockname()[:2]
    config = uvicorn.Config(app, log_level=settings.log_level.lower(), access_log=False, server_header=False)
    with ExitStack() as stack:
        stack.enter_context(listener)
        if settings.workers:
            stack.enter_context(Companion(settings))
        shown = f"[{host}]" if ":" in host else host
        print(f"{SAID_WHEN_UP}http://{shown}:{port} with {settings.workers} worker processes", flush=True)
        uvicorn.Server(config).run(sockets=[listener])
    return 0


def worker(asked: dict[str, Any]) -> int:
    """Worker processes only, for an installation whose API runs elsewhere."""
    settings = _settings(asked)
    migrate_now(settings)
    return work(settings)


def migrate_command(asked: dict[str, Any]) -> int:
    """Bring the database to this version's revision."""
    before, after = migrate_now(_settings(asked))
    print(f"The database is at revision {after}" + ("." if before == after else f" (was: {before or 'empty'})."))
    return 0


def demo(asked: dict[str, Any]) -> int:
    """Start the real service, post the demo datasets over HTTP and show what comes back."""
    return run_demo(data_dir=asked.get("data_dir"), keep=asked["keep"], said_when_up=SAID_WHEN_UP)


def migrate_now(settings: Settings) -> tuple[str | None, str]:
    """Before anything else touches the database."""
    database = open_database(settings, durable=True)
    try:
        return migrate(database)
    finally:
        database.close()


def _settings(asked: dict[str, Any]) -> Settings:
    try:
        return Settings(**{name: value for name, value in asked.items() if value is not None})
    except ValidationError as error:
        first = error.errors()[0]
        name = "_".join(str(part) for part in first["loc"])
        raise Unusable(f"setting {PREFIX}{name.upper()}: {first['msg']}") from error


def _is_loopback(host: str) -> bool:
    if host == "localhost":
        return True
    try:
        return ip_address(host).is_loopback
    except ValueError:
        return False


def _listener(settings: Settings) -> socket.socket:
    family = socket.AF_INET6 if ":" in settings.host else socket.AF_INET
    try:
        return socket.create_server((settings.host, settings.port), family=family, backlog=2048)
    except OSError as error:
        raise Unusable(f"cannot listen on {settings.host} port {settings.port}: {error.strerror}") from error


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="leastbend", description="Chooses and defends the degree of a calibration polynomial."
    )
    commands = parser.add_subparsers(required=True, metavar="COMMAND")

    def add(name: str, command: Any, *, data: bool = True) -> argparse.ArgumentParser:
        added = commands.add_parser(name, help=command.__doc__, description=command.__doc__)
        added.set_defaults(command=command)
        if data:
            added.add_argument("--data-dir", type=Path, help="directory of the SQLite files (default: leastbend-data)")
        return added

    serving = add("serve", serve)
    serving.add_argument("--host", help="address to listen on (default: 127.0.0.1)")
    serving.add_argument("--port", type=int, help="TCP port; 0 takes a free one (default: 8080)")
    serving.add_argument("--workers", type=int, help="worker processes (default: 2)")
    serving.add_argument("--no-workers", action="store_true", help="start none: they run elsewhere")
    working = add("worker", worker)
    working.add_argument("--workers", type=int, help="worker processes (default: 2)")
    add("migrate", migrate_command)
    showing = add("demo", demo)
    showing.add_argument("--keep", action="store_true", help="leave the service running until interrupted")
    return parser


if __name__ == "__main__":
    sys.exit(main())
