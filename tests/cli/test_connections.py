"""Connections that are meant to wear the service out, over real sockets."""

import asyncio
import contextlib
import json
import socket
import time
from collections.abc import AsyncIterator, Iterator
from contextlib import asynccontextmanager

import httpx
import pytest
import uvicorn
from starlette.types import Receive, Scope, Send

from service.cli.connections import HEAD_BYTES, HEAD_LINES, BoundedConnection
from tests.api.examples import SEAL, Namer, with_test
from tests.running import Running, free_port


@contextlib.contextmanager
def connected(service: Running) -> Iterator[socket.socket]:
    url = httpx.URL(service.url)
    with socket.create_connection((url.host, url.port or 80), timeout=20.0) as connection:
        yield connection


def rest(connection: socket.socket) -> bytes:
    """All that comes until the service closes."""
    received = b""
    with contextlib.suppress(ConnectionResetError):
        while piece := connection.recv(65536):
            received += piece
    return received


def status(received: bytes) -> int:
    return int(received.split()[1])


@pytest.mark.parametrize(
    "head",
    [
        b"GET /healthz HTTP/1.1\r\nHost: x\r\nX-Long: " + b"a" * (HEAD_BYTES + 1) + b"\r\n\r\n",
        b"GET /healthz HTTP/1.1\r\nHost: x\r\nX-Endless: " + b"a" * (4 * HEAD_BYTES),
        b"GET /healthz HTTP/1.1\r\nHost: x\r\n" + b"X-More: a\r\n" * (HEAD_LINES + 1) + b"\r\n",
        b"GET /" + b"a" * (HEAD_BYTES + 1) + b" HTTP/1.1\r\nHost: x\r\n\r\n",
        b"GET /" + b"a" * (4 * HEAD_BYTES),
    ],
)
def test_a_head_too_large_is_refused_and_the_connection_closed(guarded: Running, head: bytes) -> None:
    with connected(guarded) as connection:
        with contextlib.suppress(BrokenPipeError, ConnectionResetError):
            connection.sendall(head)
        received = rest(connection)
        assert not received or status(received) == 431
    assert httpx.get(f"{guarded.url}/healthz").status_code == 200


def test_a_head_within_the_limits_passes_on_every_turn(guarded: Running) -> None:
    lines = b"".join(b"X-Line-%d: %s\r\n" % (i, b"a" * 200) for i in range(HEAD_LINES - 10))
    with connected(guarded) as connection:
        for _ in range(3):
            connection.sendall(b"GET /healthz HTTP/1.1\r\nHost: x\r\n" + lines + b"\r\n")
            received = b""
            while not received.endswith(b"}"):
                received += connection.recv(65536)
            assert status(received) == 200


class Impatient(BoundedConnection):
    head_seconds = 0.4


async def hello(scope: Scope, _receive: Receive, send: Send) -> None:
    """Answers slowly where it is asked to."""
    await asyncio.sleep(1.0 if scope["path"] == "/slow" else 0.0)
    await send({"type": "http.response.start", "status": 200, "headers": [(b"content-length", b"2")]})
    await send({"type": "http.response.body", "body": b"hi"})


@asynccontextmanager
async def impatient() -> AsyncIterator[int]:
    """A server on a port of its own that allows a head 0.4 seconds."""
    config = uvicorn.Config(hello, http=Impatient, port=free_port(), lifespan="off", log_config=None)
    server = uvicorn.Server(config)
    listening = config.bind_socket()
    serving = asyncio.create_task(server._serve([listening]))  # noqa: SLF001 - leaves the signals of the tests alone
    try:
        while not server.started:  # noqa: ASYNC110 - the server has no event for it
            await asyncio.sleep(0.01)
        yield config.port
    finally:
        server.should_exit = True
        await serving
        listening.close()


