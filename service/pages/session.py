"""
Who is signed in: an access key kept in a cookie that no script can read.

Nothing is kept on the server, so a session outlives a restart, works with any number of processes, and ends with its
key. The cookie holds when it was made, bound to the secret by an HMAC, and is refused when it is older than the
settings allow. Forms carry a token that is made of the same secret, which no other site can know.
"""

import hashlib
import hmac
import re
from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import Annotated, cast

from fastapi import Depends, Request, Response

from service.domain.access import AccessKey, Role
from service.settings import Settings
from service.web.keys import valid_key
from service.web.parts import Parts

COOKIE = "sprt_session"
# When it was made in seconds since 1970, what binds that to the secret, and the secret.
_COOKIE = re.compile(r"([0-9]{1,15})\.([0-9a-f]{64})\.(.+)")


@dataclass(frozen=True)
class Session:
    """
    Somebody who has signed in.

    Attributes:
        token: What every form of this session carries.
    """

    key: AccessKey
    token: str

    def may(self, role: Role | str) -> bool:
        """Whether the key has this role or a wider one."""
        return self.key.role.includes(Role(role))


class SignInNeeded(Exception):
    """Nobody is signed in, or not any more."""


class NotYours(Exception):
    """The key that is signed in may not do this."""


def keep(response: Response, request: Request, secret: str, now: datetime, settings: Settings) -> None:
    """Have the browser keep a session for this key."""
    made = str(int(now.timestamp()))
    response.set_cookie(
        COOKIE,
        f"{made}.{_bound(secret, f'session {made}')}.{secret}",
        max_age=int(settings.session_hours * 3600.0),
        path="/",
        secure=request.url.scheme == "https",
        httponly=True,
        samesite="lax",
    )


def forget(response: Response, request: Request) -> None:
    """Have the browser forget it."""
    response.delete_cookie(COOKIE, path="/", secure=request.url.scheme == "https", httponly=True, samesite="lax")


async def session_of(request: Request) -> Session | None:
    """The session of a request, its key looked up afresh; None where there is none, or it has ended."""
    parts = cast("Parts", request.app.state.parts)
    found = _COOKIE.fullmatch(request.cookies.get(COOKIE, ""))
    if found is None:
        return None
    made, bound, secret = found.groups()
    if not hmac.compare_digest(bound, _bound(secret, f"session {made}")):
        return None
    age = parts.clock().timestamp() - int(made)
    if age >= timedelta(hours=parts.settings.session_hours).total_seconds():
        return None
    key = await valid_key(parts, secret)
    return None if key is None else Session(key, _bound(secret, f"form {made}"))


async def _signed_in(request: Request) -> Session:
    session = cast("Session | None", request.state.session)
    if session is None:
        raise SignInNeeded
    return session


NEEDS_SIGN_IN = Depends(_signed_in)
SignedIn = Annotated[Session, NEEDS_SIGN_IN]


def check_role(session: Session, role: Role) -> None:
    """
    Raises:
        NotYours: The key has a narrower role.
    """
    if not session.may(role):
        raise NotYours(f"This needs the role {role}; the key {session.key.name} has {session.key.role}.")


def _bound(secret: str, text: str) -> str:
    return hmac.new(secret.encode(), text.encode(), hashlib.sha256).hexdigest()
