"""Access keys, the summary, health and readiness."""

from datetime import datetime
from typing import Annotated, Any

from pydantic import AwareDatetime, ConfigDict, Field

from service.api.schemas.common import Answer, Form, Name
from service.domain.access import Role

EXAMPLE: dict[str, Any] = {"name": "line-2-tester", "role": "collector", "expires_at": "2031-12-31T00:00:00Z"}


class KeyForm(Form):
    """A key to make."""

    model_config = ConfigDict(json_schema_extra={"examples": [EXAMPLE]})

    name: Name
    role: Role
    expires_at: AwareDatetime | None = None


class KeyOut(Answer):
    """A key as stored; its secret is not."""

    id: str
    name: str
    role: Role
    created_at: datetime
    expires_at: datetime | None
    revoked_at: datetime | None


class IssuedKeyOut(KeyOut):
    """A new key with its secret, shown this once."""

    secret: str


class KeysOut(Answer):
    """All keys."""

    items: list[KeyOut]


class SummaryOut(Answer):
    """Counts for dashboards."""

    tests: int
    by_decision: Annotated[dict[str, int], Field(description="Tests by continue, accept and reject.")]
    by_kind: dict[str, dict[str, int]]
    by_status: dict[str, int]


class HealthOut(Answer):
    """Alive, or ready."""

    status: str
