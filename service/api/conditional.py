"""Conditional requests (RFC 9110, section 13): entity tags from versions."""

from fastapi import Request, Response

from service.api.problems import RequestProblem


def etag(version: int | str, variant: str = "") -> str:
    """The entity tag of a version; a variant tells representations of one address apart."""
    return f'"{version}{variant}"'


def not_modified(request: Request, tag: str) -> Response | None:
    """The 304 answer when the caller has this version already, else None."""
    given = request.headers.get("if-none-match")
    if given is None:
        return None
    candidates = {candidate.strip().removeprefix("W/") for candidate in given.split(",")}
    if tag in candidates or "*" in candidates:
        return Response(status_code=304, headers={"ETag": tag})
    return None


def expected_version(request: Request) -> str | None:
    """
    The version that If-Match names; None without the header or for `*`.

    Raises:
        RequestProblem: The header is not one entity tag of ours.
    """
    given = request.headers.get("if-match")
    if given is None or given.strip() == "*":
        return None
    tag = given.strip()
    version = tag[1:-1]
    if tag != f'"{version}"' or not version.isdigit():
        raise RequestProblem(
            "version-moved", f"If-Match takes the ETag of the test as it was read; received {given!r}."
        )
    return version
