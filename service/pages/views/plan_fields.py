"""The fields of a plan on a form: which there are follows from its family, statistic, standard and boundary rule."""

from collections.abc import Mapping
from dataclasses import dataclass
from enum import StrEnum

from service.domain.families import FAMILIES, Family, family_of
from service.domain.standards import Standard, catalogue
from service.domain.statistics import DIRECTIONS, STATISTICS
from service.domain.tables import FIELDS
from service.pages.views.plan_words import (
    BOUNDARY_WORDS,
    KNOWN_HINTS,
    KNOWN_WORDS,
    PRIOR_WORDS,
    STATISTIC_WORDS,
    family_words,
)

# Rules that hold without a model of the observations.
WITHOUT_MODEL = ("strict", "given")

Choices = tuple[tuple[str, str], ...]


class Kind(StrEnum):
    """What is typed into a field."""

    NUMBER = "number"
    WHOLE = "whole"
    CHOICE = "choice"
    ROWS = "rows"


@dataclass(frozen=True)
class Field:
    """
    One field.

    Attributes:
        path: Where its value stands in the content: the pointer with points for slashes, the first one left out.
        choices: Values and words, for a choice.
    """

    path: str
    label: str
    kind: Kind = Kind.NUMBER
    hint: str = ""
    choices: Choices = ()

    def choices_with(self, typed: str) -> Choices:
        """The choices, and what was typed where it is none of them."""
        known = {value for value, _ in self.choices}
        return self.choices if typed in known else (*self.choices, (typed, typed))


@dataclass(frozen=True)
class Layout:
    """
    The fields of one plan in their groups.

    Attributes:
        shape: What the other fields follow from, the boundary rule left out.
        sides: One side or both.
        stated: Hypotheses, what is known, risks.
        rule: The boundary rule.
        limits: What the rule needs, and the truncation.
    """

    shape: tuple[Field, ...]
    sides: tuple[Field, ...]
    stated: tuple[Field, ...]
    rule: tuple[Field, ...]
    limits: tuple[Field, ...]

    @property
    def fields(self) -> tuple[Field, ...]:
        """All of them."""
        return (*self.shape, *self.sides, *self.stated, *self.rule, *self.limits)

    def field_of(self, pointer: str) -> str:
        """The path of the field beside which a fault with this pointer stands; empty where there is none."""
        path = pointer.removeprefix("/").replace("/", ".")
        paths = [field.path for field in self.fields]
        inside = (name for name in paths if path == name or path.startswith(f"{name}."))
        around = (name for name in paths if name.startswith(f"{path}."))
        return next(inside, None) or next(around, "")


FAMILY = Field(
    "family",
    "What is observed",
    Kind.CHOICE,
    choices=tuple((name, family_words(name)) for name in FAMILIES),
)
STATISTIC = Field(
    "statistic",
    "Statistic",
    Kind.CHOICE,
    choices=tuple((name, f"{name}: {words}") for name, words in STATISTIC_WORDS.items()),
)


def layout_of(values: Mapping[str, str]) -> Layout:
    """The fields that a plan with these values of its shape has."""
    name = values.get("standard", "")
    standard = standard_named(name)
    shape = (FAMILY, STATISTIC, _standard_field()) if not name else (_standard_field(),)
    if name:
        return Layout(shape, (), _stated_by(standard), (), ())
    statistic = values.get("statistic", "simple")
    family = family_of({"family": values.get("family", ""), "statistic": statistic}) or FAMILIES["bernoulli"]
    sides = values.get("sides", "")
    rule = values.get("boundaries", "")
    return Layout(
        shape,
        _sides(statistic),
        (*_hypotheses(family, statistic, sides), *_known(family, statistic), *_risks(statistic, sides)),
        (_rule(family, statistic),),
        _limits(family, rule, may_accept=statistic != "mixture" and not (statistic == "generalised" and sides == "2")),
    )


def standard_named(name: str) -> Standard | None:
    """The entry of the catalogue; None for none."""
    return next((entry for entry in catalogue() if entry.name == name), None)


def _standard_field() -> Field:
    choices = (("", "none: a plan of your own"), *((entry.name, entry.name) for entry in catalogue()))
    return Field("standard", "Standard plan", Kind.CHOICE, choices=choices)


