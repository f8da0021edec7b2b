"""What all tests share."""

import itertools
import sqlite3
from collections.abc import Callable, Iterator

import httpx
import pytest
from sqlalchemy.engine import URL

from tests.postgres import own_server, postgres_server, versions
from tests.running import Running, running


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption("--long", action="store_true", help="Run the long forms of the fault tests.")


@pytest.fixture(scope="session")
def service(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Running]:
    """One running service for the whole session; tests keep apart by names of their own."""
    with running(tmp_path_factory.mktemp("service"), SPRT_MAX_BATCH="2000", SPRT_MAX_BODY_BYTES="200000") as started:
        yield started


@pytest.fixture(scope="session")
def guarded(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Running]:
    """Another one, with every limit and permission that is off or wide by default."""
    settings = {
        "SPRT_BODY_SECONDS": "0.5",
        "SPRT_CONNECTION_LIMIT": "8",
        "SPRT_CORS_ORIGINS": "https://board.example, http://10.0.0.7:3000",
        "SPRT_METRICS_OPEN": "true",
        "SPRT_RATE_BURST": "30",
        "SPRT_RATE_LIMIT": "0.2",
    }
    with running(tmp_path_factory.mktemp("guarded"), **settings) as started:  # type: ignore[arg-type]
        yield started


@pytest.fixture(scope="session")
def admin(service: Running) -> Iterator[httpx.Client]:
    """A client that may do everything."""
    with service.client() as client:
        yield client


@pytest.fixture(scope="session")
def new_name() -> Callable[[str], str]:
    """Names that no other test uses."""
    numbers = itertools.count(1)
    return lambda prefix: f"{prefix}-{next(numbers)}"


def pytest_report_header() -> str:
    return f"storage: SQLite {sqlite3.sqlite_version}, {', '.join(versions())}"


@pytest.fixture(scope="session")
def oldest_server() -> Iterator[URL]:
    """The oldest PostgreSQL of the machine for the whole session, where it has one besides the other."""
    with own_server(is_oldest=True) as server:
        yield server.url


@pytest.fixture(scope="session")
def server() -> Iterator[URL]:
    """A real PostgreSQL server for the whole session."""
    with postgres_server() as url:
        yield url
