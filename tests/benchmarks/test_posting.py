"""The cost of a POST does not depend on how many observations the test already has."""

import statistics
import time
from pathlib import Path

import httpx
import pytest

from tests.faults.fleet import PLAN
from tests.running import running

ROUNDS, POSTS = 9, 100


@pytest.mark.benchmark
def test_the_millionth_observation_costs_what_the_first_did(tmp_path: Path) -> None:
    """Median over rounds of the ratio of two tests posted to in turn: one with a million observations, one new."""
    with running(tmp_path, SPRT_MAX_BATCH="1000000") as service, service.client() as client:
        client.post("/v1/plans", json=PLAN).raise_for_status()
        for key in ("long", *(f"new-{i}" for i in range(ROUNDS))):
            registration = {"key": key, "plan": PLAN["name"], "subject": {"kind": "experiment", "name": key}}
            client.post("/v1/tests", json=registration).raise_for_status()
        for _ in range(100):
            _post(client, "long", [0.0, 0.001] * 5000)
        ratios = []
        for i in range(ROUNDS):
            spent = {"long": 0.0, f"new-{i}": 0.0}
            for _ in range(POSTS):
                for key in spent:
                    start = time.perf_counter()
                    _post(client, key, [0.0005])
                    spent[key] += time.perf_counter() - start
            ratios.append(spent["long"] / spent[f"new-{i}"])
        ratio = statistics.median(ratios)
        print(
            f"\nPOST of one observation, millionth against first: {ratio:.3f} ({min(ratios):.3f} to {max(ratios):.3f})"
        )
        assert client.get("/v1/tests/long").json()["sample_number"] == 1_000_000 + ROUNDS * POSTS
        assert ratio <= 1.1


def _post(client: httpx.Client, key: str, values: list[float]) -> None:
    client.post(f"/v1/tests/{key}/observations", json={"values": values}).raise_for_status()
