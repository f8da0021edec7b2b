"""Who may do what: roles, and the keys that carry them."""

from dataclasses import dataclass
from datetime import datetime
from enum import StrEnum


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
