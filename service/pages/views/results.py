"""The log of a test as a table, and one observation as a form to correct it by."""

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass
from itertools import islice
from typing import Any

from pydantic import TypeAdapter, ValidationError

from service.domain.correcting import in_force
from service.domain.errors import Fault, InvalidCorrection
from service.domain.families import Family
from service.domain.log import LoggedObservation, expanded
from service.domain.plan import Plan
from service.domain.procedure import procedure_of
from service.domain.sequential_test import SequentialTest
from service.pages.forms import Typed
from service.pages.words import figure
from service.storage.reader import Reader
from service.web.fields import Text

ROWS = 100
# Fields that are true or false.
FLAGS = frozenset({"failed"})
YES, NO = "yes", "no"
UNIT = "unit"
# Whole numbers with fewer characters are exact.
LONGEST_WHOLE = 17
_TEXT: TypeAdapter[str] = TypeAdapter(Text)
_NUMBER = re.compile(r"[+-]?([0-9]+(\.[0-9]*)?|\.[0-9]+)([eE][+-]?[0-9]+)?")


@dataclass(frozen=True)
class Result:
    """
    One observation for people.

    Attributes:
        posted: What was posted, field by field.
        counts: What counts in its place, None where it is voided; the same as posted without a correction.
    """

    logged: LoggedObservation
    posted: tuple[str, ...]
    counts: tuple[str, ...] | None


@dataclass(frozen=True)
class Results:
    """
    A page of the log.

    Attributes:
        columns: The names of the fields.
        earlier, later: The observations after which the neighbouring pages begin, None where there is none.
    """

    columns: tuple[str, ...]
    rows: tuple[Result, ...]
    earlier: int | None
    later: int | None
    last: int


def results_of(reader: Reader, test: SequentialTest, plan: Plan, after: int | None) -> Results:
    """The observations after one, or without one the last that there are."""
    family, count = procedure_of(plan).family, test.state.sequence
    last = max(0, count - ROWS)
    begin = last if after is None else min(after, last) if after >= count else after
    entries = expanded(family, test, reader.log.corrected(test, begin))
    rows = tuple(result_of(family, each) for each in islice((e for e in entries if e.sequence > begin), ROWS))
    later = begin + ROWS if begin + ROWS < count else None
    return Results(columns_of(family), rows, max(0, begin - ROWS) if begin > 0 else None, later, last)


def columns_of(family: Family) -> tuple[str, ...]:
    """The family's fields as a heading says them."""
    return tuple("from age" if name == "from" else name for name in family.fields)


def fields_to_type(family: Family) -> tuple[tuple[str, tuple[tuple[str, str], ...]], ...]:
    """The fields of a replacement, each with the words to choose from where it is a choice."""
    words = {name: (YES, NO) if name in FLAGS else tuple(family.words.get(name, ())) for name in family.fields}
    return tuple((name, tuple((word, word) for word in words[name])) for name in family.fields)


def as_typed(observation: Mapping[str, Any] | None) -> Mapping[str, str]:
    """An observation as it stands in a form; the fields of one that is voided are empty."""
    return {name: _word(value, exactly=True) for name, value in (observation or {}).items()}


def as_observation(family: Family, form: Typed) -> dict[str, Any]:
    """
    What a form says of an observation.

    Raises:
        InvalidCorrection: Something that must be a number is none.
    """
    found: dict[str, Any] = {}
    faults = []
    for name, choices in fields_to_type(family):
        text = form[name]
        if not text:
            continue
        found[name] = text == YES if name in FLAGS else text if choices else number_in(text)
        if found[name] is None:
            faults.append(Fault(f"/observation/{name}", f"must be a number; received {text!r}"))
    if form[UNIT] and not _is_text(form[UNIT]):
        faults.append(Fault(f"/observation/{UNIT}", "must be at most 200 characters, without control characters"))
    if faults:
        raise InvalidCorrection(faults)
    return {**found, UNIT: form[UNIT]} if form[UNIT] else found


def _is_text(text: str) -> bool:
    try:
        return bool(_TEXT.validate_python(text))
    except ValidationError:
        return False


def said(family: Family, observation: Mapping[str, Any]) -> str:
    """An observation in a line, with the names of its fields where there are several."""
    named = {name: observation[name] for name in (*family.fields, UNIT) if name in observation}
    if len(named) == 1:
        return _word(*named.values())
    return ", ".join(f"{name} {_word(value)}" for name, value in named.items())


def number_in(text: str) -> float | int | None:
    """The number that somebody typed, with a comma or a point; None where it is none."""
    plain = text.replace("−", "-").replace(",", ".").replace(" ", "")
    if not _NUMBER.fullmatch(plain):
        return None
    if plain.lstrip("+-").isdigit() and len(plain) < LONGEST_WHOLE:
        return int(plain)
    return float(plain) if math.isfinite(float(plain)) else None


def result_of(family: Family, logged: LoggedObservation) -> Result:
    """An observation of the log for people."""
    posted = {name: logged.fields[name] for name in family.fields}
    now = in_force(posted, logged.correction)
    counted = None if now is None else {**{name: family.optional.get(name) for name in family.fields}, **now}
    return Result(logged, _words(family, posted), None if counted is None else _words(family, counted))


def _words(family: Family, observation: Mapping[str, Any]) -> tuple[str, ...]:
    return tuple(_word(observation.get(name)) for name in family.fields)


def _word(value: object, *, exactly: bool = False) -> str:
    if isinstance(value, bool):
        return YES if value else NO
    if isinstance(value, float | int):
        short = f"{value:g}"
        return figure(value, 9) if not exactly else short if float(short) == value else repr(value)
    return "" if value is None else str(value)
