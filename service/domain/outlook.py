"""What is still needed from where a test stands: the shortest ways to each decision, and what is to be expected."""

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from service.domain.calibrating import accepts_at, exact_figures, rejects_at
from service.domain.characteristics import Spread, spread_at
from service.domain.families.base import Start, Way, plural
from service.domain.observing import standing_of
from service.domain.procedure import Procedure, procedure_of_document
from service.domain.state import State
from service.sequential.decision import Decision


@dataclass(frozen=True)
class Ways:
    """
    The shortest way to each decision; None where the region has none, or the test is decided.

    `reject_below` is that to the lower limit of a two-sided region, whose upper one is `reject`.
    """

    accept: Way | None
    reject: Way | None
    reject_below: Way | None = None


@dataclass(frozen=True)
class Expected:
    """
    Exact figures of the rest of the test under one true parameter.

    Attributes:
        under: `h0`, `h1` or `estimate`.
        further_sample_number, further_exposure: As for a plan's characteristics, counted from here.
    """

    under: str
    parameter: float
    probability_of_acceptance: float
    probability_of_rejection: float
    further_sample_number: Spread | None
    further_exposure: Spread | None


@dataclass(frozen=True)
class Room:
    """What is left before the truncation: units, or exposure, and failures where they end the test as well."""

    sample_number: int | None
    exposure: float | None
    failures: int | None


@dataclass(frozen=True)
class Outlook:
    """
    Attributes:
        estimate: Maximum likelihood from the observations so far, None where there is none.
        room: None where the plan is not truncated, or the test is decided.
        expected: Empty once the test is decided, where the plan may go on for ever, where the family has no model, and
            in an invariant plan.
        reason: Why `expected` is empty while the test goes on, None where it is not.
    """

    ways: Ways
    estimate: float | None
    room: Room | None
    expected: tuple[Expected, ...]
    error_bound: float
    reason: str | None = None


NO_WAYS = Ways(None, None)


def ways_of(procedure: Procedure, state: State) -> Ways:
    """The shortest way to each decision from here."""
    return NO_WAYS if state.is_decided else _ways(procedure, standing_of(procedure, state))


def outlook_of(document: str, state: State) -> Outlook:
    """
    All that can be said about the rest of a test; kept for a while, because dashboards ask again and again.

    Args:
        document: The plan's canonical document.
        state: Where the test stands.

    Raises:
        ComputationTooLarge: The exact figures need more steps than are allowed.
    """
    procedure = procedure_of_document(document)
    standing = standing_of(procedure, state)
    if state.is_decided:
        return Outlook(NO_WAYS, procedure.family.estimate(standing, procedure.known), None, (), 0.0)
    return _outlook(document, standing)


@lru_cache(maxsize=4096)
def _outlook(document: str, standing: Start) -> Outlook:
    procedure = procedure_of_document(document)
    estimate = procedure.family.estimate(standing, procedure.known)
    reason = _reason(procedure)
    if reason is not None:
        return Outlook(_ways(procedure, standing), estimate, _room(procedure, standing), (), 0.0, reason)
    asked = dict(zip(("h0", "h1"), procedure.hypotheses, strict=False))
    if estimate is not None:
        asked["estimate"] = estimate
    idle = procedure.family.idle_units(standing)
    found = exact_figures(procedure, tuple(asked.values()), standing)
    expected = tuple(
        Expected(
            under=under,
            parameter=parameter,
            probability_of_acceptance=accepts_at(procedure, found, i),
            probability_of_rejection=rejects_at(procedure, found, i),
            further_sample_number=spread_at(found, i, idle) if procedure.family.has_figures_of_units else None,
            further_exposure=spread_at(found, i) if procedure.family.has_exposure else None,
        )
        for i, (under, parameter) in enumerate(asked.items())
    )
    return Outlook(_ways(procedure, standing), estimate, _room(procedure, standing), expected, found.error_bound)


def _reason(procedure: Procedure) -> str | None:
    """Why nothing exact can be expected of the rest."""
    if procedure.may_go_on_for_ever:
        return "Where H0 is true this plan may go on for ever."
    if not procedure.family.has_model:
        return "The family has no model of the observations."
    if procedure.family.is_invariant:
        return "The figures of an invariant plan are simulated, from its beginning only; see its characteristics."
    return None


def _ways(procedure: Procedure, standing: Start) -> Ways:
    lower, upper = procedure.family.ways(procedure.region, standing, procedure.known)
    if procedure.is_two_sided:
        return Ways(_way_between(procedure, standing), upper, lower)
    return Ways(lower, upper) if procedure.region.below is Decision.ACCEPT else Ways(upper, lower)


def _way_between(procedure: Procedure, standing: Start) -> Way | None:
    """To the wall of a two-sided region without reaching a limit."""
    room = _room(procedure, standing)
    if room is None or procedure.region.wall is None:
        return None
    limits = procedure.region.limits(np.array([procedure.region.wall.progress]))
    low, high = float(limits.lower[0]), float(limits.upper[0])
    ends = f"above {low:.6g} and below {high:.6g}"
    if procedure.family.span.is_integer:
        low, high = max(low + 1.0, procedure.family.span.floor), high - 1.0
        ends = f"from {low:.0f} to {high:.0f}" if math.isfinite(high) else f"of at least {low:.0f}"
    units = room.sample_number
    more = f"an exposure of {room.exposure:.6g}" if units is None else plural(units, "unit")
    return Way(room.sample_number, room.exposure, high - standing.total, f"{more} more that end with a total {ends}")


def _room(procedure: Procedure, standing: Start) -> Room | None:
    wall = procedure.region.wall
    if wall is None:
        return None
    left = wall.progress - standing.progress + procedure.family.idle_units(standing)
    failures = None if wall.cap is None else wall.cap - int(standing.total)
    return Room(None, left, failures) if procedure.family.has_exposure else Room(round(left), None, failures)
