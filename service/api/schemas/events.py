"""What a stream of events tells of a test."""

from datetime import datetime
from typing import Any

from service.api.schemas.common import Answer, shown_as

EVENT: dict[str, Any] = {
    "key": "lot-2041",
    "version": 2,
    "decision": "accept",
    "status": "open",
    "updated_at": "2031-05-04T09:30:00Z",
}

EXAMPLE = (
    "retry: 3000\nid: 41\n\n"
    'id: 42\nevent: test\ndata: {"key":"lot-2041","version":2,"decision":"accept","status":"open",'
    '"updated_at":"2031-05-04T09:30:00Z"}\n\n'
    ": still here\nid: 42\n\n"
)


class TestEventOut(Answer):
    """A test that was registered or has changed, as it is now."""

    __test__ = False
    model_config = shown_as(EVENT)

    key: str
    version: int
    decision: str
    status: str
    updated_at: datetime
