"""Types that several schemas share."""

from typing import Annotated, Any

from pydantic import BaseModel, ConfigDict, Field, StringConstraints

Number = Annotated[float, Field(strict=True, allow_inf_nan=False)]
Whole = Annotated[int, Field(strict=True)]
Name = Annotated[str, StringConstraints(strict=True, pattern=r"^[A-Za-z0-9][A-Za-z0-9._-]{0,99}$")]
# Free text without control characters, which no log, table or page could show.
Text = Annotated[str, StringConstraints(strict=True, min_length=1, max_length=200, pattern=r"^[^\x00-\x1f\x7f]+$")]


class Form(BaseModel):
    """A body: unknown fields are refused."""

    model_config = ConfigDict(extra="forbid", allow_inf_nan=False)


class Answer(BaseModel):
    """An answer."""

    model_config = ConfigDict(from_attributes=True)


def shown_as(example: dict[str, Any]) -> ConfigDict:
    """The configuration of an answer that the API description shows by this example."""
    return ConfigDict(from_attributes=True, json_schema_extra={"examples": [example]})


class FaultOut(Answer):
    """One thing wrong with a request."""

    pointer: str = Field(description="JSON pointer (RFC 6901) to the offending element, or the parameter's name.")
    detail: str = Field(description="The rule, and the value received.")


class ProblemOut(Answer):
    """A problem document (RFC 9457)."""

    type: str
    title: str
    status: int
    detail: str
    errors: list[FaultOut] | None = None
