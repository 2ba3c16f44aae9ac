"""Engines and the one transaction scope: `with database.write() as connection:` commits at its end or not at all.

SQLite has one writer at a time, so writers share one connection, wait in line at one lock file and start with BEGIN
IMMEDIATE: a read lock is never upgraded, which could fail at once. Readers have their own connections and do not wait.
"""

from collections.abc import Iterator
from contextlib import contextmanager, nullcontext
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from sqlalchemy import URL, Connection, Engine, create_engine, event, make_url
from sqlalchemy.exc import DBAPIError
from sqlalchemy.exc import TimeoutError as PoolTimeout

from service.errors import Overloaded, Unusable
from service.settings import Settings
from service.store.write_lock import Busy, WriteLock

BUSY_SECONDS = 30
# Either side notices within some ten seconds that the other was cut off, and a client that stopped in the middle of a
# transaction does not keep its locks: the end of the chain of verdicts is one of them.
CLIENT_OPTIONS = {
    "connect_timeout": 5,
    "tcp_user_timeout": 10_000,
    "keepalives_idle": 5,
    "keepalives_interval": 2,
    "keepalives_count": 3,
}
SERVER_OPTIONS = {
    "tcp_keepalives_idle": "5",
    "tcp_keepalives_interval": "2",
    "tcp_keepalives_count": "3",
    "tcp_user_timeout": "10000",
    "idle_in_transaction_session_timeout": "15000",
}
READERS = 8
FILE_NAME = "leastbend.db"
PASSING_FAILURES = (
    ("disk is full", "disk_full", "the disk of the database is full; nothing was stored"),
    ("no space left", "disk_full", "the disk of the database is full; nothing was stored"),
    ("disk i/o error", "disk_full", "the disk of the database does not take or give data; nothing was stored"),
    ("database is locked", "database_busy", "the database is busy"),
    ("starting up", "database_away", "the database is starting"),
    ("shutting down", "database_away", "the database is stopping"),
    ("connection", "database_away", "the database cannot be reached"),
)


@dataclass(frozen=True, kw_only=True)
class Database:
    """Where one process reads and writes. On PostgreSQL both engines are one."""

    reader: Engine
    writer: Engine
    lock: WriteLock | None = None

    @contextmanager
    def read(self) -> Iterator[Connection]:
        """A transaction that only reads."""
        with _translated(), self.reader.begin() as connection:
            yield connection

    @contextmanager
    def write(self) -> Iterator[Connection]:
        """A transaction that may write; commits at the end, rolls back on any error."""
        with _translated(), nullcontext() if self.lock is None else self.lock.held():
            with self.writer.begin() as connection:
                yield connection

    @property
    def postgres(self) -> bool:
        """Whether this is PostgreSQL."""
        return self.writer.dialect.name == "postgresql"

    def close(self) -> None:
        """Give back every connection."""
        self.reader.dispose()
        self.writer.dispose()
        if self.lock is not None:
            self.lock.close()


def open_database(settings: Settings, *, durable: bool) -> Database:
    """Connections are made when first used.

    `durable`: a commit survives a power failure (SQLite synchronous=FULL, PostgreSQL synchronous_commit=on).
    Workers pass False: a claim or finish lost to a power failure only runs the job again.
    """
    if settings.database_url is not None:
        engine = create_engine(
            settings.database_url,
            pool_size=READERS,
            max_overflow=READERS,
            pool_timeout=BUSY_SECONDS,
            pool_pre_ping=True,
            connect_args=postgres_options(settings.database_url, durable=durable),
        )
        return Database(reader=engine, writer=engine)
    path = prepare_directory(settings.data_dir) / FILE_NAME
    synchronous = "FULL" if durable else "NORMAL"
    return Database(
        reader=_sqlite(path, begin="BEGIN", synchronous=synchronous, connections=READERS),
        writer=_sqlite(path, begin="BEGIN IMMEDIATE", synchronous=synchronous, connections=1),
        lock=_lock(path.with_suffix(".lock")),
    )


def postgres_options(url: str, *, durable: bool) -> dict[str, Any]:
    """Parameters of a connection besides those of the URL, whose own `options` are kept."""
    asked = make_url(url).query.get("options", "")
    given = asked if isinstance(asked, str) else " ".join(asked)
    server = SERVER_OPTIONS if durable else {**SERVER_OPTIONS, "synchronous_commit": "off"}
    options = " ".join(f"-c {name}={value}" for name, value in server.items())
    return {**CLIENT_OPTIONS, "options": f"{options} {given}".strip()}


def prepare_directory(directory: Path) -> Path:
    """Make the data directory; it holds measurements, so only its owner may enter one made here."""
    try:
        directory.mkdir(mode=0o700, parents=True, exist_ok=True)
    except OSError as error:
        raise Unusable(f"cannot make the data directory {directory}: {error.strerror}") from error
    return directory.absolute()


def _lock(path: Path) -> WriteLock:
    try:
        return WriteLock(path, seconds=BUSY_SECONDS)
    except OSError as error:
        raise Unusable(f"cannot write in the data directory {path.parent}: {error.strerror}") from error


def _sqlite(path: Path, *, begin: str, synchronous: str, connections: int) -> Engine:
    engine = create_engine(
        URL.create("sqlite", database=str(path)),  # not as text, in which ? and % of a path would mean something else
        pool_size=connections,
        max_overflow=0,
        pool_timeout=BUSY_SECONDS,
        connect_args={"timeout": BUSY_SECONDS, "isolation_level": None, "check_same_thread": False},
    )

    @event.listens_for(engine, "connect")
    def prepare(connection: Any, _record: Any) -> None:
        connection.execute("PRAGMA journal_mode=WAL")
        connection.execute(f"PRAGMA synchronous={synchronous}")
        connection.execute("PRAGMA foreign_keys=ON")

    @event.listens_for(engine, "begin")
    def start(connection: Connection) -> None:
        connection.exec_driver_sql(begin)

    return engine


@contextmanager
def _translated() -> Iterator[None]:
    """A database that is busy, full or away is no fault of the caller: say so, and that a retry may help."""
    try:
        yield
    except (PoolTimeout, Busy) as error:
        raise Overloaded("the database is busy", retry_after=1, code="database_busy") from error
    except DBAPIError as error:
        text = str(error.orig).lower()
        for sign, code, words in PASSING_FAILURES:
            if sign in text:
                raise Overloaded(words, retry_after=5, code=code) from error
        if error.connection_invalidated:
            raise Overloaded("the database connection was lost", retry_after=5, code="database_away") from error
        raise
