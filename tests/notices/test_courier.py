"""One attempt: where it connects to, by which name, and what it refuses to connect to."""

import asyncio
import itertools
import socket
import ssl
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path

import pytest

from service.domain.addresses import Allowed
from service.domain.notices import Attempt, Delivery, Notice, NoticeKind
from service.domain.receivers import Receiver as Told
from service.domain.receivers import secret_of
from service.notices.courier import Courier
from service.notices.resolving import Resolve, Resolver
from tests.notices.certificates import AUTHORITY, OF_BENCH
from tests.notices.receiving import Receiver, listening

NOW = datetime(2031, 5, 4, 9, 30, tzinfo=UTC)
SECRET = secret_of(b"s" * 32)
PUBLIC_ALONE, ANYTHING = Allowed(plain_http=True), Allowed(plain_http=True, private_targets=True)


@pytest.fixture
def receiver() -> Iterator[Receiver]:
    with listening() as started:
        yield started


def told_by(*answers: list[str]) -> tuple[Resolve, list[str]]:
    """A resolver that gives these answers one after another, and then the last; and the hosts that it was asked for."""
    asked: list[str] = []
    coming = itertools.chain(answers, itertools.repeat(answers[-1]))

    async def resolve(host: str) -> list[str]:
        asked.append(host)
        return next(coming)

    return resolve, asked


def carried(address: str, resolve: Resolve, allowed: Allowed = PUBLIC_ALONE, authority: Path | None = None) -> Attempt:
    told = Told("r1", "bench", address, SECRET, "f", NOW, "me")
    notice = Notice("n1", "r1", "lot-1", 2, NoticeKind.DECIDED, '{"é": 1}', NOW, NOW)

    def tls() -> ssl.SSLContext:
        return ssl.create_default_context(cafile=authority)

    return asyncio.run(Courier(allowed, 20.0, resolve, tls).carry(Delivery(notice, told), NOW))


@pytest.mark.parametrize(
    "answer",
    [
        ["127.0.0.1"],
        ["10.1.2.3"],
        ["169.254.169.254"],
        ["::1"],
        ["::ffff:127.0.0.1"],
        ["fe80::1%1"],
        ["64:ff9b::7f00:1"],
        ["8.8.8.8", "127.0.0.1"],
        ["127.0.0.1", "8.8.8.8"],
    ],
)
def test_a_name_is_refused_when_any_of_its_addresses_is_private(receiver: Receiver, answer: list[str]) -> None:
    resolve, asked = told_by(answer)
    attempt = carried(f"http://bench.example:{receiver.port}/", resolve)
    assert not attempt.is_delivered
    assert attempt.outcome.startswith("not sent: the address leads to ")
    assert asked == ["bench.example"]
    assert receiver.connections == 0


def test_the_systems_own_resolver_leads_nowhere_private_either(receiver: Receiver) -> None:
    """The name of this very machine, and the names that mean it everywhere."""
    for host in (socket.gethostname(), "localhost", "127.0.0.1", "[::1]", "[::ffff:127.0.0.1]"):
        attempt = carried(f"http://{host}:{receiver.port}/", Resolver())
        assert not attempt.is_delivered
        assert attempt.outcome.startswith(("not sent: the address leads to ", "no connection: ")), attempt
    assert receiver.connections == 0
    assert carried(f"http://localhost:{receiver.port}/", Resolver(), ANYTHING).is_delivered
    assert receiver.connections == 1


def test_a_name_that_changes_after_the_check_gains_nothing(receiver: Receiver) -> None:
    """Asked once: the connection goes to the address that was checked, though the name means another ever after."""
    resolve, asked = told_by(["127.0.0.1"], ["127.0.0.2"])
    assert carried(f"http://bench.example:{receiver.port}/a?b=c", resolve, ANYTHING).is_delivered
    assert asked == ["bench.example"]
    (heard,) = receiver.heard
    assert (heard.headers["host"], heard.path) == (f"bench.example:{receiver.port}", "/a?b=c")
    assert heard.is_signed_with(SECRET)
    assert heard.body == '{"é": 1}'.encode()
    assert heard.headers["webhook-timestamp"] == str(int(NOW.timestamp()))


def test_the_next_address_is_tried_where_nobody_listens(receiver: Receiver) -> None:
    resolve, _ = told_by(["127.0.0.2", "127.0.0.1"])
    with socket.socket() as other:
        other.bind(("127.0.0.2", 0))
        assert carried(f"http://bench.example:{receiver.port}/", resolve, ANYTHING).is_delivered
    resolve, _ = told_by(["127.0.0.2"])
    assert carried(f"http://bench.example:{receiver.port}/", resolve, ANYTHING).outcome.startswith("no connection: ")


def test_plain_http_is_refused_unless_it_is_allowed(receiver: Receiver) -> None:
    """Asked at each delivery: the setting may have been taken back since the receiver was registered."""
    attempt = carried(receiver.url, Resolver(), Allowed(private_targets=True))
    assert attempt.outcome == "not sent: the address must begin with https://; plain HTTP is not allowed here"
    assert receiver.connections == 0


