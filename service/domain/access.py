"""Who may do what: roles, and the keys that carry them."""

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime
from enum import StrEnum

from service.domain.errors import Fault, InvalidKey
from service.domain.names import NAME_RULE, is_name
from service.domain.sequential_test import Subject


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
class Limits:
    """
    The tests that a key is for; without any limit, all of them.

    Attributes:
        subjects: A test must be of one of these, where there are any.
        labels: For each name here, a test must have one of the values.
    """

    subjects: tuple[Subject, ...] = ()
    labels: Mapping[str, tuple[str, ...]] = field(default_factory=dict)

    @property
    def is_limited(self) -> bool:
        """True where some test may lie outside."""
        return bool(self.subjects or self.labels)

    def allow(self, subject: Subject, labels: Mapping[str, str]) -> bool:
        """True for a test of this subject with these labels that lies inside."""
        is_of_a_subject = not self.subjects or subject in self.subjects
        return is_of_a_subject and all(labels.get(name) in values for name, values in self.labels.items())


UNLIMITED = Limits()


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
    limits: Limits = UNLIMITED

    def is_valid(self, now: datetime) -> bool:
        """True while the key is neither revoked nor past its expiry."""
        return self.revoked_at is None and (self.expires_at is None or now < self.expires_at)


def limits_of(subjects: Sequence[Subject], labels: Sequence[tuple[str, str]]) -> Limits:
    """Limits from lists in which things may stand twice: a name's values are gathered."""
    values: dict[str, dict[str, None]] = {}
    for name, value in labels:
        values.setdefault(name, {})[value] = None
    return Limits(tuple(dict.fromkeys(subjects)), {name: tuple(each) for name, each in values.items()})


def check_new_key(
    name: str,
    expires_at: datetime | None,
    now: datetime,
    role: Role = Role.VIEWER,
    limits: Limits = UNLIMITED,
) -> None:
    """
    Ask whether a key may be made.

    Raises:
        InvalidKey: Its name is no name, it would be dead from the start, or its limits would mean nothing.
    """
    faults = []
    if not is_name(name):
        faults.append(Fault("/name", f"must be {NAME_RULE}; received {name!r}"))
    if expires_at is not None and expires_at <= now:
        faults.append(Fault("/expires_at", f"must lie in the future; received {expires_at.isoformat()}"))
    if limits.is_limited and role is Role.ADMINISTRATOR:
        faults.append(Fault("/role", "of a key with limits cannot be administrator, who could make one without"))
    faults += [
        Fault("/labels", f"is limited by a name that is none: {label!r}")
        for label in limits.labels
        if not is_name(label)
    ]
    if faults:
        raise InvalidKey(faults)


def digest_of(secret: str) -> str:
    """
    What is stored of a secret.

    A plain SHA-256 suffices: the secrets are 256 random bits, which no search can reach. Nor does it matter how long
    the database compares: it looks for the digest of what was sent, and who cannot choose digests learns nothing of
    the secret from the time that finding none takes.
    """
    return hashlib.sha256(secret.encode()).hexdigest()
