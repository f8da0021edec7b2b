"""Types that several schemas share."""

from datetime import datetime
from typing import Annotated, Any, TypeVar

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, StringConstraints

Number = Annotated[float, Field(strict=True, allow_inf_nan=False)]
Whole = Annotated[int, Field(strict=True)]
Name = Annotated[str, StringConstraints(strict=True, pattern=r"^[A-Za-z0-9][A-Za-z0-9._-]{0,99}$")]
# Free text without control characters, which no log, table or page could show.
Text = Annotated[str, StringConstraints(strict=True, min_length=1, max_length=200, pattern=r"^[^\x00-\x1f\x7f]+$")]


def _moment(given: object) -> datetime:
    """RFC 3339 text with its offset; numbers are no moments here."""
    rule = "must be a date and time with its offset (RFC 3339)"
    if not isinstance(given, str):
        raise ValueError(rule)  # noqa: TRY004 - pydantic makes a fault of it
    try:
        moment = datetime.fromisoformat(given)
    except ValueError:
        raise ValueError(rule) from None
    if moment.tzinfo is None:
        raise ValueError(rule)
    return moment


Moment = Annotated[datetime, BeforeValidator(_moment, json_schema_input_type=str)]


class Form(BaseModel):
    """A body: unknown fields are refused."""

    model_config = ConfigDict(extra="forbid", allow_inf_nan=False)


class Answer(BaseModel):
    """An answer."""

    model_config = ConfigDict(from_attributes=True)


A = TypeVar("A", bound=Answer)


def optional(answer: type[A], value: object | None) -> A | None:
    """The answer from a domain value, None for none."""
    return None if value is None else answer.model_validate(value)


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
