"""The `leastbend` command. Every option is also an environment variable, LEASTBEND_... (see README)."""

import argparse
import sys
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

from service.cli.keeping import backup_command, check_command, move_command, purge_command
from service.cli.keys import create_key_command, list_keys_command, revoke_key_command
from service.cli.running import demo, migrate_command, serve, worker
from service.errors import LeastbendError

DATA_DIR = "directory of the SQLite files (default: leastbend-data)"


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


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="leastbend", description="Chooses and defends the degree of a calibration polynomial."
    )
    commands = parser.add_subparsers(required=True, metavar="COMMAND")

    def add(name: str, command: Any) -> argparse.ArgumentParser:
        added = commands.add_parser(name, help=command.__doc__, description=command.__doc__)
        added.set_defaults(command=command)
        added.add_argument("--data-dir", type=Path, help=DATA_DIR)
        return added

    serving = add("serve", serve)
    serving.add_argument("--host", help="address to listen on (default: 127.0.0.1)")
    serving.add_argument("--port", type=int, help="TCP port; 0 takes a free one (default: 8080)")
    serving.add_argument("--workers", type=int, help="worker processes (default: 2)")
    serving.add_argument("--no-workers", action="store_true", help="start none: they run elsewhere")
    working = add("worker", worker)
    working.add_argument("--workers", type=int, help="worker processes (default: 2)")
    add("migrate", migrate_command)
    _add_keeping(add)
    _add_keys(commands)
    showing = add("demo", demo)
    showing.add_argument("--keep", action="store_true", help="leave the service running until interrupted")
    return parser


def _add_keeping(add: Callable[..., argparse.ArgumentParser]) -> None:
    add("backup", backup_command).add_argument("--to", type=Path, required=True, help="file to write; must not exist")
    moving = add("move", move_command)
    moving.add_argument("--to", required=True, help="postgresql+psycopg://... of an empty database")
    purging = add("purge", purge_command)
    purging.add_argument("--older-than", type=int, required=True, metavar="DAYS", help="days since the job ended")
    purging.add_argument("--remove", action="store_true", help="really remove; without it nothing is touched")
    add("check", check_command)


def _add_keys(commands: Any) -> None:
    keys = commands.add_parser("keys", help="Make, list and revoke keys.").add_subparsers(required=True, metavar="DEED")
    for name, command in (("create", create_key_command), ("list", list_keys_command), ("revoke", revoke_key_command)):
        deed = keys.add_parser(name, help=command.__doc__, description=command.__doc__)
        deed.set_defaults(command=command)
        deed.add_argument("--data-dir", type=Path, help=DATA_DIR)
        if name != "list":
            deed.add_argument("--name", required=True, help="who holds it: shown as submitter of its jobs")
        if name == "create":
            deed.add_argument("--role", required=True, choices=["submit", "read", "admin"], help="what it may do")
