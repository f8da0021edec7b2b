"""What the first page of ten thousand tests costs, as a browser gets it from a real service."""

import statistics
import time
from pathlib import Path

import pytest
from sqlalchemy import text

from service.domain.checking import checked_content
from service.storage.engine import WRITES, create_engine_for
from service.storage.migrate import upgrade
from tests.pages.people import signed_in
from tests.running import running
from tests.storage.many import PLANS, fill

TESTS, ROUNDS = 10_000, 15

pytestmark = pytest.mark.benchmark


def test_the_first_page_of_ten_thousand_tests(tmp_path: Path) -> None:
    url = f"sqlite:///{tmp_path / 'pages.sqlite3'}"
    engine = create_engine_for(url)
    upgrade(engine)
    fill(engine, TESTS)
    with engine.connect().execution_options(**{WRITES: True}) as connection, connection.begin():
        for i in range(PLANS):
            content = {"family": "bernoulli", "h0": 0.01, "h1": 0.05 + i / 1000.0, "alpha": 0.05, "beta": 0.10}
            change = text("UPDATE plans SET document = :document WHERE name = :name")
            connection.execute(change, {"document": checked_content(content), "name": f"plan-{i}"})
    engine.dispose()
    with running(tmp_path, database_url=url) as service, signed_in(service, "viewer") as person:
        for address in ("/", "/?stage=running", "/?words=lot-1004", "/healthz"):
            took = []
            for _ in range(ROUNDS):
                begin = time.perf_counter()
                answer = person.get(address)
                took.append(1000.0 * (time.perf_counter() - begin))
                assert answer.status_code == 200
            size = len(answer.content) / 1024.0
            print(f"\n{address}: median {statistics.median(took):.0f} ms, longest {max(took):.0f} ms, {size:.0f} KiB")
