"""The log of a test, one observation at a time: what was posted, by whom, and whether it counted."""

import json
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from service.domain.correcting import Correction, Corrections, in_force, objects_of
from service.domain.families import Family
from service.domain.sequential_test import SequentialTest, Submission


@dataclass(frozen=True)
class LoggedObservation:
    """
    One observation as it was posted, defaults filled in.

    Attributes:
        sequence: Its number within the test, from 1.
        fields: The family's own fields by name.
        unit: Serial number of the unit, where one was given.
        observed_at: When it was observed, as the caller wrote it.
        is_counted: False for overrun, and for what is voided.
        correction: The correction in force, with what counts in its place; None for what counts as posted.
    """

    sequence: int
    fields: Mapping[str, float | bool | str]
    unit: str | None
    observed_at: str | None
    received_at: datetime
    actor: str
    is_counted: bool
    correction: Correction | None = None


def expanded(
    family: Family, test: SequentialTest, submissions: Iterable[tuple[Submission, Corrections]]
) -> Iterator[LoggedObservation]:
    """Every observation of these submissions in order, as posted, with the corrections in force beside them."""
    last_counted = test.state.decided.sequence if test.state.decided else test.state.sequence
    for submission, corrections in submissions:
        for position, posted in enumerate(objects_of(family, json.loads(submission.body))):
            sequence = submission.first_sequence + position
            correction = corrections.get(sequence)
            yield LoggedObservation(
                sequence=sequence,
                fields=fields_of(family, posted),
                unit=posted.get("unit"),
                observed_at=posted.get("observed_at"),
                received_at=submission.received_at,
                actor=submission.actor,
                is_counted=sequence <= last_counted and in_force(posted, correction) is not None,
                correction=correction,
            )


def fields_of(family: Family, observation: Mapping[str, Any]) -> Mapping[str, float | bool | str]:
    """The family's own fields of an observation, defaults filled in."""
    return {name: observation.get(name, family.optional.get(name, 0.0)) for name in family.fields}
