"""
Does the stream of observations look like what the plan supposes? Figures for people; never a part of a decision.

All observations that were posted are looked at, counted ones and overrun together: they come from one process, and a
stream that goes on past the decision is less selected by it. Of very long streams a million are looked at: the latest
that counted, and then the first that came after them.
"""

from collections.abc import Iterable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from service.domain.checks import UNUSUAL, Check, Supposition
from service.domain.families import Increments
from service.domain.families.base import plural
from service.domain.gathering import gathered
from service.domain.procedure import Procedure
from service.domain.state import State

# Observations looked at: some 24 MB of numbers, and some seconds to decode and check.
MOST_OBSERVATIONS = 1_000_000

NO_EFFECT = (
    "These checks have no effect on the decision, on the evidence or on the test; they are for people who judge "
    "whether the plan fits."
)
WHILE_RUNNING = (
    "Each look at a running test is another chance to meet a small p-value; decide beforehand when to look, or look "
    "once, at the end."
)
STOPPED_ON_THESE = "Sampling stopped because of these results, so this p-value is approximate."
WHEN_STOPPED = (
    "Sampling stopped because of what was observed, so the observations are no random sample of a fixed size: the "
    "p-values are approximate, most of all those of order and drift in a short test."
)


@dataclass(frozen=True)
class Stretch:
    """The observations that are looked at, from `first` to `last`; those up to `last_counted` were counted."""

    first: int
    last: int
    last_counted: int


@dataclass(frozen=True)
class Seen:
    """What was found in a stretch, voided observations left out: those up to the decision, and those after it."""

    stretch: Stretch
    counted: int
    overrun: int

    @property
    def count(self) -> int:
        """All of them."""
        return self.counted + self.overrun


@dataclass(frozen=True)
class Assumptions:
    """
    Attributes:
        first_sequence, last_sequence: The observations looked at, None without any.
        observations: How many they are.
        overrun: How many of them came after the decision.
        checks: In a fixed order, with those that could not be made.
        adjusted: Holm's p-value for each check, None where it was not made.
        summary: How many were made and what chance alone does.
        notes: What to bear in mind.
    """

    first_sequence: int | None
    last_sequence: int | None
    observations: int
    overrun: int
    checks: tuple[Check, ...]
    adjusted: tuple[float | None, ...]
    summary: str
    notes: tuple[str, ...]

    @property
    def made(self) -> int:
        """How many checks could be made."""
        return sum(check.found is not None for check in self.checks)

    @property
    def smallest_adjusted(self) -> float | None:
        """The smallest of Holm's p-values, None where no check was made."""
        return min((value for value in self.adjusted if value is not None), default=None)


def stretch_of(state: State) -> Stretch:
    """What is looked at: everything while it is not too much, else the latest counted and then what came after them."""
    last_counted = _last_counted(state)
    first = max(1, last_counted - MOST_OBSERVATIONS + 1)
    return Stretch(first, min(state.sequence, first + MOST_OBSERVATIONS - 1), last_counted)


def assumptions_of(procedure: Procedure, state: State, bodies: Iterable[tuple[int, str]]) -> Assumptions:
    """
    Every check that the family makes.

    Args:
        procedure: The plan, compiled.
        state: Where the test stands.
        bodies: What holds the observations of the stretch to look at, as they count now and in order, each with its
            first sequence; voided ones are gaps.
    """
    reach = stretch_of(state)
    seen, sequences = _gathered(procedure, reach, bodies)
    counted = int(np.count_nonzero(sequences <= reach.last_counted))
    stretch = Seen(reach, counted, len(sequences) - counted)
    checks = procedure.family.checks(seen, procedure.known)
    if state.is_decided and stretch.overrun < stretch.counted:
        checks = tuple(_with_stopping(check) for check in checks)
    adjusted = _adjusted(checks)
    return Assumptions(
        first_sequence=reach.first if stretch.count else None,
        last_sequence=reach.last if stretch.count else None,
        observations=stretch.count,
        overrun=stretch.overrun,
        checks=checks,
        adjusted=adjusted,
        summary=_summary(checks, adjusted),
        notes=_notes(state, stretch),
    )


