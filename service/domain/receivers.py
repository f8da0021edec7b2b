"""Receivers: addresses that are told of decisions, each with the secret that its notices are signed with. Pure."""

import base64
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import datetime

from service.domain.access import UNLIMITED, Limits
from service.domain.addresses import Allowed, UnfitAddress, target_of
from service.domain.errors import Fault, InvalidReceiver
from service.domain.names import NAME_RULE, is_name
from service.domain.sequential_test import Subject

# Each receiver may have some deliveries under way in each process, whatever the others do; so there is an end to them.
MOST_RECEIVERS = 50

# How the open Standard Webhooks scheme writes a secret.
SECRET_PREFIX = "whsec_"  # noqa: S105 - no secret, but what one begins with


@dataclass(frozen=True)
class Receiver:
    """
    A receiver as stored; its name is unique among those that are not removed.

    Attributes:
        secret: Readable, for notices are signed with it; None once the receiver was removed.
        fingerprint: The SHA-256 of the secret, which stays.
        limits: The tests that it is told of.
    """

    id: str
    name: str
    address: str
    secret: str | None = field(repr=False)
    fingerprint: str
    created_at: datetime
    created_by: str
    removed_at: datetime | None = None
    limits: Limits = UNLIMITED

    def is_told_of(self, subject: Subject, labels: Mapping[str, str]) -> bool:
        """True where it is told of a test of this subject with these labels."""
        return self.removed_at is None and self.limits.allow(subject, labels)


def secret_of(random: bytes) -> str:
    """A secret from random bytes."""
    return SECRET_PREFIX + base64.b64encode(random).decode()


def check_new_receiver(name: str, address: str, limits: Limits, allowed: Allowed) -> None:
    """
    Ask whether a receiver may be registered.

    Raises:
        InvalidReceiver: Its name is no name, nothing may be sent to its address, or its limits would mean nothing.
    """
    faults = []
    if not is_name(name):
        faults.append(Fault("/name", f"must be {NAME_RULE}; received {name!r}"))
    try:
        target_of(address, allowed)
    except UnfitAddress as refusal:
        faults.append(Fault("/address", str(refusal)))
    faults += [
        Fault("/labels", f"is limited by a name that is none: {label!r}")
        for label in limits.labels
        if not is_name(label)
    ]
    if faults:
        raise InvalidReceiver(faults)
