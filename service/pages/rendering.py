"""Templates made into answers, with a policy that lets a page load nothing but this service's own script and style."""

import hashlib
from collections.abc import Mapping, Sequence
from functools import lru_cache
from pathlib import Path
from typing import Any

from fastapi import Request, Response
from fastapi.responses import HTMLResponse
from jinja2 import Environment, PackageLoader, StrictUndefined

from service.pages import words
from service.pages.charts.marks import mark

STATIC = Path(__file__).parent / "static"

POLICY = (
    "default-src 'none'; script-src 'self'; style-src 'self'; img-src 'self'; connect-src 'self'; form-action 'self'; "
    "frame-ancestors 'none'; base-uri 'none'"
)


@lru_cache(maxsize=1)
def _environment() -> Environment:
    found = Environment(
        loader=PackageLoader("service.pages"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    found.filters.update(words.FILTERS)
    found.globals.update(static=_static_address, mark=mark)
    return found


@lru_cache(maxsize=16)
def _static_address(name: str) -> str:
    """The address of a file beside the pages; it changes with the file, so that browsers may keep it."""
    digest = hashlib.sha256((STATIC / name).read_bytes()).hexdigest()[:12]
    return f"/static/{name}?v={digest}"


def rendered(request: Request, template: str, **values: Any) -> str:  # noqa: ANN401 - what a template shows
    """The text of a page."""
    session = getattr(request.state, "session", None)
    return _environment().get_template(template).render(session=session, path=request.url.path, **values)


def page(
    request: Request,
    template: str,
    *,
    status: int = 200,
    headers: Mapping[str, str] | None = None,
    **values: Any,  # noqa: ANN401
) -> Response:
    """An answer that is a page."""
    policy = {
        "Content-Security-Policy": POLICY,
        "Referrer-Policy": "same-origin",
        "Cache-Control": "private, no-store",
        **(headers or {}),
    }
    return HTMLResponse(rendered(request, template, **values), status, policy)


def failure(  # noqa: PLR0913 - what such a page says
    request: Request,
    status: int,
    title: str,
    detail: str,
    faults: Sequence[str] = (),
    *,
    headers: Mapping[str, str] | None = None,
) -> Response:
    """A page about something that cannot be done."""
    return page(request, "failure.html", status=status, headers=headers, title=title, detail=detail, faults=faults)
