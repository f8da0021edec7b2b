"""Receivers of notices, and what was told them."""

import json
from datetime import datetime
from typing import Annotated, Any

from pydantic import ConfigDict, Field, StringConstraints

from service.api.schemas.administration import LimitedForm
from service.api.schemas.common import Answer, shown_as
from service.api.schemas.tests import SubjectOut
from service.domain.addresses import LONGEST_ADDRESS
from service.domain.notices import Notice, NoticeState
from service.domain.receivers import Receiver
from service.web.fields import Name

EXAMPLE: dict[str, Any] = {
    "name": "line-3-stop",
    "address": "https://line-3.example/sprt",
    "subjects": [],
    "labels": {"line": ["3"]},
}

STORED: dict[str, Any] = {
    "id": "5be0c1f24a7d9e63",
    **EXAMPLE,
    "created_at": "2031-05-04T09:00:00Z",
    "created_by": "plant-it",
    "removed_at": None,
}

MESSAGE: dict[str, Any] = {
    "type": "test.decided",
    "timestamp": "2031-05-04T09:30:00.000000Z",
    "data": {
        "key": "lot-2041",
        "plan": "seal-leak",
        "subject": {"kind": "lot", "name": "2041/B"},
        "labels": {"line": "3"},
        "decision": "accept",
        "previous_decision": "continue",
        "log_likelihood_ratio": -2.2874443153037967,
        "sample_number": 24,
        "exposure": None,
        "decided": {
            "sample_number": 24,
            "exposure": None,
            "at": "2031-05-04T09:30:00.000000Z",
            "cause": "boundary",
            "direction": None,
        },
        "overrun": 1,
        "disposition": None,
        "status": "open",
        "version": 2,
    },
}

NOTICE: dict[str, Any] = {
    "id": "01c2c3b1d4409f3a6c0e7d215b88",
    "receiver": "line-3-stop",
    "type": "test.decided",
    "test": "lot-2041",
    "version": 2,
    "state": "waiting",
    "attempts": 1,
    "created_at": "2031-05-04T09:30:00Z",
    "next_attempt_at": "2031-05-04T09:30:04.2Z",
    "outcome": "answered 500",
    "message": MESSAGE,
}

Address = Annotated[
    str,
    StringConstraints(strict=True, min_length=1, max_length=LONGEST_ADDRESS),
    Field(description="https://host[:port][/path][?query]; http:// and private addresses only where settings allow."),
]


class ReceiverForm(LimitedForm):
    """A receiver to register."""

    model_config = ConfigDict(json_schema_extra={"examples": [EXAMPLE]})

    name: Name
    address: Address


class ReceiverOut(Answer):
    """A receiver as stored; its secret is not shown again."""

    model_config = shown_as(STORED)

    id: str
    name: str
    address: str
    subjects: list[SubjectOut]
    labels: dict[str, list[str]]
    created_at: datetime
    created_by: str
    removed_at: datetime | None

    @classmethod
    def of(cls, receiver: Receiver) -> "ReceiverOut":
        """From the domain's receiver."""
        return cls(
            id=receiver.id,
            name=receiver.name,
            address=receiver.address,
            subjects=[SubjectOut.model_validate(subject) for subject in receiver.limits.subjects],
            labels={name: list(values) for name, values in receiver.limits.labels.items()},
            created_at=receiver.created_at,
            created_by=receiver.created_by,
            removed_at=receiver.removed_at,
        )


class IssuedReceiverOut(ReceiverOut):
    """A new receiver with the secret that its notices are signed with, shown this once."""

    model_config = shown_as({**STORED, "secret": "whsec_pX3…"})

    secret: str


class ReceiversOut(Answer):
    """All receivers."""

    model_config = shown_as({"items": [STORED]})

    items: list[ReceiverOut]


class NoticeOut(Answer):
    """A notice, and how far it has come."""

    model_config = shown_as(NOTICE)

    id: Annotated[str, Field(description="What the receiver sees as webhook-id.")]
    receiver: str
    type: str
    test: Annotated[str | None, Field(description="Its key; null for a trial.")]
    version: Annotated[int, Field(description="Of the test, when it happened.")]
    state: NoticeState
    attempts: int
    created_at: datetime
    next_attempt_at: Annotated[datetime | None, Field(description="Null unless it waits; after those ahead of it.")]
    outcome: Annotated[str | None, Field(description="How the last attempt ended.")]
    message: Annotated[dict[str, Any], Field(description="The body that is sent.")]

    @classmethod
    def of(cls, notice: Notice, receiver: str) -> "NoticeOut":
        """From the domain's notice and the name of its receiver."""
        return cls(
            id=notice.id,
            receiver=receiver,
            type=notice.kind,
            test=notice.test,
            version=notice.version,
            state=notice.state,
            attempts=notice.attempts,
            created_at=notice.created_at,
            next_attempt_at=notice.due_at if notice.state is NoticeState.WAITING else None,
            outcome=notice.outcome,
            message=json.loads(notice.body),
        )


class NoticesOut(Answer):
    """A page of a receiver's notices, oldest first."""

    model_config = shown_as({"items": [NOTICE], "next_cursor": None})

    items: list[NoticeOut]
    next_cursor: str | None
