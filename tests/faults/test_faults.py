"""What really happens to a service: killed at any moment, its database stopped, its disk full, many writers at once."""

import contextlib
import os
import random
import resource
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import httpx
import pytest
from sqlalchemy.engine import URL

from service.domain.access import Role
from tests.faults.fleet import Fleet
from tests.postgres import fresh_database, own_server
from tests.running import command, free_port, prepared, wait_until_ready

Kills = Callable[[int, int], int]


@pytest.fixture
def kills(request: pytest.FixtureRequest) -> Kills:
    """How often: the short number, or the long one with `--long`."""
    return lambda short, long: long if request.config.getoption("--long") else short


class Killable:
    """A service that is killed and started again at the same address, on the same database."""

    def __init__(self, database_url: str, *arguments: str) -> None:
        self.database_url = database_url
        self.key = prepared(database_url, {Role.ENGINEER: "me"})["engineer"]
        self._port, self._arguments = free_port(), arguments
        self.url = f"http://127.0.0.1:{self._port}"
        self.process: subprocess.Popen[bytes] | None = None

    def start(self) -> None:
        self.process = subprocess.Popen(
            [sys.executable, "-m", "service", "serve", "--port", str(self._port), *self._arguments],
            env={**os.environ, "SPRT_DATABASE_URL": self.database_url},
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
        )
        wait_until_ready(self.url, self.process)

    def kill(self) -> None:
        assert self.process is not None
        self.process.send_signal(signal.SIGKILL)
        self.process.wait(20)

    def stop(self) -> None:
        assert self.process is not None
        self.process.terminate()
        self.process.wait(30)

    def client(self) -> httpx.Client:
        return httpx.Client(base_url=self.url, headers={"Authorization": f"Bearer {self.key}"}, timeout=30.0)


@contextlib.contextmanager
def serving(database_url: str, *arguments: str) -> Iterator[Killable]:
    service = Killable(database_url, *arguments)
    service.start()
    try:
        yield service
    finally:
        service.stop()


def killed_again_and_again(database_url: str, times: int) -> None:
    """Each round: load, kill -9 at a random moment, start; the stations try again with their idempotency keys."""
    moments = random.Random(7)
    with serving(database_url) as service:
        fleet = Fleet(tests=4, stations=8)
        with service.client() as client:
            fleet.register(client)
        stop = threading.Event()
        threads = fleet.post_during(service.url, service.key, stop)
        try:
            for _ in range(times):
                time.sleep(moments.uniform(0.1, 0.9))
                service.kill()
                service.start()
            time.sleep(0.3)
        finally:
            stop.set()
            for thread in threads:
                thread.join()
        fleet.finish(service.url, service.key)
        stored = fleet.check(service.database_url)
        verified = command("verify", database_url=service.database_url)
        assert verified.returncode == 0, verified.stderr
    acknowledged = sum(len(station.acknowledged) for station in fleet.stations)
    print(f"\n{times} kills, {acknowledged} submissions acknowledged, {stored} stored once each")
    assert acknowledged > 10 * times


def test_kill_9_loses_and_doubles_nothing_on_sqlite(tmp_path: Path, kills: Kills) -> None:
    killed_again_and_again(f"sqlite:///{tmp_path / 'killed.sqlite3'}", kills(3, 50))


def test_kill_9_loses_and_doubles_nothing_on_postgresql(server: URL, kills: Kills) -> None:
    with fresh_database(server) as url:
        killed_again_and_again(url, kills(2, 20))


def test_a_database_that_goes_away_and_comes_back() -> None:
    """Meanwhile 503 with Retry-After; then the same process goes on, and nothing is lost or doubled."""
    with own_server() as server, fresh_database(server.url) as url, serving(url) as service:
        fleet = Fleet(tests=2, stations=4)
        with service.client() as client:
            fleet.register(client)
        stop = threading.Event()
        threads = fleet.post_during(service.url, service.key, stop)
        time.sleep(0.5)
        server.stop()
        time.sleep(1.0)
        assert httpx.get(f"{service.url}/readyz", timeout=30).status_code == 503
        with service.client() as client:
            conditional = client.get("/v1/tests/lot-0", headers={"If-None-Match": '"1"'})
            assert (conditional.status_code, conditional.headers["Retry-After"]) == (503, "5")
        server.start()
        time.sleep(1.0)
        before = sum(len(station.acknowledged) for station in fleet.stations)
        deadline = time.monotonic() + 30
        while sum(len(station.acknowledged) for station in fleet.stations) < before + 20:
            assert time.monotonic() < deadline, "the service takes results again without a restart"
            time.sleep(0.1)
        stop.set()
        for thread in threads:
            thread.join()
        fleet.finish(service.url, service.key)
        fleet.check(url)
        refusals = {status for station in fleet.stations for status in station.refusals}
        assert refusals == {503}
        assert None not in {after for station in fleet.stations for after in station.retry_after}


def test_a_full_disk_refuses_and_recovers(tmp_path: Path) -> None:
    """A quota on the size of files that the process may write stands for the full disk."""
    file = tmp_path / "full.sqlite3"
    with serving(f"sqlite:///{file}") as service:
        fleet = Fleet(tests=2, stations=4)
        with service.client() as client:
            fleet.register(client)
            assert service.process is not None
            stop = threading.Event()
            threads = fleet.post_during(service.url, service.key, stop)
            time.sleep(0.3)
            # Smaller than the files are already: from now on nothing fits, however little it is.
            resource.prlimit(service.process.pid, resource.RLIMIT_FSIZE, (4096, resource.RLIM_INFINITY))
            deadline = time.monotonic() + 60
            while not any(station.refusals for station in fleet.stations):
                assert time.monotonic() < deadline, "the quota is reached"
                time.sleep(0.05)
            assert client.get("/readyz").status_code == 503
            assert client.get("/v1/tests/lot-0").status_code == 200
            assert client.get("/readyz").status_code == 503
            resource.prlimit(service.process.pid, resource.RLIMIT_FSIZE, (resource.RLIM_INFINITY,) * 2)
            time.sleep(0.5)
            stop.set()
            for thread in threads:
                thread.join()
            assert client.get("/readyz").status_code == 200
        fleet.finish(service.url, service.key)
        fleet.check(service.database_url)
    assert {status for station in fleet.stations for status in station.refusals} == {503}


@pytest.mark.parametrize("tests", [1, 64])
@pytest.mark.parametrize("database", ["sqlite", "postgresql"])
def test_sixty_four_writers(request: pytest.FixtureRequest, tmp_path: Path, database: str, tests: int) -> None:
    """On one test and on as many; on PostgreSQL through two processes."""
    with contextlib.ExitStack() as stack:
        if database == "sqlite":
            service = stack.enter_context(serving(f"sqlite:///{tmp_path / 'many.sqlite3'}"))
        else:
            url = stack.enter_context(fresh_database(request.getfixturevalue("server")))
            service = stack.enter_context(serving(url, "--workers", "2"))
        fleet = Fleet(tests, stations=64)
        with service.client() as client:
            fleet.register(client)
        stop = threading.Event()
        threads = fleet.post_during(service.url, service.key, stop)
        time.sleep(1.0)
        stop.set()
        for thread in threads:
            thread.join()
        fleet.finish(service.url, service.key)
        assert fleet.check(service.database_url) >= 64
        assert not any(station.refusals for station in fleet.stations)
