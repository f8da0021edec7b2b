"""The registration of a test as somebody types it."""

from collections.abc import Mapping
from dataclasses import dataclass

from pydantic import TypeAdapter, ValidationError

from service.domain.names import NAME_RULE, is_name
from service.domain.sequential_test import Subject, SubjectKind
from service.pages.forms import Typed
from service.web.fields import Text

MOST_LABELS = 20
TEXT_RULE = "must be 1 to 200 characters, none of them a control character"

_TEXT: TypeAdapter[str] = TypeAdapter(Text)


@dataclass(frozen=True)
class Registration:
    """What is to be registered."""

    key: str
    subject: Subject
    labels: Mapping[str, str]


def registration_in(form: Typed) -> tuple[Registration | None, dict[str, str]]:
    """What was typed, or None with what is wrong by the name of the field."""
    faults: dict[str, str] = {}
    key, kind, subject = form["key"], form["kind"], form["subject"]
    if not is_name(key):
        faults["key"] = f"must be {NAME_RULE}"
    if kind not in set(SubjectKind):
        faults["kind"] = f"must be one of {', '.join(SubjectKind)}"
    if not _is_text(subject):
        faults["subject"] = TEXT_RULE
    labels, fault = _labels(form["labels"])
    if fault:
        faults["labels"] = fault
    if faults:
        return None, faults
    return Registration(key, Subject(SubjectKind(kind), subject), labels), {}


def _labels(text: str) -> tuple[dict[str, str], str]:
    """Labels out of lines, and what is wrong with the first line that is."""
    found: dict[str, str] = {}
    lines = [line.strip() for line in text.replace("\r", "").split("\n") if line.strip()]
    if len(lines) > MOST_LABELS:
        return {}, f"must be at most {MOST_LABELS}; received {len(lines)}"
    for place, line in enumerate(lines, 1):
        name, colon, value = (part.strip() for part in line.partition(":"))
        if not colon:
            return {}, f"line {place} must be a name, a colon and a value; received {line[:40]!r}"
        if not is_name(name):
            return {}, f"line {place}: the name must be {NAME_RULE}"
        if not _is_text(value):
            return {}, f"line {place}: the value {TEXT_RULE}"
        if name in found:
            return {}, f"line {place}: {name!r} is there already"
        found[name] = value
    return found, ""


def _is_text(text: str) -> bool:
    try:
        _TEXT.validate_python(text)
    except ValidationError:
        return False
    return True
