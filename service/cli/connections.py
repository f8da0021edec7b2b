"""
Connections: the limits that the server does not set by itself.

The head of a request may have so many lines, so many bytes and so much time, so that nobody can fill the memory or hold
connections with heads that never end. A body's time is limited where it is read.
"""

import asyncio

from uvicorn.protocols.http.httptools_impl import STATUS_LINE, HttpToolsProtocol

HEAD_BYTES = 32 * 1024
HEAD_LINES = 100
HEAD_SECONDS = 10.0


class BoundedConnection(HttpToolsProtocol):
    """One connection; a head beyond its limits is refused and the connection closed."""

    head_seconds = HEAD_SECONDS
    _head_bytes = _head_lines = _parsed_bytes = 0
    _is_in_head, _is_refused = True, False
    _head_timer: asyncio.TimerHandle | None = None

    def connection_made(self, transport: asyncio.Transport) -> None:  # type: ignore[override]
        """The first head has its time from here."""
        super().connection_made(transport)
        self._begin_head()

    def connection_lost(self, exc: Exception | None) -> None:
        """Nothing more comes."""
        self._end_head()
        super().connection_lost(exc)

    def data_received(self, data: bytes) -> None:
        """What came; a head that goes on for too long is refused."""
        if self._is_refused:
            return
        super().data_received(data)
        if self._is_in_head and not self._is_refused:
            self._head_bytes += len(data)
            if self._head_bytes > HEAD_BYTES:
                self._refuse(431)

    def on_message_begin(self) -> None:
        """A later head has its time from its first byte; until then the server's own limit holds."""
        super().on_message_begin()
        if not self._is_in_head:
            self._begin_head()

    def on_url(self, url: bytes) -> None:
        """A piece of the address."""
        super().on_url(url)
        self._count(len(url))

    def on_header(self, name: bytes, value: bytes) -> None:
        """One line of the head."""
        super().on_header(name, value)
        self._head_lines += 1
        self._count(len(name) + len(value))

    def on_headers_complete(self) -> None:
        """The head has ended."""
        self._end_head()
        super().on_headers_complete()

    def send_400_response(self, msg: str) -> None:
        """What is not HTTP, unless it was refused for its size."""
        if not self._is_refused:
            super().send_400_response(msg)

    def _begin_head(self) -> None:
        self._is_in_head = True
        self._head_bytes = self._head_lines = self._parsed_bytes = 0
        self._head_timer = self.loop.call_later(self.head_seconds, self._be_late)

    def _be_late(self) -> None:
        if self._is_answering():  # a head that was sent ahead has time until its turn
            self._begin_head()
        else:
            self._refuse(408)

    def _is_answering(self) -> bool:
        return self.cycle is not None and not self.cycle.response_complete

    def _end_head(self) -> None:
        self._is_in_head = False
        if self._head_timer is not None:
            self._head_timer.cancel()
            self._head_timer = None

    def _count(self, size: int) -> None:
        """
        Add to the head.

        Raises:
            ValueError: It is too large; the parser stops at it.
        """
        self._parsed_bytes += size
        if self._parsed_bytes > HEAD_BYTES or self._head_lines > HEAD_LINES:
            self._refuse(431)
            raise ValueError("the head is too large")

    def _refuse(self, status: int) -> None:
        """Answer with a bare status, as there is no request yet, and close."""
        self._is_refused = True
        self._end_head()
        if self.transport.is_closing():
            return
        if not self._is_answering():
            self.transport.write(STATUS_LINE[status] + b"content-length: 0\r\nconnection: close\r\n\r\n")
        self.transport.close()
