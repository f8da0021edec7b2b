"""Streams of changed tests over a real socket, on both databases."""

import asyncio
import contextlib
import json
import os
import re
import socket
import subprocess
import time
from collections.abc import AsyncIterator, Callable, Iterator
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import httpx
import pytest
from sqlalchemy.engine import URL

from service.web import streams
from tests.api.examples import SEAL, Namer, pointers, with_plan
from tests.documents import README, blocks
from tests.postgres import fresh_database, own_server
from tests.running import Running, running

Event = dict[str, Any]


class Watched:
    """An open stream, read event by event."""

    def __init__(self, answer: httpx.Response) -> None:
        self.answer = answer
        self._lines = answer.iter_lines()
        self.last_id = ""

    def next(self) -> Event:
        """The data of the next event with any; a quiet stream ends the test by its read timeout."""
        data = None
        for line in self._lines:
            name, _, value = line.partition(": ")
            if name == "id":
                self.last_id = value
            elif name == "data":
                data = value
            elif not line and data is not None:
                event: Event = json.loads(data)
                return event
        raise EOFError

    def until(self, key: str, version: int) -> list[Event]:
        """The events up to the one that tells this."""
        told = [self.next()]
        while (told[-1]["key"], told[-1]["version"]) != (key, version):
            told.append(self.next())
        return told


@contextlib.contextmanager
def watching(
    service: Running, role: str = "viewer", last_event_id: str | None = None, secret: str | None = None, **query: Any
) -> Iterator[Watched]:
    headers = {"Authorization": f"Bearer {secret or service.keys[role]}"}
    if last_event_id is not None:
        headers["Last-Event-ID"] = last_event_id
    with (
        httpx.Client(base_url=service.url, headers=headers, timeout=10.0) as client,
        client.stream("GET", "/v1/events", params=query) as answer,
    ):
        assert answer.status_code == 200, answer.read()
        yield Watched(answer)


