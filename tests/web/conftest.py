"""One running service for each test."""

from collections.abc import Iterator
from pathlib import Path

import pytest

from service.settings import Settings
from tests.web.service import Service, running


@pytest.fixture
def service_on_either(settings: Settings) -> Iterator[Service]:
    """The same, once on SQLite and once on PostgreSQL."""
    with running(settings) as one:
        yield one


@pytest.fixture
def service(tmp_path: Path) -> Iterator[Service]:
    """A service on an empty data directory; its worker works only when told to."""
    with running(Settings(data_dir=tmp_path / "data")) as one:
        yield one
