"""What a second process brings on one PostgreSQL, and what it costs in processor time."""

import os
import statistics
from contextlib import ExitStack
from pathlib import Path

import pytest
from sqlalchemy.engine import URL

from tests.benchmarks.test_road import loaded, posts, registered
from tests.postgres import fresh_database
from tests.running import Running, running

ROUNDS = 5

pytestmark = pytest.mark.benchmark


def seconds_of(pid: int) -> float:
    """Processor time that a process and its living descendants have used."""
    fields = Path(f"/proc/{pid}/stat").read_text(encoding="utf-8").rpartition(")")[2].split()
    own = (int(fields[11]) + int(fields[12])) / os.sysconf("SC_CLK_TCK")
    children = Path(f"/proc/{pid}/task/{pid}/children").read_text(encoding="utf-8").split()
    return own + sum(seconds_of(int(child)) for child in children)


def measured(service: Running) -> tuple[float, float]:
    """Requests a second, and processor seconds of the service for each request."""
    before = seconds_of(service.process.pid)
    report = loaded(service.url, service.keys["collector"], posts(1))
    return report["per_second"], (seconds_of(service.process.pid) - before) / report["requests"]


def test_two_processes_against_one(server: URL, tmp_path: Path) -> None:
    with ExitStack() as stack:
        services = []
        for workers in ("1", "2"):
            url = stack.enter_context(fresh_database(server))
            service = stack.enter_context(running(tmp_path, database_url=url, arguments=("--workers", workers)))
            with service.client() as client:
                registered(client, 32)
            services.append(service)
        rounds = [(measured(services[0]), measured(services[1])) for _ in range(ROUNDS)]
    for title, which, asked in (
        ("requests a second", 0, "at least 1.2"),
        ("processor time a request", 1, "at most 1.1"),
    ):
        ratios = sorted(two[which] / one[which] for one, two in rounds)
        one, two = (statistics.median(each[i][which] for each in rounds) for i in (0, 1))
        print(
            f"\ntwo processes against one, {title}: {statistics.median(ratios):.2f} "
            f"({ratios[0]:.2f} to {ratios[-1]:.2f}), asked for {asked}; {one:.4g} against {two:.4g}"
        )
