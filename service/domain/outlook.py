"""What is still needed from where a test stands: the shortest ways to each decision, and what is to be expected."""

from dataclasses import dataclass
from functools import lru_cache

from service.domain.calibrating import accepts_at, exact_figures, rejects_at
from service.domain.characteristics import Spread, spread_at
from service.domain.families.base import Start, Way
from service.domain.procedure import Procedure, procedure_of_document
from service.domain.state import State
from service.sequential.decision import Decision


@dataclass(frozen=True)
class Ways:
    """The shortest way to each decision; None where the region has none, or the test is decided."""

    accept: Way | None
    reject: Way | None


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
        expected: Empty once the test is decided.
    """

    ways: Ways
    estimate: float | None
    room: Room | None
    expected: tuple[Expected, ...]
    error_bound: float


NO_WAYS = Ways(None, None)


def ways_of(procedure: Procedure, state: State) -> Ways:
    """The shortest way to each decision from here."""
    return NO_WAYS if state.is_decided else _ways(procedure, _standing(procedure, state))


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
    standing = _standing(procedure, state)
    if state.is_decided:
        return Outlook(NO_WAYS, procedure.family.estimate(standing, procedure.known), None, (), 0.0)
    return _outlook(document, standing)


@lru_cache(maxsize=4096)
def _outlook(document: str, standing: Start) -> Outlook:
    procedure = procedure_of_document(document)
    estimate = procedure.family.estimate(standing, procedure.known)
    asked = {"h0": procedure.hypotheses[0], "h1": procedure.hypotheses[1]}
    if estimate is not None:
        asked["estimate"] = estimate
    found = exact_figures(procedure, tuple(asked.values()), standing)
    expected = tuple(
        Expected(
            under=under,
            parameter=parameter,
            probability_of_acceptance=accepts_at(procedure, found, i),
            probability_of_rejection=rejects_at(procedure, found, i),
            further_sample_number=None if procedure.family.is_watched_in_time else spread_at(found, i),
            further_exposure=spread_at(found, i) if procedure.family.has_exposure else None,
        )
        for i, (under, parameter) in enumerate(asked.items())
    )
    return Outlook(_ways(procedure, standing), estimate, _room(procedure, standing), expected, found.error_bound)


def _ways(procedure: Procedure, standing: Start) -> Ways:
    lower, upper = procedure.family.ways(procedure.region, standing, procedure.known)
    return Ways(lower, upper) if procedure.region.below is Decision.ACCEPT else Ways(upper, lower)


def _standing(procedure: Procedure, state: State) -> Start:
    progress = state.exposure.value if procedure.family.has_exposure else float(state.sample_number)
    return Start(progress, state.total.value)


def _room(procedure: Procedure, standing: Start) -> Room | None:
    wall = procedure.region.wall
    if wall is None:
        return None
    left = wall.progress - standing.progress
    failures = None if wall.cap is None else wall.cap - int(standing.total)
    return Room(None, left, failures) if procedure.family.has_exposure else Room(round(left), None, failures)
