"""Clients that are slow, that leave in the middle, and a clock that goes backwards."""

import hashlib
import json
import socket
import time
from datetime import UTC, datetime, timedelta
from pathlib import Path
from urllib.parse import urlsplit

import httpx

from service.domain.checking import checked_content
from service.domain.sequential_test import Subject, SubjectKind
from service.ingest.commands import CreatePlan, Posted, PostObservations, RegisterTest
from service.ingest.road import perform_now
from service.storage.engine import create_engine_for
from service.storage.migrate import upgrade
from service.storage.reader import Reader
from tests.api.examples import SEAL, Namer, with_test
from tests.running import Running


def opened(service: Running, key: str, announced: int) -> socket.socket:
    """A connection on which the head of a POST has been sent."""
    place = urlsplit(service.url)
    connection = socket.create_connection((place.hostname or "", place.port or 0), timeout=20)
    head = (
        f"POST /v1/tests/{key}/observations HTTP/1.1\r\nHost: x\r\nContent-Type: application/json\r\n"
        f"Authorization: Bearer {service.keys['collector']}\r\nContent-Length: {announced}\r\n\r\n"
    )
    connection.sendall(head.encode())
    return connection


def test_slow_bodies_hold_nobody_up_and_are_taken_in_the_end(
    service: Running, admin: httpx.Client, new_name: Namer
) -> None:
    key = with_test(admin, new_name, SEAL)
    body = json.dumps({"values": [0, 0, 0]}).encode()
    slow = [opened(service, key, len(body)) for _ in range(20)]
    for connection in slow:
        connection.sendall(body[:5])
    begin = time.monotonic()
    assert admin.post(f"/v1/tests/{key}/observations", json={"values": [0]}).status_code == 201
    assert time.monotonic() - begin < 5
    for connection in slow[:2]:
        connection.sendall(body[5:])
        assert b" 201 " in connection.recv(4096).split(b"\r\n")[0]
    for connection in slow:
        connection.close()
    assert admin.get(f"/v1/tests/{key}").json()["sample_number"] == 7


def test_a_connection_cut_in_the_middle_of_a_request_stores_nothing(
    service: Running, admin: httpx.Client, new_name: Namer
) -> None:
    key = with_test(admin, new_name, SEAL)
    for sent in (b"", b'{"values": [0', b'{"values": [0, 0, 0]'):
        connection = opened(service, key, 21)
        connection.sendall(sent)
        connection.close()
    time.sleep(0.3)
    state = admin.get(f"/v1/tests/{key}").json()
    assert (state["version"], state["sample_number"]) == (1, 0)
    assert admin.post(f"/v1/tests/{key}/observations", json={"values": [0]}).json()["first_sequence"] == 1


def test_a_clock_that_goes_backwards_disturbs_no_order(tmp_path: Path) -> None:
    """The order is that of the sequence; times are what the clock said."""
    engine = create_engine_for(f"sqlite:///{tmp_path / 'clock.sqlite3'}")
    upgrade(engine)
    start = datetime(2031, 5, 4, 9, 30, tzinfo=UTC)
    moments = iter(start - timedelta(hours=hour) for hour in range(40))
    perform_now(engine, CreatePlan("seal", checked_content(SEAL), "me"), lambda: next(moments))
    perform_now(engine, RegisterTest("lot", "seal", Subject(SubjectKind.LOT, "x"), {}, "me"), lambda: next(moments))
    for _ in range(13):
        body = '{"values": [0, 0]}'
        command = PostObservations("lot", body, json.loads(body), hashlib.sha256(body.encode()).hexdigest(), "me")
        posted = perform_now(engine, command, lambda: next(moments))
        assert isinstance(posted, Posted)
    log = list(Reader(engine).log.submissions("lot"))
    assert [entry.first_sequence for entry in log] == list(range(1, 27, 2))
    assert [entry.received_at for entry in log] == sorted((entry.received_at for entry in log), reverse=True)
    state = log[-1].state
    assert (state.decision, state.decided and state.decided.sample_number, state.overrun) == ("accept", 24, 2)
    engine.dispose()
