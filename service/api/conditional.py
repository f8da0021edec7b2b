"""Conditional requests (RFC 9110, section 13): entity tags from versions."""

import re
from collections.abc import Mapping

from fastapi import Request, Response

from service.api.problems import RequestProblem
from service.domain.errors import Fault

# RFC 9110, sections 8.8.3 and 13.1.1; a tag holds no quote and no space.
_TAG = re.compile(r'(?:W/)?"([\x21\x23-\x7e\x80-\xff]*)"')
_TAGS = re.compile(rf"{_TAG.pattern}(?:(?:[ \t]*,)+[ \t]*{_TAG.pattern})*")


def etag(version: int | str, variant: str = "") -> str:
    """The entity tag of a version; a variant tells representations of one address apart."""
    return f'"{version}{variant}"'


def not_modified(request: Request, tag: str, headers: Mapping[str, str] | None = None) -> Response | None:
    """The 304 answer when the caller has this version already, with the headers of the full one; else None."""
    given = request.headers.get("if-none-match")
    if given is None:
        return None
    candidates = {candidate.strip().removeprefix("W/") for candidate in given.split(",")}
    if tag in candidates or "*" in candidates:
        return Response(status_code=304, headers={**(headers or {}), "ETag": tag})
    return None


def expected_versions(request: Request) -> frozenset[str] | None:
    """
    The versions that If-Match allows, `*` for any; None without the header.

    A weak tag is left out: it never matches where a write depends on it.

    Raises:
        RequestProblem: The header is no list of entity tags.
    """
    if "if-match" not in request.headers:
        return None
    given = ",".join(request.headers.getlist("if-match")).strip(" \t,")
    if given == "*":
        return frozenset("*")
    if not _TAGS.fullmatch(given):
        fault = Fault("/If-Match", f"must be * or ETags of the test as it was read; received {given!r}")
        raise RequestProblem("invalid-parameter", "A parameter cannot be right; see errors.", [fault])
    return frozenset(tag[1] for tag in _TAG.finditer(given) if not tag[0].startswith("W/"))
