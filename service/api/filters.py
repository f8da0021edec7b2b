"""What lists and streams of tests may be narrowed by."""

from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field

from service.api.problems import RequestProblem
from service.domain.errors import Fault
from service.domain.sequential_test import SubjectKind
from service.domain.state import Decision
from service.storage.reader import TestFilters
from service.web.fields import Label, Name, Text


class FiltersQuery(BaseModel):
    """All that is given must match."""

    model_config = ConfigDict(extra="forbid")

    decision: Decision | None = None
    kind: SubjectKind | None = None
    subject: Annotated[Text | None, Field(description="Exact name of the subject.")] = None
    plan: Name | None = None
    label: Annotated[list[Label], Field(max_length=20, description="name:value; all of them must match.")] = []

    def filters(self) -> TestFilters:
        """
        For the reader.

        Raises:
            RequestProblem: A label is none.
        """
        return TestFilters(
            decision=self.decision,
            kind=self.kind,
            subject=self.subject,
            plan=self.plan,
            labels=tuple(_label(text, position) for position, text in enumerate(self.label)),
        )


def _label(text: str, position: int) -> tuple[str, str]:
    name, colon, value = text.partition(":")
    if not (name and colon and value):
        fault = Fault(f"/label/{position}", f"must have the form name:value; received {text!r}")
        raise RequestProblem("invalid-parameter", "A parameter cannot be right; see errors.", [fault])
    return name, value
