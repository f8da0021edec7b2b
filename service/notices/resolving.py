"""
Names to numeric addresses, on threads of their own.

The system's resolver blocks its thread, perhaps for long. Callers who ask for the same host share one question, so that
a host whose name servers are silent holds one thread, and there are as many as there may be receivers: none of them,
and nothing else in the process, waits for it.
"""

import asyncio
import socket
from collections.abc import Awaitable, Callable
from concurrent.futures import ThreadPoolExecutor

from service.domain.receivers import MOST_RECEIVERS

# All numeric addresses of a host, in the order in which they are to be tried; raises OSError where there is none.
Resolve = Callable[[str], Awaitable[list[str]]]


class Resolver:
    """The system's resolver. Belongs to one event loop."""

    def __init__(self) -> None:
        self._threads = ThreadPoolExecutor(MOST_RECEIVERS, thread_name_prefix="resolver")
        self._asked: dict[str, asyncio.Future[list[str]]] = {}

    async def __call__(self, host: str) -> list[str]:
        """
        All addresses of a host.

        Raises:
            OSError: It has none, or nobody knows.
        """
        question = self._asked.get(host)
        if question is None:
            question = asyncio.get_running_loop().run_in_executor(self._threads, _addresses, host)
            self._asked[host] = question
            question.add_done_callback(lambda ended: self._forget(host, ended))
        return await asyncio.shield(question)  # others may ask the same when this caller has no more time

    def stop(self) -> None:
        """Ask nothing more."""
        self._threads.shutdown(wait=False, cancel_futures=True)

    def _forget(self, host: str, ended: "asyncio.Future[list[str]]") -> None:
        self._asked.pop(host, None)
        if not ended.cancelled():
            ended.exception()  # seen, though nobody may be waiting any more


def _addresses(host: str) -> list[str]:
    found = socket.getaddrinfo(host, None, type=socket.SOCK_STREAM)
    return list(dict.fromkeys(str(address[0]) for *_, address in found))
