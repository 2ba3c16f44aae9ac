"""The `leastbend` command. Every option is also an environment variable, LEASTBEND_... (see README).

A command's module is loaded when the command is asked for: listing keys need not wait for the numeric libraries.
"""

import argparse
import sys
from collections.abc import Sequence
from importlib import import_module
from pathlib import Path
from typing import Any

from service.errors import LeastbendError

COMMANDS = {
    "serve": ("service.cli.running:serve", "API and, unless told otherwise, worker processes."),
    "worker": ("service.cli.running:worker", "Worker processes only: the API runs elsewhere."),
    "migrate": ("service.cli.keeping:migrate", "Bring the database to this version's revision."),
    "backup": ("service.cli.keeping:backup", "Copy the SQLite database to a new file while the service runs."),
    "move": ("service.cli.keeping:move", "Carry an embedded installation to an empty PostgreSQL, digests checked."),
    "purge": ("service.cli.keeping:purge", "Remove points, results and events of what ended long ago; verdicts stay."),
    "check": ("service.cli.keeping:check", "Compute every digest again; hold verdicts and rows against each other."),
    "demo": ("service.cli.running:demo", "Start the real service on invented data and show what comes back."),
}
KEY_COMMANDS = {
    "create": ("service.cli.keys:create", "Make a key and show it, this once."),
    "list": ("service.cli.keys:show", "List keys: name, role, when made, when revoked."),
    "revoke": ("service.cli.keys:revoke", "Revoke a key: nobody gets in with it from now on. What it submitted stays."),
}
DATA_DIR = "directory of the SQLite files (default: leastbend-data)"


def main(argv: Sequence[str] | None = None) -> int:
    """Run one command; answers the exit code."""
    asked = vars(_parser().parse_args(argv))
    module, _, name = asked.pop("target").partition(":")
    try:
        return int(getattr(import_module(module), name)(asked))
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
    made = {name: _add(commands, name, *rest) for name, rest in COMMANDS.items()}
    serving = made["serve"]
    serving.add_argument("--host", help="address to listen on (default: 127.0.0.1)")
    serving.add_argument("--port", type=int, help="TCP port; 0 takes a free one (default: 8080)")
    serving.add_argument("--no-workers", action="store_true", help="start none: they run elsewhere")
    for one in (serving, made["worker"]):
        one.add_argument("--workers", type=int, help="worker processes (default: 2)")
    made["backup"].add_argument("--to", type=Path, required=True, help="file to write; must not exist")
    made["move"].add_argument("--to", required=True, help="postgresql+psycopg://... of an empty database")
    purging = made["purge"]
    purging.add_argument("--older-than", type=int, required=True, metavar="DAYS", help="days since the job ended")
    purging.add_argument("--remove", action="store_true", help="really remove; without it nothing is touched")
    made["demo"].add_argument("--keep", action="store_true", help="leave the service running until interrupted")
    _add_keys(commands)
    return parser


def _add(commands: Any, name: str, target: str, words: str) -> argparse.ArgumentParser:
    added: argparse.ArgumentParser = commands.add_parser(name, help=words, description=words)
    added.set_defaults(target=target)
    added.add_argument("--data-dir", type=Path, help=DATA_DIR)
    return added


def _add_keys(commands: Any) -> None:
    words = "Make, list and revoke keys."
    keys = commands.add_parser("keys", help=words, description=words).add_subparsers(required=True, metavar="DEED")
    made = {name: _add(keys, name, *rest) for name, rest in KEY_COMMANDS.items()}
    for name in ("create", "revoke"):
        made[name].add_argument("--name", required=True, help="who holds it: shown as submitter of its jobs")
    made["create"].add_argument("--role", required=True, choices=["submit", "read", "admin"], help="what it may do")
