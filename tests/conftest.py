"""Databases for the tests: every test that asks for `settings` runs on SQLite and on PostgreSQL.

PostgreSQL is the one named by LEASTBEND_TEST_DATABASE_URL (a superuser's or a database maker's URL), or a private
instance made from binaries found here. Where there is neither, those tests are skipped and say why; with
LEASTBEND_REQUIRE_POSTGRES=1 they fail instead.
"""

import os
import uuid
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import psycopg
import pytest
from psycopg import sql
from sqlalchemy import make_url

from service.settings import Settings
from service.store.database import Database, open_database
from service.store.migrate import migrate
from service.store.transport import Transport, open_transport
from tests.jobs import Desk
from tests.postgres import URL_VARIABLE, PrivatePostgres, find_binaries

TEMPLATE = "leastbend_test_template"


def no_postgres(why: str) -> None:
    """Skip visibly, or fail where PostgreSQL is required."""
    if os.environ.get("LEASTBEND_REQUIRE_POSTGRES") == "1":
        pytest.fail(f"PostgreSQL is required here: {why}", pytrace=False)
    pytest.skip(why)


@pytest.fixture(scope="session")
def postgres_binaries() -> Path:
    """Where initdb and postgres are."""
    found = find_binaries()
    if found is None:
        no_postgres("no PostgreSQL binaries in PATH or /usr/lib/postgresql")
        raise AssertionError
    return found


@pytest.fixture(scope="session")
def postgres_server(request: pytest.FixtureRequest) -> Iterator[str]:
    """URL of a server on which databases can be made."""
    given = os.environ.get(URL_VARIABLE)
    if given:
        yield given
        return
    server = PrivatePostgres(request.getfixturevalue("postgres_binaries"))
    try:
        server.start()
        yield server.url()
    finally:
        server.remove()


@pytest.fixture(scope="session")
def postgres_template(postgres_server: str) -> Iterator[str]:
    """Server URL, with a migrated database from which others are copied."""
    name = f"{TEMPLATE}_{uuid.uuid4().hex[:8]}"
    with one_database(postgres_server, name) as url:
        database = open_database(Settings(database_url=url), durable=True)
        migrate(database)
        database.close()
        open_transport(Settings(database_url=url)).close()
        yield name


@pytest.fixture
def empty_postgres(postgres_server: str) -> Iterator[str]:
    """URL of an empty database, dropped afterwards."""
    with one_database(postgres_server, f"leastbend_{uuid.uuid4().hex[:12]}") as url:
        yield url


@pytest.fixture
def postgres_url(postgres_server: str, postgres_template: str) -> Iterator[str]:
    """URL of a migrated database of this test's own."""
    with one_database(postgres_server, f"leastbend_{uuid.uuid4().hex[:12]}", template=postgres_template) as url:
        yield url


@pytest.fixture(params=["sqlite", "postgresql"])
def engine(request: pytest.FixtureRequest) -> str:
    """Name of the engine: everything below depends on it, so each test runs once on either."""
    return str(request.param)


@pytest.fixture
def settings(engine: str, tmp_path: Path, request: pytest.FixtureRequest) -> Settings:
    """Settings of an installation of this test's own."""
    url = request.getfixturevalue("postgres_url") if engine == "postgresql" else None
    return Settings(data_dir=tmp_path / "data", database_url=url)


@pytest.fixture
def database(settings: Settings) -> Iterator[Database]:
    """Its database, migrated."""
    opened = open_database(settings, durable=True)
    migrate(opened)
    yield opened
    opened.close()


@pytest.fixture
def transport(settings: Settings) -> Iterator[Transport]:
    """Its queue."""
    opened = open_transport(settings)
    yield opened
    opened.close()


@pytest.fixture
def desk(database: Database, transport: Transport, settings: Settings) -> Desk:
    """Puts in jobs, takes and looks at them."""
    return Desk(database, transport, settings)


@contextmanager
def one_database(server: str, name: str, *, template: str = "template0") -> Iterator[str]:
    """Make a database, give its URL, drop it with whoever is still connected."""
    plain = server.replace("+psycopg", "")
    with psycopg.connect(plain, autocommit=True) as admin:
        admin.execute(sql.SQL("CREATE DATABASE {} TEMPLATE {}").format(sql.Identifier(name), sql.Identifier(template)))
    try:
        yield make_url(server).set(database=name).render_as_string(hide_password=False)
    finally:
        with psycopg.connect(plain, autocommit=True) as admin:
            admin.execute(sql.SQL("DROP DATABASE {} WITH (FORCE)").format(sql.Identifier(name)))