@pytest.fixture(scope="module", params=["sqlite", "postgresql"])
def database(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    if request.param == "sqlite":
        yield f"sqlite:///{tmp_path_factory.mktemp('events') / 'events.sqlite3'}"
        return
    with fresh_database(request.getfixturevalue("server")) as url:
        yield url


@pytest.fixture(scope="module")
def watched(database: str, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Running]:
    settings: Any = {"SPRT_STREAM_LIMIT": "4", "SPRT_HEARTBEAT_SECONDS": "1"}
    with running(tmp_path_factory.mktemp("watched"), database_url=database, **settings) as service:
        yield service


@pytest.fixture
def engineer(watched: Running) -> Iterator[httpx.Client]:
    with watched.client("engineer") as client:
        yield client


def register(client: httpx.Client, new_name: Namer, plan: str | None = None, **extra: Any) -> str:
    plan = plan or with_plan(client, new_name("plan"), SEAL)
    key = new_name("lot")
    subject = {"kind": "lot", "name": key}
    client.post("/v1/tests", json={"key": key, "plan": plan, "subject": subject, **extra}).raise_for_status()
    return key


def post(client: httpx.Client, key: str, values: list[int]) -> Event:
    answer = client.post(f"/v1/tests/{key}/observations", json={"values": values})
    answer.raise_for_status()
    state: Event = answer.json()
    return state


def test_a_stream_tells_of_registrations_and_changes(watched: Running, engineer: httpx.Client, new_name: Namer) -> None:
    plan = with_plan(engineer, new_name("plan"), SEAL)
    with watching(watched) as stream:
        assert stream.answer.headers["Content-Type"].startswith("text/event-stream")
        assert stream.answer.headers["Cache-Control"] == "no-store"
        assert stream.answer.headers["X-Accel-Buffering"] == "no"
        key = register(engineer, new_name, plan)
        registered = stream.next()
        assert (registered["key"], registered["version"], registered["decision"]) == (key, 1, "continue")
        state = post(engineer, key, [0] * 24)
        told = stream.until(key, 2)[-1]
        assert told == {name: state[name] for name in ("key", "version", "decision", "status", "updated_at")}
        assert told["decision"] == "accept"


def test_every_filter_narrows(watched: Running, engineer: httpx.Client, new_name: Namer) -> None:
    plan, other = (with_plan(engineer, new_name("plan"), SEAL) for _ in range(2))
    first = register(engineer, new_name, other)
    with watching(watched, after=0) as stream:
        stream.until(first, 1)
        position = stream.last_id
    right = register(
        engineer, new_name, plan, subject={"kind": "experiment", "name": "ours"}, labels={"line": "3", "shift": "a"}
    )
    register(engineer, new_name, other, labels={"line": "4"})
    last = register(engineer, new_name, other)
    questions: list[Any] = [
        {"key": right},
        {"plan": plan},
        {"kind": "experiment"},
        {"subject": "ours"},
        {"label": "line:3"},
        {"label": ["line:3", "shift:a"]},
        {"decision": "continue", "plan": plan},
    ]
    for question in questions:
        with watching(watched, after=position, **question) as stream:
            assert stream.next()["key"] == right, question
            # What does not match is passed over, and the position with it.
            post(engineer, last, [0])
            post(engineer, right, [0])
            assert stream.next()["key"] == right, question
        with watching(watched, last_event_id=stream.last_id, **question) as again:
            version = post(engineer, right, [0])["version"]
            assert again.next()["version"] == version


def test_what_changed_meanwhile_is_told_once_as_it_is_now(
    watched: Running, engineer: httpx.Client, new_name: Namer
) -> None:
    plan = with_plan(engineer, new_name("plan"), SEAL)
    with watching(watched) as stream:
        key = register(engineer, new_name, plan)
        stream.until(key, 1)
    post(engineer, key, [0])
    other = register(engineer, new_name, plan)
    post(engineer, key, [0])
    for resumed in ({"last_event_id": stream.last_id}, {"after": stream.last_id}):
        with watching(watched, **resumed) as again:
            told = [again.next(), again.next()]
            assert [(event["key"], event["version"]) for event in told] == [(other, 1), (key, 3)]
    with watching(watched, last_event_id=again.last_id, after=0) as nothing_missed:
        latest = post(engineer, key, [0])
        assert nothing_missed.next()["version"] == latest["version"]


def test_more_than_a_page_is_told_in_order_and_whole(watched: Running, engineer: httpx.Client, new_name: Namer) -> None:
    plan = with_plan(engineer, new_name("plan"), SEAL)
    keys = [register(engineer, new_name, plan) for _ in range(220)]
    with watching(watched, after=0, plan=plan) as stream:
        assert [event["key"] for event in stream.until(keys[-1], 1)] == keys


def test_a_position_from_a_database_that_was_set_back_tells_everything(
    watched: Running, engineer: httpx.Client, new_name: Namer
) -> None:
    key = register(engineer, new_name)
    with watching(watched, last_event_id=str(2**60)) as stream:
        assert stream.until(key, 1)


@pytest.mark.parametrize("given", ["-1", "x", str(2**63), "1.5", ""])
def test_a_position_that_is_none_is_refused(watched: Running, given: str) -> None:
    with watched.client("viewer") as client:
        answer = client.get("/v1/events", params={"after": given})
        assert (answer.status_code, pointers(answer)) == (422, ["/after"])
        if given:
            answer = client.get("/v1/events", headers={"Last-Event-ID": given})
            assert (answer.status_code, pointers(answer)) == (422, ["/last-event-id"])
        assert client.get("/v1/events", params={"label": "x"}).status_code == 422
        assert client.get("/v1/events", params={"limit": "3"}).status_code == 422


def asked(service: Running) -> bytes:
    """A request for a stream as it goes over the wire."""
    lines = ["GET /v1/events?after=0 HTTP/1.1", "Host: x", f"Authorization: Bearer {service.keys['viewer']}"]
    return "\r\n".join([*lines, "", ""]).encode()


def eventually(holds: Callable[[], bool], seconds: float = 5.0) -> None:
    deadline = time.monotonic() + seconds
    while not holds():
        assert time.monotonic() < deadline
        time.sleep(0.05)


def is_refused(service: Running) -> bool:
    with service.client("viewer") as client, client.stream("GET", "/v1/events") as answer:
        if answer.status_code == 200:
            return False
        assert answer.status_code == 503
        assert answer.headers["Retry-After"] == "15"
        return True


def test_places_are_limited_and_given_back_at_once(watched: Running) -> None:
    """Callers who left, by closing or by breaking the connection off, hold no place."""
    with contextlib.ExitStack() as stack:
        for _ in range(4):
            stack.enter_context(watching(watched))
        assert is_refused(watched)
    eventually(lambda: not is_refused(watched))
    address = httpx.URL(watched.url)
    sockets = []
    for _ in range(4):
        plain = socket.create_connection((address.host, address.port or 80))
        sockets.append(plain)
        plain.sendall(
            f"GET /v1/events HTTP/1.1\r\nHost: x\r\nAuthorization: Bearer {watched.keys['viewer']}\r\n\r\n".encode()
        )
        assert plain.recv(12) == b"HTTP/1.1 200"
    assert is_refused(watched)
    for plain in sockets:
        plain.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, b"\x01\x00\x00\x00\x00\x00\x00\x00")
        plain.close()
    eventually(lambda: not is_refused(watched))


def test_a_caller_who_does_not_read_holds_up_nobody(watched: Running, engineer: httpx.Client, new_name: Namer) -> None:
    address = httpx.URL(watched.url)
    with socket.socket() as asleep:
        asleep.setsockopt(socket.SOL_SOCKET, socket.SO_RCVBUF, 4096)
        asleep.connect((address.host, address.port))
        request = (
            f"GET /v1/events?after=0 HTTP/1.1\r\nHost: x\r\nAuthorization: Bearer {watched.keys['viewer']}\r\n\r\n"
        )
        asleep.sendall(request.encode())
        with watching(watched) as stream:
            key = register(engineer, new_name)
            stream.until(key, 1)
            for version in range(2, 10):
                post(engineer, key, [0])
                stream.until(key, version)