def test_a_head_that_never_ends_is_closed_in_time() -> None:
    """A line now and then keeps nobody's connection open; nor does saying nothing at all, nor one good request."""

    async def attack() -> list[bytes]:
        async with impatient() as port:
            streams = [await asyncio.open_connection("127.0.0.1", port) for _ in range(3)]
            (silent, _), (reading, dripping), (again, second) = streams
            second.write(b"GET / HTTP/1.1\r\nHost: x\r\n\r\n")
            assert status(await again.readuntil(b"hi")) == 200
            for stream in (dripping, second):
                stream.write(b"GET / HTTP/1.1\r\nHost: x\r\n")
            for _ in range(3):
                await asyncio.sleep(0.1)
                for stream in (dripping, second):
                    stream.write(b"X-Drip: a\r\n")
            received = [await stream.read() for stream in (silent, reading, again)]
            for _, writing in streams:
                writing.close()
                await writing.wait_closed()
            return received

    for received in asyncio.run(attack()):
        assert status(received) == 408


def test_a_head_sent_ahead_waits_for_its_turn() -> None:
    """The answer before it is whole, and it is answered too, however long the first took."""

    async def ask() -> bytes:
        async with impatient() as port:
            reading, writing = await asyncio.open_connection("127.0.0.1", port)
            writing.write(b"GET /slow HTTP/1.1\r\nHost: x\r\n\r\nGET / HTTP/1.1\r\nHost: x\r\n")
            await asyncio.sleep(0.6)
            writing.write(b"Connection: close\r\n\r\n")
            received = await reading.read()
            writing.close()
            await writing.wait_closed()
            return received

    assert asyncio.run(ask()).count(b"HTTP/1.1 200") == 2


def test_a_body_too_slow_is_refused_and_stores_nothing(guarded: Running, new_name: Namer) -> None:
    with guarded.client() as admin:
        key = with_test(admin, new_name, SEAL)
        body = json.dumps({"values": [0] * 10}).encode()
        with connected(guarded) as connection:
            head = (
                f"POST /v1/tests/{key}/observations HTTP/1.1\r\nHost: x\r\nContent-Type: application/json\r\n"
                f"Authorization: Bearer {guarded.keys['collector']}\r\nContent-Length: {len(body)}\r\n\r\n"
            )
            connection.sendall(head.encode() + body[:5])
            received = rest(connection)
        assert status(received) == 408
        assert json.loads(received.partition(b"\r\n\r\n")[2])["type"] == "urn:sprt-monitor:problem:body-too-slow"
        assert b"connection: close" in received.lower()
        assert admin.get(f"/v1/tests/{key}").json()["version"] == 1


def test_more_connections_than_allowed_are_turned_away(guarded: Running) -> None:
    with contextlib.ExitStack() as stack:
        for _ in range(8):
            stack.enter_context(connected(guarded))
        time.sleep(0.2)
        assert httpx.get(f"{guarded.url}/healthz").status_code == 503
    deadline = time.monotonic() + 5.0
    while httpx.get(f"{guarded.url}/healthz").status_code != 200:
        assert time.monotonic() < deadline


@pytest.mark.parametrize(
    "sent",
    [
        b"\x16\x03\x01\x02\x00\x01\x00\x01\xfc\x03\x03",
        b"GET /healthz HTTP/1.1\r\nHost: x\r\nX: a\r\n b: folded\x00\r\n\r\n",
        b"POST /v1/plans HTTP/1.1\r\nHost: x\r\nContent-Length: 5\r\nContent-Length: 6\r\n\r\nhello",
        b"POST /v1/plans HTTP/1.1\r\nHost: x\r\nContent-Length: 5\r\nTransfer-Encoding: chunked\r\n\r\n0\r\n\r\n",
        b"POST /v1/plans HTTP/1.1\r\nHost: x\r\nContent-Length: -1\r\n\r\n",
        b"GET /healthz HTTP/9.9\r\nHost: x\r\n\r\n",
    ],
)
def test_what_is_not_sound_http_is_refused(guarded: Running, sent: bytes) -> None:
    with connected(guarded) as connection:
        connection.sendall(sent)
        connection.shutdown(socket.SHUT_WR)
        received = rest(connection)
        assert not received or status(received) == 400


def test_no_answer_names_the_server(guarded: Running) -> None:
    with connected(guarded) as connection:
        connection.sendall(b"GET /healthz HTTP/1.1\r\nHost: x\r\nConnection: close\r\n\r\n")
        assert b"server:" not in rest(connection).lower()