def test_no_proxy_of_the_environment_comes_between(receiver: Receiver, monkeypatch: pytest.MonkeyPatch) -> None:
    with listening() as proxy:
        for name in ("HTTP_PROXY", "http_proxy", "ALL_PROXY", "HTTPS_PROXY"):
            monkeypatch.setenv(name, f"http://127.0.0.1:{proxy.port}")
        assert carried(receiver.url, Resolver(), ANYTHING).is_delivered
        assert (receiver.connections, proxy.connections) == (1, 0)


def test_a_name_that_nobody_knows_is_no_connection() -> None:
    assert carried("https://none.invalid/", Resolver()).outcome.startswith("no connection: ")


@contextmanager
def one_connection(tls: ssl.SSLContext | None, said: bytes) -> Iterator[tuple[int, dict[str, object]]]:
    """A server for one connection that says something whatever it hears; its port, and what it saw."""
    saw: dict[str, object] = {}
    if tls is not None:
        tls.sni_callback = lambda _socket, name, _context: saw.update(name=name)

    def serve() -> None:
        connection, _ = listener.accept()
        connection.settimeout(10)
        try:
            if tls is not None:
                connection = tls.wrap_socket(connection, server_side=True)
            saw["head"] = connection.recv(65536)
            connection.sendall(said)
            connection.close()
        except OSError as error:
            saw["error"] = error

    with socket.create_server(("127.0.0.1", 0)) as listener:
        thread = threading.Thread(target=serve, daemon=True)
        thread.start()
        yield listener.getsockname()[1], saw
        thread.join(10)


def test_under_tls_the_certificate_must_bear_the_name_and_be_trusted(tmp_path: Path) -> None:
    """The connection goes to a number, yet the name is what is asked for, checked and sent."""
    authority, own = tmp_path / "authority.pem", tmp_path / "own.pem"
    authority.write_text(AUTHORITY)
    own.write_text(OF_BENCH)
    resolve, _ = told_by(["127.0.0.1"])
    yes = b"HTTP/1.1 200 OK\r\nContent-Length: 0\r\n\r\n"
    for host, trusted, is_delivered in (
        ("bench.example", authority, True),
        ("other.example", authority, False),
        ("bench.example", None, False),
    ):
        tls = ssl.SSLContext(ssl.PROTOCOL_TLS_SERVER)
        tls.load_cert_chain(own)
        with one_connection(tls, yes) as (port, saw):
            attempt = carried(f"https://{host}:{port}/", resolve, Allowed(private_targets=True), trusted)
        assert attempt.is_delivered == is_delivered, attempt
        assert saw["name"] == host
        if is_delivered:
            assert f"host: {host}:{port}".encode() in bytes(saw["head"]).lower()  # type: ignore[call-overload]
        else:
            assert "CERTIFICATE_VERIFY_FAILED" in attempt.outcome
            assert "head" not in saw, "nothing is said to whom cannot be trusted"


@pytest.mark.parametrize(
    "said",
    [
        b"SSH-2.0-secret banner\r\n\r\n",
        b"HTTP/1.1 200 OK\r\nsecret banner\r\n\r\n",
        b"HTTP/1.1 200" + b"x" * 300_000,
        b"\x16\x03\x01",
        b"",
    ],
)
def test_what_is_no_answer_is_not_repeated_to_anybody(said: bytes) -> None:
    with one_connection(None, said) as (port, _):
        resolve, _ = told_by(["127.0.0.1"])
        attempt = carried(f"http://bench.example:{port}/", resolve, ANYTHING)
    assert not attempt.is_delivered
    assert attempt.outcome.startswith("no sound answer: ")
    assert "banner" not in attempt.outcome


def test_a_host_that_takes_long_to_resolve_holds_one_thread_and_no_other_host(monkeypatch: pytest.MonkeyPatch) -> None:
    let_go = threading.Event()
    asked: list[str] = []
    real = socket.getaddrinfo

    def resolve(host: str, *arguments: object, **named: object) -> object:
        if host == "silent.example":
            asked.append(host)
            let_go.wait(10)
            raise socket.gaierror("silent")
        return real(host, *arguments, **named)  # type: ignore[arg-type]

    monkeypatch.setattr(socket, "getaddrinfo", resolve)

    async def main() -> None:
        resolver = Resolver()
        waiting = [asyncio.create_task(resolver("silent.example")) for _ in range(100)]
        assert await resolver("127.0.0.1") == ["127.0.0.1"]
        assert asked == ["silent.example"]
        waiting[0].cancel()
        let_go.set()
        ended = await asyncio.gather(*waiting, return_exceptions=True)
        assert isinstance(ended[0], asyncio.CancelledError)
        assert all(isinstance(error, socket.gaierror) for error in ended[1:])

    asyncio.run(main())
