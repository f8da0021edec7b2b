"""
Names to numeric addresses, on threads of their own.

The system's resolver blocks its thread, perhaps for long. Callers who ask for the same host share one question, so that
a host whose name servers are silent holds one thread, and no other host waits for it, nor does anything else: not even
the end of the process, which these threads do not put off.
"""

import asyncio
import socket
import threading
from collections.abc import Awaitable, Callable
from contextlib import suppress

# All numeric addresses of a host, in the order in which they are to be tried; raises OSError where there is none.
Resolve = Callable[[str], Awaitable[list[str]]]

Question = asyncio.Future[list[str]]


class Resolver:
    """The system's resolver. Belongs to one event loop."""

    def __init__(self) -> None:
        self._asked: dict[str, Question] = {}

    async def __call__(self, host: str) -> list[str]:
        """
        All addresses of a host.

        Raises:
            OSError: It has none, or nobody knows.
        """
        question = self._asked.get(host)
        if question is None:
            question = self._asked[host] = asyncio.get_running_loop().create_future()
            question.add_done_callback(lambda ended: self._forget(host, ended))
            threading.Thread(target=_answer, args=(question, host), name="resolver", daemon=True).start()
        return await asyncio.shield(question)  # others may ask the same when this caller has no more time

    def _forget(self, host: str, ended: Question) -> None:
        self._asked.pop(host, None)
        if not ended.cancelled():
            ended.exception()  # seen, though nobody may be waiting any more


def _answer(question: Question, host: str) -> None:
    """In a thread: resolve, and tell the loop of the question."""
    found: list[str] | Exception
    try:
        found = list(
            dict.fromkeys(str(each[-1][0]) for each in socket.getaddrinfo(host, None, type=socket.SOCK_STREAM))
        )
    except Exception as error:  # noqa: BLE001 - whatever it is, who asked is to know
        found = error
    with suppress(RuntimeError):  # the loop has ended meanwhile
        question.get_loop().call_soon_threadsafe(_tell, question, found)


def _tell(question: Question, found: list[str] | Exception) -> None:
    if question.done():
        return
    if isinstance(found, Exception):
        question.set_exception(found)
    else:
        question.set_result(found)
