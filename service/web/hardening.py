"""What every answer tells a browser: take it for what it says it is, keep it to itself, run nothing in it."""

from collections.abc import Iterable

# An answer that says otherwise is left as it is. "no-cache" keeps a copy but asks each time whether it still holds.
DEFAULTS = (
    (b"x-content-type-options", b"nosniff"),
    (b"referrer-policy", b"no-referrer"),
    (b"cache-control", b"private, no-cache"),
    (b"content-security-policy", b"default-src 'none'; frame-ancestors 'none'; base-uri 'none'; form-action 'none'"),
)

CORS_METHODS = ("GET", "POST", "DELETE")
CORS_ASKED = ("Authorization", "Content-Type", "If-Match", "If-None-Match", "Idempotency-Key", "Last-Event-ID")
CORS_SHOWN = ("ETag", "Idempotent-Replayed", "Link", "Location", "Retry-After", "X-Request-Id")

Headers = list[tuple[bytes, bytes]]


def hardened(headers: Iterable[tuple[bytes, bytes]], request_id: str) -> Headers:
    """The headers of an answer with the request's id and the defaults that it lacks."""
    given = list(headers)
    names = {name.lower() for name, _ in given}
    added = [pair for pair in DEFAULTS if pair[0] not in names]
    return [*given, (b"x-request-id", request_id.encode()), *added]
