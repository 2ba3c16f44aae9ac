"""The real command in processes of its own, for tests that want nothing less: `leastbend serve` with its workers."""

import json
import os
import signal
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

COMMAND = (sys.executable, "-P", "-m", "service.cli")


class Real:
    """A running service: its address, its process, and what it has logged so far."""

    def __init__(self, address: str, process: subprocess.Popen[str], log: Path) -> None:
        self.address = address
        self.process = process
        self._log = log

    def log(self) -> list[dict[str, Any]]:
        """Every line of the log; each must be a JSON object."""
        return [json.loads(line) for line in self._log.read_text().splitlines()]

    def answers(self) -> list[dict[str, Any]]:
        """Those lines that tell of answered requests."""
        return [line for line in self.log() if line["message"] == "answered"]


def make_key(data_dir: Path, name: str, role: str) -> str:
    """A new key, made by the command."""
    return make_key_and_secret(data_dir, name, role)[0]


def make_key_and_secret(data_dir: Path, name: str, role: str) -> tuple[str, str]:
    """A new key and the secret that its notifications are signed with."""
    command = [*COMMAND, "keys", "create", "--name", name, "--role", role, "--data-dir", str(data_dir)]
    done = subprocess.run(command, capture_output=True, text=True, timeout=60, check=True)
    key, secret = done.stdout.splitlines()[:2]
    return key.removeprefix("key: "), secret.removeprefix("notification secret: ")


@contextmanager
def real_service(data_dir: Path, *options: str, **settings: str) -> Iterator[Real]:
    """`leastbend serve` on a free port until the block ends; `settings` as environment variables without prefix."""
    environment = os.environ | {f"LEASTBEND_{name.upper()}": value for name, value in settings.items()}
    data_dir.mkdir(parents=True, exist_ok=True)
    log = data_dir / "log"
    command = [*COMMAND, "serve", "--port", "0", "--data-dir", str(data_dir), *options]
    with log.open("w") as errors:
        process = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=errors, text=True, env=environment)
    try:
        assert process.stdout is not None
        with process.stdout:
            said = process.stdout.readline()
            assert said.startswith("Leastbend listens on "), log.read_text()
            yield Real(said.split()[3], process, log)
    finally:
        process.terminate()
        assert process.wait(60) in (0, -signal.SIGTERM, -signal.SIGKILL)
