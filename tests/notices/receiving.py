"""Real receivers on real sockets, which write down what they hear and answer as they are told."""

import base64
import hashlib
import hmac
import json
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from typing import Any


@dataclass(frozen=True)
class Heard:
    """One request as it came."""

    at: float
    path: str
    headers: dict[str, str]
    body: bytes

    @property
    def message(self) -> dict[str, Any]:
        """The body, decoded."""
        return json.loads(self.body)  # type: ignore[no-any-return]

    @property
    def about(self) -> tuple[Any, Any]:
        """The test and its version."""
        data = self.message["data"]
        return data.get("key"), data.get("version")

    @property
    def id(self) -> str:
        """What the sender calls it."""
        return self.headers["webhook-id"]

    def is_signed_with(self, secret: str) -> bool:
        """The signature, computed again from the description of the scheme, in the way of the README."""
        key = base64.b64decode(secret.partition("_")[2])
        signed = b".".join([self.id.encode(), self.headers["webhook-timestamp"].encode(), self.body])
        expected = b"v1," + base64.b64encode(hmac.digest(key, signed, hashlib.sha256))
        return hmac.compare_digest(expected, self.headers["webhook-signature"].encode())


# The status to answer with, or a way of answering of one's own.
Answer = int | Callable[[BaseHTTPRequestHandler], None]


class Receiver:
    """Listens on the loopback; `answer` says how to answer each request."""

    def __init__(self, answer: Callable[[Heard], Answer] = lambda _: 200) -> None:
        self.answer = answer
        self.heard: list[Heard] = []
        self.connections = 0
        receiver, lock = self, threading.Lock()

        class Handler(BaseHTTPRequestHandler):
            def setup(self) -> None:
                with lock:
                    receiver.connections += 1
                super().setup()

            def do_POST(self) -> None:
                body = self.rfile.read(int(self.headers["Content-Length"]))
                headers = {name.lower(): value for name, value in self.headers.items()}
                heard = Heard(time.monotonic(), self.path, headers, body)
                with lock:
                    receiver.heard.append(heard)
                answer = receiver.answer(heard)
                if callable(answer):
                    answer(self)
                else:
                    self.send_response(answer)
                    self.send_header("Content-Length", "0")
                    self.end_headers()

            def log_message(self, *_: object) -> None:
                """Say nothing."""

        class Server(ThreadingHTTPServer):
            daemon_threads = True
            request_queue_size = 100

            def handle_error(self, *_: object) -> None:
                """A sender that hangs up is no error here."""

        self._server = Server(("127.0.0.1", 0), Handler)
        self.port = self._server.server_address[1]
        self.url = f"http://127.0.0.1:{self.port}/told"
        self._thread = threading.Thread(target=self._server.serve_forever, args=(0.02,), daemon=True)
        self._thread.start()

    def stop(self) -> None:
        self._server.shutdown()
        self._server.server_close()

    @property
    def told(self) -> list[tuple[Any, Any]]:
        """The tests and versions heard of, in order."""
        return [heard.about for heard in list(self.heard)]


@contextmanager
def listening(answer: Callable[[Heard], Answer] = lambda _: 200) -> Iterator[Receiver]:
    receiver = Receiver(answer)
    try:
        yield receiver
    finally:
        receiver.stop()


def eventually(holds: Callable[[], bool], seconds: float = 30.0) -> None:
    """Wait until it holds."""
    deadline = time.monotonic() + seconds
    while not holds():
        assert time.monotonic() < deadline
        time.sleep(0.01)
