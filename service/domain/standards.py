"""Standard plans by name: the catalogue's entries as contents of plans."""

from dataclasses import dataclass
from functools import lru_cache
from typing import Any

from service.domain.catalogue import INSPECTION, RELIABILITY, CountedStandard, TimedStandard
from service.domain.errors import Fault, InvalidPlan
from service.domain.families.base import positive_rule
from service.domain.plan import Content, rounded

MILITARY = "MIL-HDBK-781A/"


@dataclass(frozen=True, eq=False)
class Standard:
    """
    An entry of the catalogue.

    Attributes:
        needs_scale: Its times are multiples of a scale that the plan must give.
        content: What it stands for in a plan, at scale 1 where it has one.
        free: The fields of the content that are not the source's; a plan may give others.
    """

    name: str
    title: str
    source: str
    needs_scale: bool
    content: Content
    free: frozenset[str]


@lru_cache(maxsize=1)
def catalogue() -> tuple[Standard, ...]:
    """All standard plans."""
    timed = (_timed(name, entry) for name, entry in RELIABILITY.items())
    counted = (_counted(name, entry) for name, entry in INSPECTION.items())
    return (*timed, *counted)


def source_of(name: str | None) -> str | None:
    """Where the standard of this name stands; None for none."""
    return next((entry.source for entry in catalogue() if entry.name == name), None)


def expanded(content: Content) -> dict[str, Any]:
    """
    A plan's content with the name of a standard, if it has one, replaced by what that stands for.

    The name and the scale stay in the content as its provenance.

    Raises:
        InvalidPlan: There is no such standard, or the content contradicts it.
    """
    if "standard" not in content:
        if "scale" in content:
            raise InvalidPlan([Fault("/scale", "means nothing without a standard")])
        return dict(content)
    standard = {entry.name: entry for entry in catalogue()}.get(content["standard"])
    if standard is None:
        names = ", ".join(entry.name for entry in catalogue())
        rule = f"must be one of {names}; received {content['standard']!r}"
        raise InvalidPlan([Fault("/standard", rule)])
    _check_scale(standard, content.get("scale"))
    stated = _scaled(standard, content.get("scale", 1.0))
    faults = [
        Fault(f"/{name}", f"is set by the standard: {stated[name]!r}; received {content[name]!r}")
        for name in sorted(stated.keys() & content.keys() - standard.free - {"boundaries", "table"})
        if content[name] != stated[name]
    ]
    if "table" in content:
        faults.append(Fault("/table", "comes from the standard and may not be given beside it"))
    if content.get("boundaries", "wald") not in ("wald", "table"):
        faults.append(Fault("/boundaries", f"is set by the standard: 'table'; received {content['boundaries']!r}"))
    if faults:
        raise InvalidPlan(faults)
    return {**stated, **content, "boundaries": "table"}


def _check_scale(standard: Standard, scale: float | None) -> None:
    if standard.needs_scale and scale is None:
        raise InvalidPlan([Fault("/scale", "is required: the lower test mean life (h1), in your unit of time")])
    if not standard.needs_scale and scale is not None:
        raise InvalidPlan([Fault("/scale", f"means nothing for {standard.name}")])
    if scale is not None and (rule := positive_rule(scale)) is not None:
        raise InvalidPlan([Fault("/scale", f"{rule}; received {scale!r}")])


def _scaled(standard: Standard, scale: float) -> dict[str, Any]:
    """The standard's content in the plan's unit of time."""
    content = dict(standard.content)
    if standard.needs_scale:
        content["h0"], content["h1"] = rounded(scale * content["h0"]), rounded(scale * content["h1"])
        content["table"] = [
            {name: value if name == "failures" else rounded(scale * value) for name, value in row.items()}
            for row in content["table"]
        ]
    return content


def _timed(name: str, entry: TimedStandard) -> Standard:
    rows = [
        {"failures": failures, **_present(reject_at=reject_at, accept_at=accept_at)}
        for failures, (reject_at, accept_at) in enumerate(entry.rows)
    ]
    content = {
        "family": "exponential",
        "h0": entry.ratio,
        "h1": 1.0,
        "alpha": entry.risk,
        "beta": entry.risk,
        "table": rows,
    }
    title = f"Reliability test plan {name}: discrimination ratio {entry.ratio:g}, nominal risks {100 * entry.risk:g} %"
    source = "MIL-HDBK-781A (1996), sequential test plans"
    return Standard(MILITARY + name, title, source, needs_scale=True, content=content, free=frozenset())


def _counted(name: str, entry: CountedStandard) -> Standard:
    rows = [
        {"sample_number": number, **_present(accept=accept, reject=reject)} for number, accept, reject in entry.rows
    ]
    content = {
        "family": "bernoulli",
        "h0": entry.h0,
        "h1": entry.h1,
        "alpha": entry.alpha,
        "beta": entry.beta,
        "table": rows,
    }
    free = frozenset({"h0", "h1", "alpha", "beta"})
    return Standard(name, entry.title, entry.source, needs_scale=False, content=content, free=free)


def _present(**entries: float | None) -> dict[str, float]:
    """The entries that a row has."""
    return {name: value for name, value in entries.items() if value is not None}