def _stated_by(standard: Standard | None) -> tuple[Field, ...]:
    """What a standard leaves to whoever uses it."""
    if standard is None:
        return ()
    if standard.needs_scale:
        return (Field("scale", "Scale: the lower test mean life (H1)", hint="in your unit of time"),)
    labels = {"h0": "H0", "h1": "H1", "alpha": "Producer's risk α", "beta": "Consumer's risk β"}
    parameter = FAMILIES[standard.content["family"]].parameter
    return tuple(
        Field(name, label, hint=parameter if name.startswith("h") else "")
        for name, label in labels.items()
        if name in standard.free
    )


def _sides(statistic: str) -> tuple[Field, ...]:
    if statistic not in ("generalised", "mixture", "invariant"):
        return ()
    choices = (("", "one-sided"), ("2", "two-sided: H0 alone against both sides of it"))
    return (Field("sides", "Sides", Kind.CHOICE, choices=choices),)


def _hypotheses(family: Family, statistic: str, sides: str) -> tuple[Field, ...]:
    if not family.has_model:
        return ()
    h0 = Field("h0", "H0", hint=family.parameter)
    h1 = Field("h1", "H1", hint=family.parameter)
    choices = (("", "as H1 says, else above"), *((name, name) for name in DIRECTIONS))
    direction = Field("direction", "H1 lies", Kind.CHOICE, choices=choices)
    if statistic == "mixture":
        return (h0,) if sides == "2" else (h0, direction)
    if statistic == "generalised":
        return (h0,) if sides == "2" else (h0, h1, direction)
    return (h0, h1)


def _known(family: Family, statistic: str) -> tuple[Field, ...]:
    known = []
    for name in (*family.known, *family.may_know):
        label, hint = KNOWN_WORDS.get(name, (name.replace("_", " "), ""))
        known.append(Field(f"known.{name}", label, hint=KNOWN_HINTS.get((family.name, name), hint)))
    if statistic == "mixture":
        known += [Field(f"known.prior.{name}", PRIOR_WORDS.get(name, f"Prior: {name}")) for name in family.prior]
    return tuple(known)


def _risks(statistic: str, sides: str) -> tuple[Field, ...]:
    alpha = Field("alpha", "Producer's risk α", hint="of rejecting although H0 is true")
    if statistic == "mixture" or (statistic == "generalised" and sides == "2"):
        return (alpha,)
    return (alpha, Field("beta", "Consumer's risk β", hint="of accepting although H1 is true"))


def _rule(family: Family, statistic: str) -> Field:
    rules = STATISTICS.get(statistic, STATISTICS["simple"]).boundaries
    rules = tuple(rule for rule in rules if rule != "table" or family.table is not None)
    rules = tuple(rule for rule in rules if family.has_model or rule in WITHOUT_MODEL)
    return Field(
        "boundaries",
        "Boundaries",
        Kind.CHOICE,
        choices=tuple((rule, f"{rule}: {BOUNDARY_WORDS[rule]}") for rule in rules),
    )


def _limits(family: Family, rule: str, *, may_accept: bool) -> tuple[Field, ...]:
    if rule == "table" and family.table is not None:
        names = ", ".join(name.replace("_", " ") for name in FIELDS[family.table])
        return (Field("table", "Rows", Kind.ROWS, hint=f"one a line: {names}; a hyphen for no number"),)
    given = []
    if rule == "given":
        given = [Field("thresholds.accept", "Accept at Λ of", hint="below 0")] if may_accept else []
        given.append(Field("thresholds.reject", "Reject at Λ of", hint="above 0"))
    if not family.has_exposure:
        return (*given, Field("truncation.sample_number", f"Truncate at, {family.axis}", Kind.WHOLE, "empty for none"))
    given.append(Field("truncation.exposure", "Truncate at, exposure", hint=f"{family.axis}; empty for none"))
    if family.is_watched_in_time:
        hint = "this failure before it rejects; empty for none"
        given.append(Field("truncation.failures", "… or at so many failures", Kind.WHOLE, hint))
    return tuple(given)