def test_a_caller_who_takes_nothing_for_long_loses_the_place(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(streams, "PATIENCE_SECONDS", 0.1)
    left = []

    async def told() -> AsyncIterator[str]:
        yield "retry: 3000\n\n"

    async def never(*_: Any) -> Any:
        await asyncio.Event().wait()

    async def run() -> None:
        stream = streams.EventStream(told(), lambda: left.append("place"))
        async with asyncio.timeout(5.0):
            await stream({"type": "http", "asgi": {"spec_version": "2.3"}}, never, never)

    asyncio.run(run())
    assert left == ["place"]


def test_a_stream_resumes_after_a_restart_which_does_not_wait_for_it(
    database: str, engineer: httpx.Client, new_name: Namer, tmp_path: Path
) -> None:
    """The stream ends when the service is told to, well before the patience with open connections is over."""
    with running(tmp_path, key_names="again-{}", database_url=database) as other, watching(other) as stream:
        key = register(engineer, new_name)
        stream.until(key, 1)
        begin = time.monotonic()
        other.process.terminate()
        with pytest.raises(EOFError):
            stream.next()
        other.process.wait(20)
        assert time.monotonic() - begin < 5.0
    post(engineer, key, [0])
    with (
        running(tmp_path, key_names="third-{}", database_url=database) as after,
        watching(after, last_event_id=stream.last_id) as again,
    ):
        assert again.until(key, 2)


def test_what_one_process_writes_another_tells(server: URL, tmp_path: Path, new_name: Namer) -> None:
    with (
        fresh_database(server) as url,
        running(tmp_path, database_url=url) as writing,
        running(tmp_path, key_names="two-{}", database_url=url) as telling,
        writing.client("engineer") as client,
        watching(telling) as stream,
        watching(writing) as own,
    ):
        key = register(client, new_name)
        for version in range(2, 8):
            post(client, key, [0])
            for each in (stream, own):
                each.until(key, version)


def test_a_stream_ends_with_its_access_key_and_shows_that_it_lives_until_then(
    watched: Running, new_name: Namer
) -> None:
    name = new_name("board")
    with watched.client() as admin:
        made = admin.post("/v1/keys", json={"name": name, "role": "viewer"}).json()
        with watching(watched, secret=made["secret"], plan="none") as stream:
            lines = stream.answer.iter_lines()
            assert [next(lines) for _ in range(5)][::3] == ["retry: 3000", ": still here"]
            admin.delete(f"/v1/keys/{name}").raise_for_status()
            assert list(lines)[-1] == ""
        soon = (datetime.now(UTC) + timedelta(seconds=1.5)).isoformat()
        made = admin.post("/v1/keys", json={"name": name, "role": "viewer", "expires_at": soon}).json()
        with watching(watched, secret=made["secret"], plan="none") as stream, pytest.raises(EOFError):
            stream.next()


def test_a_database_that_goes_away_leaves_the_stream_open(tmp_path: Path, new_name: Namer) -> None:
    with (
        own_server() as server,
        fresh_database(server.url) as url,
        running(tmp_path, database_url=url) as service,
        service.client("engineer") as client,
    ):
        key = register(client, new_name)
        with watching(service, after=0) as stream:
            stream.until(key, 1)
            server.stop()
            time.sleep(0.5)
            server.start()
            asked_to = f"/v1/tests/{key}/observations"
            eventually(lambda: client.post(asked_to, json={"values": [0]}).status_code == 201, 15.0)
            assert stream.until(key, 2)


def test_the_stream_that_the_readme_shows(tmp_path: Path) -> None:
    """With curl as it stands; the service ends the stream."""
    (asked,) = (block for block in blocks(README, "bash") if "/v1/events" in block)
    (shown,) = (block for block in blocks(README, "text") if "event: test" in block)
    with running(tmp_path) as service, service.client() as client:
        with_plan(client, "seal-leak", SEAL)
        with subprocess.Popen(
            ["bash", "-c", asked.replace("localhost:8000", service.url)],
            env={**os.environ, "SPRT_KEY": service.keys["viewer"]},
            stdout=subprocess.PIPE,
            text=True,
        ) as curl:
            assert curl.stdout is not None
            lines = [curl.stdout.readline() for _ in range(3)]
            subject = {"kind": "lot", "name": "2041/B"}
            registration = {"key": "lot-2041", "plan": "seal-leak", "subject": subject, "labels": {"line": "3"}}
            client.post("/v1/tests", json=registration).raise_for_status()
            lines += [curl.stdout.readline() for _ in range(4)]
            service.process.terminate()
            curl.wait(10)
    assert stable("".join(lines)) == stable(shown)


def stable(text: str) -> str:
    return re.sub(r"\d{4}-\d\d-[^\"]*", "…", text).strip()
