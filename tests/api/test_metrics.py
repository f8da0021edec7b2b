"""The figures for monitoring: right in one process, and added up over several."""

import itertools
import os
import re
import signal
import time
from collections.abc import Callable
from pathlib import Path

import httpx
from sqlalchemy.engine import URL

from service.web.metrics import Metrics
from tests.api.examples import SEAL, Namer, with_test
from tests.notices.receiving import Receiver, listening
from tests.postgres import fresh_database
from tests.running import Running, running

Figures = dict[str, float]

TELLING = {"SPRT_NOTICE_PLAIN_HTTP": "true", "SPRT_NOTICE_PRIVATE_TARGETS": "true"}


def figures(client: httpx.Client) -> Figures:
    answer = client.get("/metrics")
    assert answer.status_code == 200
    assert answer.headers["Content-Type"].startswith("text/plain")
    lines = [line.rpartition(" ") for line in answer.text.splitlines() if not line.startswith("#")]
    return {name: float(value) for name, _, value in lines}


def requests(found: Figures, method: str, route: str, status: int) -> float:
    return found.get(f'sprt_requests_total{{method="{method}",route="{route}",status="{status}"}}', 0.0)


def eventually(holds: Callable[[], bool], seconds: float = 10.0) -> None:
    deadline = time.monotonic() + seconds
    while not holds():
        assert time.monotonic() < deadline
        time.sleep(0.05)


def test_requests_groups_and_decisions_are_counted(admin: httpx.Client, new_name: Namer) -> None:
    before = figures(admin)
    key = with_test(admin, new_name, SEAL)
    path = f"/v1/tests/{key}/observations"
    for _ in range(2):
        admin.post(path, json={"values": [0] * 25}, headers={"Idempotency-Key": "first"}).raise_for_status()
    admin.post(path, json={"values": [0]}).raise_for_status()
    assert admin.get(f"/v1/tests/{key}", headers={"If-None-Match": "*"}).status_code == 304
    assert admin.request("PURGE", "/v1/some/unknown/address").status_code == 404
    after = figures(admin)

    def more(name: str) -> float:
        return after.get(name, 0.0) - before.get(name, 0.0)

    assert requests(after, "POST", "/v1/tests/{key}/observations", 201) >= 3
    assert requests(after, "GET", "/v1/tests/{key}", 304) >= 1
    assert requests(after, "other", "-", 404) >= 1
    assert more("sprt_observations_total") == 26
    assert more('sprt_decisions_total{decision="accept",kind="lot"}') == 1
    assert (
        more("sprt_group_commands_sum") == more("sprt_group_commands_count") == more("sprt_commit_seconds_count") == 5
    )
    assert 0.0 < more("sprt_commit_seconds_sum") < 30.0
    assert after["sprt_commands_waiting"] == 0
    route = 'method="POST",route="/v1/tests/{key}/observations"'
    buckets = [
        value for name, value in after.items() if name.startswith("sprt_request_seconds_bucket{") and route in name
    ]
    assert buckets == sorted(buckets)
    assert buckets[-1] == after[f"sprt_request_seconds_count{{{route}}}"]
    assert "unknown" not in "".join(after)
    assert key not in "".join(after)


def test_open_streams_are_counted_while_they_are_open(admin: httpx.Client) -> None:
    open_before = figures(admin)["sprt_event_streams"]
    with admin.stream("GET", "/v1/events") as stream:
        lines = stream.iter_lines()  # kept, for the stream ends with it
        assert next(lines).startswith("retry")
        assert figures(admin)["sprt_event_streams"] == open_before + 1
    eventually(lambda: figures(admin)["sprt_event_streams"] == open_before)


def test_the_figures_may_be_shown_to_all(guarded: Running) -> None:
    with guarded.client(None) as nobody:
        assert "sprt_requests_total" in nobody.get("/metrics").text


def test_a_process_counts_what_failed() -> None:
    metrics = Metrics()
    metrics.failed()
    assert b"sprt_commit_failures_total 1.0" in metrics.text()


def workers(service: Running) -> list[int]:
    """The processes below the one that was started which serve."""
    started = service.process.pid
    below = Path(f"/proc/{started}/task/{started}/children").read_text(encoding="utf-8").split()
    return [int(process) for process in below if b"spawn_main" in Path(f"/proc/{process}/cmdline").read_bytes()]


def test_whichever_process_is_asked_answers_for_all(server: URL, tmp_path: Path) -> None:
    """Two real processes on one port, and one of them killed while it holds a stream."""
    with (
        fresh_database(server) as url,
        running(tmp_path, database_url=url, arguments=("--workers", "2"), **TELLING) as service,  # type: ignore[arg-type]
    ):
        asked, served = 0, 0
        headers = {"Authorization": f"Bearer {service.keys['viewer']}", "Connection": "close"}
        with httpx.Client(base_url=service.url, headers=headers) as client:
            while served < 2:  # until both have answered, each new connection going to either
                assert client.get("/v1/summary").status_code == 200
                asked += 1
                assert asked < 500
                served = len(list(metric_files(service)))
            for _ in range(10):
                assert requests(figures(client), "GET", "/v1/summary", 200) == asked
            for _ in range(3):
                last = figures(client)
            assert requests(last, "GET", "/metrics", 200) == 12
            with listening() as receiver:
                notices_are_counted_together(service, receiver, client)
            with client.stream("GET", "/v1/events") as stream:
                lines = stream.iter_lines()
                assert next(lines).startswith("retry")
                assert figures(client)["sprt_event_streams"] == 1
                for process in workers(service):
                    os.kill(process, signal.SIGKILL)
            eventually(lambda: ready(client), 30.0)
            found = figures(client)
            assert found["sprt_event_streams"] == 0
            assert requests(found, "GET", "/v1/summary", 200) == asked


def notices_are_counted_together(service: Running, receiver: Receiver, viewer: httpx.Client) -> None:
    """Whichever process sends them, and each sent once."""
    headers = {"Authorization": f"Bearer {service.keys['administrator']}", "Connection": "close"}
    with httpx.Client(base_url=service.url, headers=headers) as client:
        client.post("/v1/receivers", json={"name": "bench", "address": receiver.url}).raise_for_status()
        numbers = itertools.count(1)
        keys = [with_test(client, lambda prefix: f"{prefix}-{next(numbers)}", SEAL) for _ in range(8)]
        for key in keys:
            client.post(f"/v1/tests/{key}/observations", json={"values": [0] * 24}).raise_for_status()
    eventually(lambda: figures(viewer).get('sprt_notice_deliveries_total{outcome="delivered"}') == 8, 30.0)
    assert sorted(receiver.told) == sorted((key, 2) for key in keys)
    for _ in range(6):
        found = figures(viewer)
        assert found['sprt_notice_deliveries_total{outcome="delivered"}'] == 8
        assert (found["sprt_notices_waiting"], found["sprt_oldest_notice_seconds"]) == (0, 0)


def ready(client: httpx.Client) -> bool:
    try:
        return client.get("/readyz").status_code == 200
    except httpx.TransportError:
        return False


def metric_files(service: Running) -> set[str]:
    """The processes that have counted a request, by the names of their files."""
    environment = Path(f"/proc/{workers(service)[0]}/environ").read_bytes().decode()
    found = re.search(r"PROMETHEUS_MULTIPROC_DIR=([^\0]+)", environment)
    assert found
    return {file.name for file in Path(found[1]).glob("counter_*.db") if b"/v1/summary" in file.read_bytes()}
