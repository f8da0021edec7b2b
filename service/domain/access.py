"""Who may do what: roles, and the keys that carry them."""

import hashlib
from dataclasses import dataclass
from datetime import datetime
from enum import StrEnum

from service.domain.errors import Fault, InvalidKey
from service.domain.names import NAME_RULE, is_name


class Role(StrEnum):
    """Each role may do all that the ones before it may."""

    VIEWER = "viewer"
    COLLECTOR = "collector"
    ENGINEER = "engineer"
    ADMINISTRATOR = "administrator"

    def includes(self, other: "Role") -> bool:
        """True where this role may do what `other` may."""
        order = list(Role)
        return order.index(self) >= order.index(other)


@dataclass(frozen=True)
class AccessKey:
    """
    A named key as stored: the SHA-256 digest of its secret, never the secret.

    `name` is the actor on record; it is unique among the keys that are not revoked.
    """

    id: str
    name: str
    role: Role
    digest: str
    created_at: datetime
    expires_at: datetime | None = None
    revoked_at: datetime | None = None

    def is_valid(self, now: datetime) -> bool:
        """True while the key is neither revoked nor past its expiry."""
        return self.revoked_at is None and (self.expires_at is None or now < self.expires_at)


def check_new_key(name: str, expires_at: datetime | None, now: datetime) -> None:
    """
    Ask whether a key may be made.

    Raises:
        InvalidKey: Its name is no name, or it would be dead from the start.
    """
    faults = []
    if not is_name(name):
        faults.append(Fault("/name", f"must be {NAME_RULE}; received {name!r}"))
    if expires_at is not None and expires_at <= now:
        faults.append(Fault("/expires_at", f"must lie in the future; received {expires_at.isoformat()}"))
    if faults:
        raise InvalidKey(faults)


def digest_of(secret: str) -> str:
    """
    What is stored of a secret.

    A plain SHA-256 suffices: the secrets are 256 random bits, which no search can reach.
    """
    return hashlib.sha256(secret.encode()).hexdigest()
