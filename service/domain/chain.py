"""
Acts in order, each bound to the one before it by SHA-256, so that a changed, removed or moved one is found. Pure.

An entry's link is the SHA-256 of a JSON text: the array of the link before it (empty for the first), the chain, the
number, the act, the moment, the actor, the request and the details, with sorted keys, without blanks, in UTF-8. Whoever
has the entries can compute the links again. The end of a chain is kept beside it: cutting it short shows.
"""

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from enum import StrEnum
from typing import Any

# The chain of what belongs to no single test; no test has an empty key.
SERVICE = ""

# The request of what was recorded before there was a history.
MIGRATED = "migration"


class Act(StrEnum):
    """What may be done."""

    REGISTERED = "registered"
    SUBMITTED = "submitted"
    DECIDED = "decided"
    CORRECTED = "corrected"
    DISPOSED = "disposed"
    PLAN_CREATED = "plan-created"
    TEST_REGISTERED = "test-registered"
    KEY_CREATED = "key-created"
    KEY_REVOKED = "key-revoked"
    RECEIVER_CREATED = "receiver-created"
    RECEIVER_REMOVED = "receiver-removed"


@dataclass(frozen=True)
class Head:
    """The end of a chain: how many entries it has, and the link of the last one."""

    length: int = 0
    link: str = ""


EMPTY = Head()


@dataclass(frozen=True)
class Entry:
    """
    One act.

    Attributes:
        chain: The key of the test, or `SERVICE`.
        number: 1, 2, 3 … within its chain; 0 until it has its place.
        request_id: Of the HTTP request that asked for it; None for the command line.
        details: What the act was about, as JSON.
        link: SHA-256, hexadecimal, over this entry and the link before it.
    """

    chain: str
    act: Act
    at: datetime
    actor: str
    request_id: str | None
    details: Mapping[str, Any]
    number: int = 0
    link: str = ""

    @property
    def is_migrated(self) -> bool:
        """True where it was recorded afterwards, from what was stored without a history."""
        return self.request_id == MIGRATED

    @property
    def head(self) -> Head:
        """The chain's end while this is its last entry."""
        return Head(self.number, self.link)


def bound(head: Head, entry: Entry) -> Entry:
    """The entry in its place after this end of its chain."""
    numbered = replace(entry, number=head.length + 1)
    return replace(numbered, link=link_of(head.link, numbered))


def link_of(previous: str, entry: Entry) -> str:
    """The link that an entry must have after this one."""
    parts = (
        entry.chain,
        entry.number,
        entry.act,
        shown(entry.at),
        entry.actor,
        entry.request_id,
        entry.details,
    )
    return hashlib.sha256(json_of([previous, *parts]).encode()).hexdigest()


def shown(moment: datetime) -> str:
    """A moment as it stands in a link: RFC 3339, UTC, microseconds."""
    return moment.astimezone(UTC).strftime("%Y-%m-%dT%H:%M:%S.%fZ")


def json_of(content: object) -> str:
    """The one JSON text of this content."""
    return json.dumps(content, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False)
