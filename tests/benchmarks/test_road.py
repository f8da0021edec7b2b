"""What durability, reading and keeping cost, against the same routes without them; the load is a program of its own."""

import json
import os
import statistics
import subprocess
import sys
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from pathlib import Path
from typing import Any

import httpx
import pytest
from sqlalchemy.engine import URL

from tests.faults.fleet import PLAN
from tests.postgres import fresh_database
from tests.running import Running, free_port, running, wait_until_ready

ROUNDS, SECONDS, CLIENTS = 5, 2.0, 32
TESTS = 32

pytestmark = pytest.mark.benchmark


def loaded(url: str, key: str, requests: list[dict[str, Any]]) -> dict[str, Any]:
    """What the client program reports."""
    program = [sys.executable, "-m", "tests.benchmarks.load", url, key, str(SECONDS), str(CLIENTS)]
    done = subprocess.run([*program, *map(json.dumps, requests)], capture_output=True, text=True, check=True)
    report: dict[str, Any] = json.loads(done.stdout)
    return {**report, "per_second": report["requests"] / report["seconds"]}


@contextmanager
def beside_nothing(folder: Path, database_url: str | None = None) -> Iterator[tuple[Running, str]]:
    """The service with some tests, and beside it the one that stores nothing."""
    with running(folder, database_url=database_url) as service, service.client() as client:
        registered(client, TESTS)
        port = free_port()
        nothing = subprocess.Popen(
            [sys.executable, "-m", "tests.benchmarks.nothing", str(port)],
            env={**os.environ, "SPRT_DATABASE_URL": service.database_url},
        )
        try:
            url = f"http://127.0.0.1:{port}"
            wait_until_ready(url, nothing)
            yield service, url
        finally:
            nothing.terminate()
            nothing.wait()


def registered(client: httpx.Client, tests: int) -> None:
    client.post("/v1/plans", json=PLAN).raise_for_status()
    for i in range(tests):
        subject = {"kind": "lot", "name": "x"}
        client.post("/v1/tests", json={"key": f"t{i}", "plan": "wide", "subject": subject}).raise_for_status()


def posts(values: int) -> list[dict[str, Any]]:
    body = json.dumps({"values": [0.5] * values})
    return [{"method": "POST", "path": f"/v1/tests/t{i}/observations", "body": body} for i in range(TESTS)]


def compared(
    title: str, ours: tuple[str, str, list[dict[str, Any]]], other: tuple[str, str, list[dict[str, Any]]]
) -> float:
    """The median over rounds of the ratio of requests a second; printed with throughput and latency."""
    ratios, reports = [], []
    for _ in range(ROUNDS):
        reports.append(loaded(*ours))
        ratios.append(reports[-1]["per_second"] / loaded(*other)["per_second"])
    ratio = float(statistics.median(ratios))
    throughput = statistics.median(report["per_second"] for report in reports)
    latency = [statistics.median(report[name] for report in reports) for name in ("median_ms", "p99_ms")]
    spread = f"({min(ratios):.2f} to {max(ratios):.2f})"
    print(f"\n{title}: {ratio:.2f} {spread}; {throughput:.0f}/s, {latency[0]:.0f} ms, 99 % {latency[1]:.0f} ms")
    return ratio


@pytest.mark.parametrize(("values", "least"), [(1, 0.6), (1000, 0.5)])
def test_durability_on_sqlite(tmp_path: Path, values: int, least: float) -> None:
    with beside_nothing(tmp_path) as (service, nothing):
        key = service.keys["collector"]
        title = f"POST of {values}, SQLite, against storing nothing (asked for {least})"
        compared(title, (service.url, key, posts(values)), (nothing, key, posts(values)))


def test_durability_on_postgresql(server: URL, tmp_path: Path) -> None:
    with ExitStack() as stack:
        url = stack.enter_context(fresh_database(server))
        service, nothing = stack.enter_context(beside_nothing(tmp_path, url))
        key = service.keys["collector"]
        title = "POST of 1, PostgreSQL without fsync, against storing nothing (asked for 0.4)"
        compared(title, (service.url, key, posts(1)), (nothing, key, posts(1)))


def test_a_group_against_a_commit_for_each(tmp_path: Path) -> None:
    with ExitStack() as stack:
        services = []
        for name, limit in (("grouped", "256"), ("single", "1")):
            folder = tmp_path / name
            folder.mkdir()
            service = stack.enter_context(running(folder, SPRT_GROUP_LIMIT=limit))
            with service.client() as client:
                registered(client, TESTS)
            services.append((service.url, service.keys["collector"], posts(1)))
        compared("POST of 1, group commit against a commit for each (asked for 4)", services[0], services[1])


def test_a_receiver_against_none(tmp_path: Path) -> None:
    """What it costs those who post that somebody is to be told of decisions; none falls here."""
    with ExitStack() as stack:
        services = []
        for name in ("telling", "silent"):
            folder = tmp_path / name
            folder.mkdir()
            service = stack.enter_context(running(folder))
            with service.client() as client:
                registered(client, TESTS)
                if name == "telling":
                    receiver = {"name": "bench", "address": "https://bench.invalid/"}
                    client.post("/v1/receivers", json=receiver).raise_for_status()
            services.append((service.url, service.keys["collector"], posts(1)))
        compared("POST of 1, with a receiver registered against without", services[0], services[1])


def test_an_unchanged_test_against_a_constant(tmp_path: Path) -> None:
    with beside_nothing(tmp_path) as (service, nothing):
        with service.client() as client:
            tag = client.get("/v1/tests/t1").headers["ETag"]
        asked = [{"method": "GET", "path": "/v1/tests/t1", "headers": {"If-None-Match": tag}}]
        constant = [{"method": "GET", "path": "/constant"}]
        key = service.keys["viewer"]
        compared(
            "GET with If-None-Match against a constant (asked for 0.6)",
            (service.url, key, asked),
            (nothing, key, constant),
        )


def test_what_a_million_observations_take(tmp_path: Path) -> None:
    """Bytes on disk for each pass/fail observation in batches of 100, and memory, over 1,000 tests."""
    plan = {**PLAN, "family": "bernoulli", "h0": 0.01, "h1": 0.0101, "known": None}
    with running(tmp_path) as service, service.client() as client:
        client.post("/v1/plans", json={k: v for k, v in plan.items() if v is not None}).raise_for_status()
        for i in range(1000):
            subject = {"kind": "lot", "name": "x"}
            client.post("/v1/tests", json={"key": f"t{i}", "plan": "wide", "subject": subject}).raise_for_status()
        begin, size = _memory(service.process.pid), _size(tmp_path)
        for _ in range(10):
            for i in range(1000):
                client.post(f"/v1/tests/t{i}/observations", json={"values": [0] * 100}).raise_for_status()
        grown = (_memory(service.process.pid) - begin) / 2**20
        print(
            f"\n{(_size(tmp_path) - size) / 1e6:.1f} bytes an observation (asked for 6); memory +{grown:.0f} MiB (64)"
        )


def _memory(pid: int) -> int:
    pages = int(Path(f"/proc/{pid}/statm").read_text(encoding="utf-8").split()[1])
    return pages * os.sysconf("SC_PAGE_SIZE")


def _size(folder: Path) -> int:
    return sum(path.stat().st_size for path in folder.iterdir() if "wal" not in path.name and "shm" not in path.name)
