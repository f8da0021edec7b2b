"""
Corrections: the observations of a log as they count now, and the log run again. Pure.

What was posted is never touched. A correction voids or replaces one observation; the last one made of an observation is
in force. `pieces` is the one place that puts corrections into effect: whoever reads a log reads what it yields.
"""

import json
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass, replace
from datetime import datetime
from enum import StrEnum
from typing import Any, NamedTuple

from service.domain.chain import Head
from service.domain.errors import Fault, InvalidCorrection, InvalidObservations
from service.domain.families import Family
from service.domain.observing import observe
from service.domain.procedure import Procedure
from service.domain.state import Decision, State

# Members of an observation that a replacement keeps where it says nothing of them.
KEPT = ("unit", "observed_at")


class Action(StrEnum):
    """What a correction does to an observation."""

    VOID = "void"
    REPLACE = "replace"


@dataclass(frozen=True)
class Correction:
    """
    One correction, and the test right after it.

    Attributes:
        observation: The sequence of the observation.
        replacement: What counts in its place, JSON of one observation; None where it was voided.
        before: The decision before it.
        version: The version of the test after it.
        number, link: Its place in the history of the test.
    """

    test: str
    observation: int
    action: Action
    replacement: str | None
    reason: str
    body_digest: str
    received_at: datetime
    actor: str
    idempotency_key: str | None
    version: int
    before: Decision
    state: State
    request_id: str | None = None
    number: int = 0
    link: str = ""

    @property
    def head(self) -> Head:
        """The end of the test's history while this is its last act."""
        return Head(self.number, self.link)


Corrections = Mapping[int, Correction]


class Piece(NamedTuple):
    """Observations that follow each other without a gap, as they count now; what is voided is a gap between two."""

    first_sequence: int
    body: str
    received_at: datetime


# The pieces that hold the observations after one and up to another.
ReadPieces = Callable[[int, int], Iterable[Piece]]


def pieces(first_sequence: int, body: str, received_at: datetime, corrections: Corrections) -> Iterator[Piece]:
    """
    One submission as it counts now: as posted where no correction is in force, else cut around each of them.

    Args:
        first_sequence: Of its observations.
        body: As posted.
        received_at: When it was received.
        corrections: Those in force, by the observation that they correct; of others too.
    """
    if not corrections:
        yield Piece(first_sequence, body, received_at)
        return
    document = json.loads(body)
    form = "values" if "values" in document else "observations"
    items, begin = document[form], 0
    for i in sorted(at - first_sequence for at in corrections if 0 <= at - first_sequence < len(items)):
        if begin < i:
            yield Piece(first_sequence + begin, json.dumps({form: items[begin:i]}), received_at)
        replacement = corrections[first_sequence + i].replacement
        if replacement is not None:
            yield Piece(first_sequence + i, f'{{"observations": [{replacement}]}}', received_at)
        begin = i + 1
    if begin < len(items):
        whole = body if begin == 0 else json.dumps({form: items[begin:]})
        yield Piece(first_sequence + begin, whole, received_at)


def replayed(procedure: Procedure, state: State, read: ReadPieces, through: int) -> State:
    """
    The log run again from this state to the observation `through`, by the function that runs it live.

    Raises:
        InvalidCorrection: What is left cannot be right; a table's row may be passed over, say.
    """
    for piece in read(state.sequence, through):
        state = _past_voided(state, piece.first_sequence - 1)
        try:
            state = observe(procedure, state, json.loads(piece.body), piece.received_at)
        except InvalidObservations as error:
            rules = "; ".join(fault.detail for fault in error.faults)
            rule = f"the log, corrected so, cannot be run from observation {piece.first_sequence} on: {rules}"
            raise InvalidCorrection([Fault("", rule)]) from error
    return _past_voided(state, through)


def settled(before: State, after: State, at: datetime) -> State:
    """
    The state after a correction: a decision that it brings about is of its moment, one that it leaves alone stays.

    Args:
        before: The state that stood.
        after: The log run again.
        at: When the correction was received.
    """
    if after.decided is None:
        return after
    is_as_before = before.decided is not None and (before.decision, before.decided.sequence) == (
        after.decision,
        after.decided.sequence,
    )
    moment = before.decided.at if is_as_before and before.decided else at
    return replace(after, decided=replace(after.decided, at=moment))


def objects_of(family: Family, document: Mapping[str, Any]) -> Iterable[Mapping[str, Any]]:
    """Every observation of a submission as an object, whichever form it was posted in."""
    if "observations" in document:
        return document["observations"]  # type: ignore[no-any-return]
    extra = {name: bool(value) for name, value in family.in_values.items()}
    return ({family.value_field: value, **extra} for value in document["values"])


def in_force(posted: Mapping[str, Any], correction: Correction | None) -> Mapping[str, Any] | None:
    """The observation that counts now; None where it is voided."""
    if correction is None:
        return posted
    return None if correction.replacement is None else json.loads(correction.replacement)


def replacement_of(
    procedure: Procedure, posted: Mapping[str, Any], now: Mapping[str, Any] | None, given: Mapping[str, Any]
) -> Mapping[str, Any]:
    """
    What is to count in an observation's place: what is given, with its unit and its moment where that is silent.

    Raises:
        InvalidCorrection: It cannot be right.
    """
    base = posted if now is None else now
    replacement = {**{name: base[name] for name in KEPT if name in base}, **given}
    try:
        procedure.family.read({"observations": [replacement]}, procedure.known)
    except InvalidObservations as error:
        faults = [Fault(f.pointer.replace("/observations/0", "/observation", 1), f.detail) for f in error.faults]
        raise InvalidCorrection(faults) from error
    return replacement


def unit_in(observation: Mapping[str, Any] | None) -> str | None:
    """The unit that an observation counts."""
    unit = None if observation is None else observation.get("unit")
    return None if unit is None else unit.strip()


def _past_voided(state: State, sequence: int) -> State:
    """The state after the voided observations that lead up to this one."""
    gap = sequence - state.sequence
    return state if gap == 0 else replace(state, sequence=sequence, voided=state.voided + gap)
