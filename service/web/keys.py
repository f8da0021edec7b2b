"""The access key that a secret opens."""

from service.domain.access import AccessKey, digest_of
from service.web.parts import Parts, looking_up

LONGEST_SECRET = 200


async def valid_key(parts: Parts, secret: str) -> AccessKey | None:
    """The key of this secret, looked up afresh; None where there is none, or it is revoked or past its time."""
    if not secret or len(secret) > LONGEST_SECRET:
        return None
    key = await looking_up(parts, lambda: parts.reader.key_with_digest(digest_of(secret)))
    return key if key is not None and key.is_valid(parts.clock()) else None
