"""What happened to a test."""

from typing import Any

from pydantic import Field

from service.api.schemas.common import Answer, shown_as
from service.domain.chain import Entry, shown

ACT: dict[str, Any] = {
    "number": 3,
    "act": "decided",
    "at": "2031-05-04T09:30:00.000000Z",
    "actor": "line-2-tester",
    "request_id": "5f0c3b7e1d2a4c6f8b9d0e1f2a3b4c5d",
    "migrated": False,
    "details": {
        "decision": "accept",
        "before": "continue",
        "sequence": 24,
        "sample_number": 24,
        "cause": "submitted",
    },
    "previous_link": "b0c3fd2ce5a7f1ef7a7c2b7c7e0f3a39f1d3f6f0d0a6c2f4b8e1d2c3b4a59687",
    "link": "4f1e9f6f8c0b2d7a3e5c9d1b7a6f4e2d0c8b6a4f2e0d9c7b5a3f1e8d6c4b2a09",
}


class ActOut(Answer):
    """One act: who did what when, and the SHA-256 that binds it to the act before."""

    model_config = shown_as(ACT)

    number: int
    act: str
    at: str
    actor: str
    request_id: str | None = Field(description="The X-Request-Id of the answer to it; null for the command line.")
    migrated: bool = Field(description="True where it was recorded afterwards, when the history began.")
    details: dict[str, Any]
    previous_link: str | None = Field(
        description="Link of the act before, empty for the first; null atop a later page."
    )
    link: str

    @classmethod
    def of(cls, entry: Entry, previous: str | None) -> "ActOut":
        """From the domain's entry and the link before it."""
        return cls(
            number=entry.number,
            act=entry.act,
            at=shown(entry.at),
            actor=entry.actor,
            request_id=entry.request_id,
            migrated=entry.is_migrated,
            details=dict(entry.details),
            previous_link=previous,
            link=entry.link,
        )


class HistoryOut(Answer):
    """A page of the history of a test, in the order in which it happened."""

    model_config = shown_as({"key": "lot-2041", "length": 3, "link": ACT["link"], "items": [ACT], "next_cursor": None})

    key: str
    length: int = Field(description="Acts so far.")
    link: str = Field(description="Link of the last act; noted elsewhere, it vouches for all that came before.")
    items: list[ActOut]
    next_cursor: str | None
