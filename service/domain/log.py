"""The log of a test, one observation at a time: what was posted, by whom, and whether it counted."""

import json
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from datetime import datetime
from typing import Any

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
        is_counted: False for overrun.
    """

    sequence: int
    fields: Mapping[str, float | bool | str]
    unit: str | None
    observed_at: str | None
    received_at: datetime
    actor: str
    is_counted: bool


def expanded(family: Family, test: SequentialTest, submissions: Iterable[Submission]) -> Iterator[LoggedObservation]:
    """Every observation of these submissions in order."""
    last_counted = test.state.decided.sequence if test.state.decided else test.state.sequence
    for submission in submissions:
        for position, posted in enumerate(_objects(family, submission.body)):
            sequence = submission.first_sequence + position
            yield LoggedObservation(
                sequence=sequence,
                fields={name: posted.get(name, family.optional.get(name, 0.0)) for name in family.fields},
                unit=posted.get("unit"),
                observed_at=posted.get("observed_at"),
                received_at=submission.received_at,
                actor=submission.actor,
                is_counted=sequence <= last_counted,
            )


def document_of(submission: Submission) -> Mapping[str, Any]:
    """The submission as posted, decoded."""
    document: Mapping[str, Any] = json.loads(submission.body)
    return document


def _objects(family: Family, body: str) -> Iterable[Mapping[str, Any]]:
    """Every observation as an object, whichever form it was posted in."""
    document = json.loads(body)
    if "observations" in document:
        return document["observations"]  # type: ignore[no-any-return]
    extra = {name: bool(value) for name, value in family.in_values.items()}
    return ({family.value_field: value, **extra} for value in document["values"])
