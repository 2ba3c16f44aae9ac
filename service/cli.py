"""The `leastbend` command. Every option is also an environment variable, LEASTBEND_... (see README)."""

import argparse
import socket
import sys
from collections.abc import Iterator, Sequence
from contextlib import ExitStack, contextmanager
from pathlib import Path
from typing import Any

import uvicorn
from pydantic import ValidationError

from service.demo.run import run_demo
from service.errors import InvalidInput, LeastbendError, Unusable
from service.logs import log_as_json
from service.settings import PREFIX, Settings
from service.store.clock import rfc3339, utc_now
from service.store.database import Database, open_database
from service.store.migrate import migrate
from service.web.app import create_app
from service.web.callers import is_loopback
from service.worker.main import work
from service.worker.supervise import Companion
from service.workflows.callers import create_key, list_keys, revoke_key

ANSWER_SECONDS = 5  # for requests under way when the service is stopped
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
    log_as_json(settings.log_level)
    migrate_now(settings)
    guarded = _has_keys(settings)
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
        log_config=None,
        access_log=False,
        server_header=False,
        timeout_graceful_shutdown=ANSWER_SECONDS,
    )
    with ExitStack() as stack:
        stack.enter_context(listener)
        if settings.workers:
            stack.enter_context(Companion(settings))
        shown = f"[{host}]" if ":" in host else host
        print(f"{SAID_WHEN_UP}http://{shown}:{port} with {settings.workers} worker processes", flush=True)
        if not guarded:
            print("There are no keys: it answers this machine only (`leastbend keys create` makes one)", flush=True)
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


def create_key_command(asked: dict[str, Any]) -> int:
    """Make a key and show it, this once."""
    name, role = asked.pop("name"), asked.pop("role")
    if not 0 < len(name) <= 200 or not name.isprintable():
        raise InvalidInput.at("/name", "must be 1 to 200 printable characters")
    with _opened(asked) as database:
        key, secret = create_key(database, name=name, role=role, now=utc_now())
    print(f"key: {key}\nnotification secret: {secret}\nNeither is shown again; only a hash of the key is kept.")
    return 0


def list_keys_command(asked: dict[str, Any]) -> int:
    """List keys: name, role, when made, when revoked."""
    with _opened(asked) as database:
        for one in list_keys(database):
            revoked = "in force" if one.revoked_at is None else f"revoked {rfc3339(one.revoked_at)}"
            print(f"{one.name}\t{one.role}\t{rfc3339(one.created_at)}\t{revoked}")
    return 0


def revoke_key_command(asked: dict[str, Any]) -> int:
    """Revoke a key: nobody gets in with it from now on. What it submitted stays."""
    name = asked.pop("name")
    with _opened(asked) as database:
        revoke_key(database, name=name, now=utc_now())
    print(f"{name} is revoked.")
    return 0


def demo(asked: dict[str, Any]) -> int:
    """Start the real service, post the demo datasets over HTTP and show what comes back."""
    return run_demo(data_dir=asked.get("data_dir"), keep=asked["keep"], said_when_up=SAID_WHEN_UP)


@contextmanager
def _opened(asked: dict[str, Any]) -> Iterator[Database]:
    settings = _settings(asked)
    migrate_now(settings)
    database = open_database(settings, durable=True)
    try:
        yield database
    finally:
        database.close()


def _has_keys(settings: Settings) -> bool:
    database = open_database(settings, durable=True)
    try:
        return bool(list_keys(database))
    finally:
        database.close()


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
    keys = commands.add_parser("keys", help="Make, list and revoke keys.").add_subparsers(required=True, metavar="DEED")
    for name, command in (("create", create_key_command), ("list", list_keys_command), ("revoke", revoke_key_command)):
        deed = keys.add_parser(name, help=command.__doc__, description=command.__doc__)
        deed.set_defaults(command=command)
        deed.add_argument("--data-dir", type=Path, help="directory of the SQLite files (default: leastbend-data)")
        if name != "list":
            deed.add_argument("--name", required=True, help="who holds it: shown as submitter of its jobs")
        if name == "create":
            deed.add_argument("--role", required=True, choices=["submit", "read", "admin"], help="what it may do")
    showing = add("demo", demo)
    showing.add_argument("--keep", action="store_true", help="leave the service running until interrupted")
    return parser


if __name__ == "__main__":
    sys.exit(main())
