"""Every test of storage runs on both databases, and on two versions of PostgreSQL where there are two."""

from collections.abc import Iterator
from pathlib import Path

import pytest
from sqlalchemy import Engine

from service.storage.engine import create_engine_for
from service.storage.migrate import upgrade
from tests.postgres import fresh_database, has_an_older_one

DATABASES = ["sqlite", "postgresql", *(["oldest-postgresql"] if has_an_older_one() else [])]


@pytest.fixture(params=DATABASES)
def empty(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[Engine]:
    """An empty database of each kind."""
    if request.param == "sqlite":
        engine = create_engine_for(f"sqlite:///{tmp_path / 'storage.sqlite3'}")
        yield engine
        engine.dispose()
        return
    name = "server" if request.param == "postgresql" else "oldest_server"
    with fresh_database(request.getfixturevalue(name)) as url:
        engine = create_engine_for(url)
        yield engine
        engine.dispose()


@pytest.fixture
def engine(empty: Engine) -> Engine:
    """A migrated database of each kind."""
    upgrade(empty)
    return empty
