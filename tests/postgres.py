"""A private PostgreSQL instance for the tests, made from binaries found on this machine and thrown away afterwards."""

import os
import pwd
import shutil
import signal
import socket
import subprocess
import tempfile
import time
from pathlib import Path
from typing import Any

import psycopg

URL_VARIABLE = "LEASTBEND_TEST_DATABASE_URL"
PLACES = "/usr/lib/postgresql"
CONFIGURATION = """
listen_addresses = '{listen}'
unix_socket_directories = '{directory}'
port = {port}
max_connections = 200
fsync = {fsync}
"""


def find_binaries() -> Path | None:
    """Directory of initdb and postgres: in PATH, or where Debian's packages put them (newest first)."""
    found = shutil.which("initdb")
    if found is not None:
        return Path(found).resolve().parent
    places = sorted(Path(PLACES).glob("*/bin/initdb"), key=lambda path: int(path.parts[-3]), reverse=True)
    return places[0].parent if places else None


class PrivatePostgres:
    """One instance in a temporary directory. It never runs as root, which PostgreSQL refuses."""

    def __init__(self, binaries: Path, *, fsync: bool = False, hosts: tuple[str, ...] = ()) -> None:
        """`hosts`: further addresses of this machine to listen on; whoever reaches them is let in."""
        self.directory = Path(tempfile.mkdtemp(prefix="leastbend-postgres-"))
        self.port = _free_port()
        self._binaries = binaries
        self._process: subprocess.Popen[bytes] | None = None
        self._user: dict[str, Any] = {}
        if os.geteuid() == 0:
            person = _unprivileged()
            os.chown(self.directory, person.pw_uid, person.pw_gid)
            self._user = {"user": person.pw_uid, "group": person.pw_gid, "extra_groups": []}
        command = [binaries / "initdb", "-D", self._data, "-U", "leastbend", "-A", "trust", "-E", "UTF8", "--no-sync"]
        subprocess.run(command, check=True, stdout=subprocess.DEVNULL, cwd="/", **self._user)
        text = CONFIGURATION.format(
            directory=self.directory,
            port=self.port,
            fsync="on" if fsync else "off",
            listen=",".join(["127.0.0.1", *hosts]),
        )
        with (self._data / "postgresql.conf").open("a") as file:
            file.write(text)
        with (self._data / "pg_hba.conf").open("a") as file:
            file.writelines(f"host all all {host}/24 trust\n" for host in hosts)

    @property
    def _data(self) -> Path:
        return self.directory / "data"

    def url(self, name: str = "postgres", *, host: str = "127.0.0.1") -> str:
        """SQLAlchemy URL of one of its databases."""
        return f"postgresql+psycopg://leastbend@{host}:{self.port}/{name}"

    def start(self) -> None:
        """Start and wait until it answers."""
        with (self.directory / "log").open("ab") as log:
            self._process = subprocess.Popen(
                [self._binaries / "postgres", "-D", self._data], stdout=log, stderr=log, cwd="/", **self._user
            )
        deadline = time.monotonic() + 30
        while True:
            try:
                psycopg.connect(self.url().replace("+psycopg", ""), connect_timeout=2).close()
                return
            except psycopg.OperationalError:
                if self._process.poll() is not None or time.monotonic() > deadline:
                    raise RuntimeError((self.directory / "log").read_text()) from None
                time.sleep(0.05)

    def stop(self, how: signal.Signals = signal.SIGINT) -> None:
        """SIGINT: fast shutdown; SIGQUIT: immediate, as after a crash."""
        if self._process is not None and self._process.poll() is None:
            self._process.send_signal(how)
            self._process.wait(30)

    def remove(self) -> None:
        """Stop and delete everything."""
        self.stop(signal.SIGQUIT)
        shutil.rmtree(self.directory, ignore_errors=True)


def _unprivileged() -> pwd.struct_passwd:
    for name in ("postgres", "nobody"):
        try:
            return pwd.getpwnam(name)
        except KeyError:
            continue
    raise RuntimeError("no unprivileged user to run PostgreSQL as")


def _free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])
