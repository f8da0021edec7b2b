"""Access keys, the summary, health and readiness."""

from datetime import datetime
from typing import Annotated, Any

from pydantic import ConfigDict, Field

from service.api.schemas.common import Answer, Form, shown_as
from service.api.schemas.tests import SubjectForm, SubjectOut
from service.domain.access import AccessKey, Limits, Role, limits_of
from service.web.fields import Moment, Name, Text

EXAMPLE: dict[str, Any] = {
    "name": "line-2-tester",
    "role": "collector",
    "expires_at": "2031-12-31T00:00:00Z",
    "subjects": [],
    "labels": {"line": ["2"]},
}


STORED: dict[str, Any] = {
    "id": "7af39bf6c5180e89",
    **EXAMPLE,
    "created_at": "2031-05-04T09:00:00Z",
    "revoked_at": None,
}

SUMMARY: dict[str, Any] = {
    "tests": 4,
    "by_decision": {"continue": 1, "accept": 2, "reject": 1},
    "by_kind": {"lot": {"accept": 2, "reject": 1}, "experiment": {"continue": 1}},
    "by_status": {"open": 4},
}


class LimitedForm(Form):
    """What may be limited to some tests: of one of the subjects, and with one of the values of each label."""

    subjects: Annotated[list[SubjectForm], Field(max_length=100)] = Field(default_factory=list)
    labels: Annotated[dict[Name, Annotated[list[Text], Field(min_length=1, max_length=100)]], Field(max_length=20)] = (
        Field(default_factory=dict)
    )

    def limits(self) -> Limits:
        """The domain's value."""
        labels = [(name, value) for name, values in self.labels.items() for value in values]
        return limits_of([subject.subject() for subject in self.subjects], labels)


class KeyForm(LimitedForm):
    """A key to make."""

    model_config = ConfigDict(json_schema_extra={"examples": [EXAMPLE]})

    name: Name
    role: Role
    expires_at: Moment | None = None


class KeyOut(Answer):
    """A key as stored; its secret is not."""

    model_config = shown_as(STORED)

    id: str
    name: str
    role: Role
    created_at: datetime
    expires_at: datetime | None
    revoked_at: datetime | None
    subjects: list[SubjectOut]
    labels: dict[str, list[str]]

    @classmethod
    def of(cls, key: AccessKey) -> "KeyOut":
        """From the domain's key."""
        return cls(
            id=key.id,
            name=key.name,
            role=key.role,
            created_at=key.created_at,
            expires_at=key.expires_at,
            revoked_at=key.revoked_at,
            subjects=[SubjectOut.model_validate(subject) for subject in key.limits.subjects],
            labels={name: list(values) for name, values in key.limits.labels.items()},
        )


class IssuedKeyOut(KeyOut):
    """A new key with its secret, shown this once."""

    model_config = shown_as({**STORED, "secret": "pX3…"})

    secret: str


class KeysOut(Answer):
    """All keys."""

    model_config = shown_as({"items": [STORED]})

    items: list[KeyOut]


class SummaryOut(Answer):
    """Counts for dashboards."""

    model_config = shown_as(SUMMARY)

    tests: int
    by_decision: Annotated[dict[str, int], Field(description="Tests by continue, accept and reject.")]
    by_kind: dict[str, dict[str, int]]
    by_status: dict[str, int]


class HealthOut(Answer):
    """Alive, or ready."""

    model_config = shown_as({"status": "ready"})

    status: str
