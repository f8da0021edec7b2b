"""People who sign in and send forms, as a browser without script does."""

import re
from collections.abc import Iterator
from contextlib import contextmanager
from html import unescape

import httpx

from tests.running import Running


@contextmanager
def signed_in(service: Running, role: str = "engineer", secret: str | None = None) -> Iterator[httpx.Client]:
    """A client that carries the session of somebody with this role, or with this key."""
    with httpx.Client(base_url=service.url, timeout=30.0) as client:
        answer = sign_in(client, secret or service.keys[role])
        assert answer.status_code == 303, answer.text
        yield client


def sign_in(client: httpx.Client, secret: str, place: str = "/") -> httpx.Response:
    """Fill in the form."""
    form = client.get("/sign-in", params={"next": place})
    return client.post("/sign-in", data={"token": form_token(form.text), "key": secret, "next": place})


def form_token(html: str) -> str:
    """The token that the forms of a page carry."""
    found = re.search(r'name="token" value="([^"]+)"', html)
    assert found is not None, html
    return found[1]


def words(html: str) -> str:
    """What a page says, without its tags, with single spaces."""
    text = re.sub(r"<(script|style)\b.*?</\1>", " ", html, flags=re.DOTALL)
    return re.sub(r"\s+", " ", unescape(re.sub(r"<[^>]+>", " ", text))).strip()
