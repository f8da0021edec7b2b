"""A plan as somebody types it: fields of an address or a form to a plan's content, and back."""

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any
from urllib.parse import urlencode

from service.domain.errors import Fault
from service.domain.families import family_of
from service.domain.plan import Content
from service.domain.statistics import STATISTICS
from service.domain.tables import FIELDS
from service.pages.views.examples import example_of
from service.pages.views.plan_fields import Field, Kind, Layout, layout_of, standard_named

# The candidates of a comparison, by the letters that begin the names of their fields.
LETTERS = "abc"
LONGEST = 40
MOST_ROWS = 2000
# Names the shape to which the fields of a form belong.
SHAPE = "shape"
# The scale at which a reliability standard is first shown.
EXAMPLE_SCALE = 100.0

_NUMBER = re.compile(r"[+-]?(\d+(\.\d*)?|\.\d+)([eE][+-]?\d+)?", re.ASCII)
_WHOLE = re.compile(r"[+-]?\d+", re.ASCII)


@dataclass(frozen=True)
class Candidate:
    """
    One plan on the form.

    Attributes:
        letter: Before its fields' names.
        name: As the drawings name it; what it would be stored under.
        values: By the path of a field, as typed or filled in.
        content: As the domain takes it, as far as it could be read.
        faults: What could not be read, or what the domain found, by the path of a field; under an empty path for none.
    """

    letter: str
    name: str
    layout: Layout
    values: Mapping[str, str]
    content: Content
    faults: Mapping[str, str] = field(default_factory=dict)

    @property
    def may_be_truncated(self) -> bool:
        """Whether a truncation can be looked for."""
        has_truncation = any(each.path.startswith("truncation.") for each in self.layout.limits)
        return has_truncation and self.values.get("statistic", "simple") == "simple"

    @property
    def shape(self) -> str:
        """What its fields follow from."""
        return _shape(self.values)

    def with_faults(self, faults: tuple[Fault, ...]) -> "Candidate":
        """The same with what the domain found wrong, beside the fields."""
        found = dict(self.faults)
        for fault in faults:
            path = self.layout.field_of(fault.pointer)
            said = _located(fault, path)
            found[path] = f"{found[path]}; {said}" if path in found else said
        return Candidate(self.letter, self.name, self.layout, self.values, self.content, found)

    def pairs(self, letter: str | None = None) -> list[tuple[str, str]]:
        """Its fields with what they hold, as an address has them; empty ones left out."""
        prefix = letter or self.letter
        shown = [("name", self.name), *((each.path, self.values.get(each.path, "")) for each in self.layout.fields)]
        return [(f"{prefix}.{path}", value) for path, value in shown if value]


def candidates_of(query: Mapping[str, str]) -> tuple[Candidate, ...]:
    """The candidates that an address or a form holds; one with an example where it holds none."""
    letters = [letter for letter in LETTERS if any(name.startswith(f"{letter}.") for name in query)]
    return tuple(_candidate(letter, _of_letter(query, letter)) for letter in letters or LETTERS[:1])


def candidate_from(letter: str, name: str, content: Content) -> Candidate:
    """A candidate that begins as this content."""
    return _candidate(letter, {"name": name, **values_of(content)})


def address_of(path: str, candidates: tuple[Candidate, ...], **others: str) -> str:
    """Where these candidates are shown."""
    pairs = [pair for candidate in candidates for pair in candidate.pairs()]
    return f"{path}?{urlencode([*pairs, *((name, value) for name, value in others.items() if value)])}"


def values_of(content: Content) -> dict[str, str]:
    """A content as fields hold it; what was computed from it, and what a standard brings, are left out."""
    found: dict[str, str] = {}
    standard = standard_named(content.get("standard", ""))
    skipped = {"attained", "thresholds"} if content.get("boundaries") != "given" else {"attained"}
    if standard is not None:
        skipped |= standard.content.keys() - standard.free | {"boundaries", "statistic"}
    for name, value in content.items():
        if name in skipped:
            continue
        if name == "table":
            found["table"] = _rows_text(content)
        elif isinstance(value, Mapping):
            found.update(_inner(name, value))
        else:
            found[name] = number_text(value)
    return found


def number_text(value: object) -> str:
    """A number as one would type it, with all its digits."""
    if isinstance(value, float):
        return str(int(value)) if value.is_integer() and abs(value) < 1e15 else repr(value)
    return str(value)


def number_in(text: str) -> float:
    """
    The number that a text holds; a true minus sign will do.

    Raises:
        ValueError: It holds none; the text says the rule.
    """
    plain = text.replace("\u2212", "-")
    if len(plain) > LONGEST or not _NUMBER.fullmatch(plain):
        raise ValueError(f"must be a number, such as 0.05; received {_short(text)}")
    value = float(plain)
    if not math.isfinite(value):
        raise ValueError(f"is too large; received {_short(text)}")
    return value


def whole_in(text: str) -> int:
    """
    The whole number that a text holds.

    Raises:
        ValueError: It holds none; the text says the rule.
    """
    plain = text.replace("\u2212", "-")
    if len(plain) > LONGEST or not _WHOLE.fullmatch(plain):
        raise ValueError(f"must be a whole number, such as 200; received {_short(text)}")
    return int(plain)