def holm(p_values: list[float]) -> list[float]:
    """
    P-values that allow for their number, whatever their dependence, in the order given.

    Source: Holm (1979), Scandinavian Journal of Statistics 6, 65-70: in rising order, the i-th of m times m - i + 1,
    and no smaller than the one before it.
    """
    m, running = len(p_values), 0.0
    adjusted = [0.0] * m
    for rank, i in enumerate(sorted(range(m), key=p_values.__getitem__)):
        running = max(running, min(1.0, (m - rank) * p_values[i]))
        adjusted[i] = running
    return adjusted


def _gathered(
    procedure: Procedure, stretch: Stretch, bodies: Iterable[tuple[int, str]]
) -> tuple[Increments, NDArray[np.int64]]:
    """The observations of the stretch as one submission, and their sequences."""
    read, numbers = list[Increments](), list[NDArray[np.int64]]()
    for sequences, document in gathered(bodies):
        read.append(procedure.family.read(document, procedure.known))
        numbers.append(sequences)
    if not read:
        empty = np.zeros(0)
        return Increments(np.zeros(0, np.int64), empty, empty), np.zeros(0, np.int64)
    sequences = np.concatenate(numbers)
    kept = slice(*np.searchsorted(sequences, [stretch.first, stretch.last + 1]))
    seen = Increments(
        units=np.concatenate([piece.units for piece in read])[kept],
        progress=np.concatenate([piece.progress for piece in read])[kept],
        total=np.concatenate([piece.total for piece in read])[kept],
        carried=tuple(np.concatenate(sums)[kept] for sums in zip(*(piece.carried for piece in read), strict=True)),
    )
    return seen, sequences[kept]


def _with_stopping(check: Check) -> Check:
    """Where the stopping matters most, its sentence says so."""
    if check.found is None or check.supposition is not Supposition.STEADINESS:
        return check
    return replace(check, sentence=f"{check.sentence} {STOPPED_ON_THESE}")


def _adjusted(checks: tuple[Check, ...]) -> tuple[float | None, ...]:
    made = {i: check.found.p_value for i, check in enumerate(checks) if check.found is not None}
    by_check = dict(zip(made, holm(list(made.values())), strict=True))
    return tuple(by_check.get(i) for i in range(len(checks)))


def _summary(checks: tuple[Check, ...], adjusted: tuple[float | None, ...]) -> str:
    p_values = [check.found.p_value for check in checks if check.found is not None]
    if not p_values:
        return "No check could be made yet."
    below = sum(p_value < UNUSUAL for p_value in p_values)
    smallest = min(value for value in adjusted if value is not None)
    return (
        f"{plural(len(p_values), 'check')} made, {below} with a p-value below 0.05. When all suppositions hold, about "
        "one p-value in twenty is below 0.05 by chance; allowing for their number, the smallest is "
        f"{smallest:.2g} (Holm)."
    )


def _notes(state: State, stretch: Seen) -> tuple[str, ...]:
    notes = [NO_EFFECT]
    if stretch.overrun:
        notes.append(
            f"The {stretch.overrun} observations after the decision are looked at as well: they come from the same "
            "stream, and without them it would be more selected by the stopping."
        )
    reach = stretch.stretch
    if reach.last - reach.first + 1 < state.sequence:
        notes.append(
            f"Observations {reach.first} to {reach.last} of {state.sequence} are looked at, "
            f"for there are more than {MOST_OBSERVATIONS}."
        )
    if stretch.count:
        notes.append(WHEN_STOPPED if state.is_decided else WHILE_RUNNING)
    return tuple(notes)


def _last_counted(state: State) -> int:
    return state.sequence if state.decided is None else state.decided.sequence
