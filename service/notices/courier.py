"""
One attempt to bring one notice to its receiver.

The name is resolved here, every address it has is checked, and the connection goes to a checked address itself: a name
that means something else a moment later gains nothing. Host and, under TLS, the name that the certificate must bear
stay those of the receiver. No proxy of the environment is used, no redirect followed, no cookie kept, no connection
shared between receivers; of an answer the status counts, and of its body little is read and nothing kept.
"""

import asyncio
import functools
import ssl
from collections.abc import Callable
from contextlib import suppress
from datetime import datetime

import httpx

from service.domain.addresses import Allowed, Target, UnfitAddress, check_reachable, target_of
from service.domain.notices import Attempt, Delivery, signature_of
from service.notices.resolving import Resolve

# Bytes of an answer's body that are read, so that a receiver may finish what it says.
MOST_OF_ANSWER = 4096
# Addresses of one name that are tried in one attempt.
MOST_ADDRESSES = 3
# The receiver says that it wants no notices any more.
GONE = 410

USER_AGENT = "sprt-monitor"


@functools.cache
def trusted() -> ssl.SSLContext:
    """Certificates are checked against those that the machine trusts, or SSL_CERT_FILE; reading them takes a while."""
    return ssl.create_default_context()


class Courier:
    """Carries notices; safe to use for many at once."""

    def __init__(
        self, allowed: Allowed, timeout_seconds: float, resolve: Resolve, tls: Callable[[], ssl.SSLContext] = trusted
    ) -> None:
        """
        Build it.

        Args:
            allowed: Where notices may go.
            timeout_seconds: For one attempt, from the resolving of the name to the answer.
            resolve: Tells the addresses of a name.
            tls: How certificates are checked.
        """
        self._allowed, self._timeout_seconds, self._resolve, self._tls = allowed, timeout_seconds, resolve, tls

    async def carry(self, delivery: Delivery, now: datetime) -> Attempt:
        """Try once, within the time there is; once a status is known it counts, whatever comes after it."""
        status: list[int] = []
        failure = "no address"
        try:
            async with asyncio.timeout(self._timeout_seconds):
                await self._send(delivery, now, status)
        except UnfitAddress as refusal:
            failure = f"not sent: the address {refusal}"
        except (TimeoutError, httpx.TimeoutException):
            failure = f"no answer within {self._timeout_seconds:g} seconds"
        except (OSError, httpx.ConnectError) as error:
            failure = f"no connection: {_words(error)}"
        except httpx.HTTPError as error:  # its text may quote the other side, which nobody is to read through us
            failure = f"no sound answer: {type(error).__name__}"
        return _judged(status[0]) if status else Attempt(is_delivered=False, outcome=failure)

    async def _send(self, delivery: Delivery, now: datetime, status: list[int]) -> None:
        """
        Send it, and note the status as soon as it is known.

        Raises:
            UnfitAddress: Nothing may be sent to where the address leads.
        """
        target = target_of(delivery.receiver.address, self._allowed)
        addresses = await self._resolve(target.host)
        for address in addresses:
            check_reachable(address, self._allowed)
        tried = addresses[:MOST_ADDRESSES]
        for place, address in enumerate(tried, start=1):
            try:
                await self._send_to(address, target, delivery, now, status)
            except (httpx.ConnectError, httpx.ConnectTimeout):
                if place == len(tried):
                    raise
            else:
                return

    async def _send_to(
        self, address: str, target: Target, delivery: Delivery, now: datetime, status: list[int]
    ) -> None:
        """Send it to this very address."""
        url = httpx.URL(scheme=target.scheme, host=address, port=target.port, raw_path=target.path.encode())
        headers = {"Host": target.authority, **_headers(delivery, now)}
        timeout = httpx.Timeout(self._timeout_seconds, connect=self._timeout_seconds / 2)
        # A connection is never used twice: one to the same address may have been checked for another name.
        limits = httpx.Limits(max_keepalive_connections=0)
        tls = await asyncio.to_thread(self._tls)
        async with (
            httpx.AsyncClient(verify=tls, trust_env=False, follow_redirects=False, limits=limits) as client,
            client.stream(
                "POST",
                url,
                content=delivery.notice.body.encode(),
                headers=headers,
                timeout=timeout,
                extensions={"sni_hostname": target.host},
            ) as answer,
        ):
            status.append(answer.status_code)
            with suppress(httpx.HTTPError):
                await _read_a_little(answer)


async def _read_a_little(answer: httpx.Response) -> None:
    """The beginning of the body as it comes, without unpacking it."""
    size = 0
    async for piece in answer.aiter_raw():
        size += len(piece)
        if size >= MOST_OF_ANSWER:
            return


def _headers(delivery: Delivery, now: datetime) -> dict[str, str]:
    notice, secret = delivery.notice, delivery.receiver.secret
    assert secret is not None, "a removed receiver is sent nothing"
    timestamp = int(now.timestamp())
    return {
        "Content-Type": "application/json",
        "User-Agent": USER_AGENT,
        "Accept-Encoding": "identity",
        "Connection": "close",
        "webhook-id": notice.id,
        "webhook-timestamp": str(timestamp),
        "webhook-signature": signature_of(secret, notice.id, timestamp, notice.body),
    }


def _judged(status: int) -> Attempt:
    outcome = f"answered {status}"
    return Attempt(httpx.codes.is_success(status), outcome, is_final=status == GONE)


def _words(error: Exception) -> str:
    """What went wrong, short: the words of this machine's own libraries, for no connection means no words of others."""
    return (str(error) or type(error).__name__)[:200]