def _of_letter(query: Mapping[str, str], letter: str) -> dict[str, str]:
    begin = f"{letter}."
    return {name.removeprefix(begin): value.strip() for name, value in query.items() if name.startswith(begin)}


def _candidate(letter: str, typed: dict[str, str]) -> Candidate:
    values = _filled(typed)
    layout = layout_of(values)
    content, faults = _content(layout, values)
    return Candidate(letter, values.get("name", "")[:100], layout, values, content, faults)


def _filled(typed: dict[str, str]) -> dict[str, str]:
    """
    What was typed, or the example of its shape where the fields are another shape's, or nothing but a shape was said.

    The risks stay as they were typed.
    """
    values = {"family": "bernoulli", "statistic": "simple", **typed}
    shape = values.pop(SHAPE, None)
    rest = typed.keys() - {"name", SHAPE, "family", "statistic", "standard"}
    if shape == _shape(values) or (shape is None and rest):
        return _with_rule(values)
    standard = standard_named(values.get("standard", ""))
    if standard is not None:
        own = {name: number_text(standard.content[name]) for name in sorted(standard.free)}
        own |= {"scale": number_text(EXAMPLE_SCALE)} if standard.needs_scale else {}
        return {"name": values.get("name", ""), "standard": standard.name, **own}
    example = values_of(example_of(values["family"], values["statistic"]))
    kept = {name: typed[name] for name in ("name", "family", "statistic", "alpha", "beta") if typed.get(name)}
    if standard_named(shape or "") is not None:
        kept = {name: value for name, value in kept.items() if name == "name"}
    return {**example, **kept}


def _with_rule(values: dict[str, str]) -> dict[str, str]:
    """With the boundary rule that a plan has where it says none."""
    statistic = STATISTICS.get(values["statistic"])
    if statistic is None or values.get("standard") or values.get("boundaries"):
        return values
    return {**values, "boundaries": statistic.boundaries[0]}


def _shape(values: Mapping[str, str]) -> str:
    """A standard brings its own family and statistic."""
    return values.get("standard") or "|".join((values.get("family", ""), values.get("statistic", "")))


def _content(layout: Layout, values: Mapping[str, str]) -> tuple[dict[str, Any], dict[str, str]]:
    """What can be read of the fields that are shown, and what cannot."""
    content: dict[str, Any] = {}
    faults: dict[str, str] = {}
    for each in layout.fields:
        text = values.get(each.path, "")
        if not text:
            continue
        try:
            _put(content, each.path, _read(each, text, values))
        except ValueError as error:
            faults[each.path] = str(error)
    return content, faults


def _read(each: Field, text: str, values: Mapping[str, str]) -> Any:  # noqa: ANN401 - a part of a content
    if each.path == "sides":
        return whole_in(text)
    if each.kind is Kind.CHOICE:
        return text
    if each.kind is Kind.ROWS:
        return _rows_in(text, values)
    return whole_in(text) if each.kind is Kind.WHOLE else number_in(text)


def _rows_in(text: str, values: Mapping[str, str]) -> list[dict[str, Any]]:
    """
    The rows of a table, one a line.

    Raises:
        ValueError: A line cannot be read.
    """
    family = family_of(values)
    names = FIELDS[family.table] if family is not None and family.table is not None else ()
    lines = [line for line in text.replace("\r", "").split("\n") if line.strip()]
    if len(lines) > MOST_ROWS:
        raise ValueError(f"must be at most {MOST_ROWS} rows; received {len(lines)}")
    rows = []
    for place, line in enumerate(lines, 1):
        entries = re.split(r"[\s,;]+", line.strip())
        if len(entries) != len(names):
            raise ValueError(f"row {place} must have {len(names)} entries; received {_short(line.strip())}")
        try:
            rows.append(
                {name: _entry(name, entry) for name, entry in zip(names, entries, strict=True) if entry not in "-–−"}
            )
        except ValueError as error:
            raise ValueError(f"row {place} {error}") from None
    return rows


def _entry(name: str, text: str) -> float | int:
    return number_in(text) if name.endswith("_at") else whole_in(text)


def _rows_text(content: Content) -> str:
    family = family_of(content)
    names = FIELDS[family.table] if family is not None and family.table is not None else ()
    return "\n".join(
        " ".join("-" if row.get(name) is None else number_text(row[name]) for name in names) for row in content["table"]
    )


def _put(content: dict[str, Any], path: str, value: object) -> None:
    *outer, last = path.split(".")
    for name in outer:
        content = content.setdefault(name, {})
    content[last] = value


def _inner(path: str, value: Mapping[str, Any]) -> dict[str, str]:
    found: dict[str, str] = {}
    for name, inner in value.items():
        deeper = f"{path}.{name}"
        found |= _inner(deeper, inner) if isinstance(inner, Mapping) else {deeper: number_text(inner)}
    return found


def _located(fault: Fault, path: str) -> str:
    """A fault beside a field; what the pointer says beyond it, or all of it where there is no field, goes before."""
    parts = fault.pointer.strip("/").split("/")
    rest = parts[len(path.split(".")) :] if path else parts
    if path == "table" and rest:
        rest = [f"row {int(rest[0]) + 1}", *rest[1:]]
    words = ", ".join(part.replace("_", " ") for part in rest if part)
    return f"{words}: {fault.detail}" if words else fault.detail


def _short(text: str) -> str:
    return repr(text if len(text) <= LONGEST else f"{text[:LONGEST]}…")
