"""Types that several schemas share."""

from typing import Any, TypeVar

from pydantic import BaseModel, ConfigDict, Field


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
