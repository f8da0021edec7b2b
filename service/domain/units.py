"""
Units: a serial number may be counted once in a test. Pure.

Blanks around a serial number come from forms and scanners and do not make it another unit.
"""

from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from typing import Any

from service.domain.errors import Fault, RepeatedUnits

MAXIMAL_FAULTS = 100

# Those of some units that a test has already, with their sequences.
FindKnown = Callable[[Sequence[str]], Mapping[str, int]]


def new_units(document: Mapping[str, Any], first_sequence: int, find_known: FindKnown) -> dict[str, int]:
    """
    The units of a submission with their sequences, none of them counted before.

    Raises:
        RepeatedUnits: A unit was counted already or stands twice in the submission; the faults name each place.
    """
    positions = _positions_of_units(document)
    counts = Counter(unit for unit, _ in positions)
    known = find_known(list(counts)) if counts else {}
    faults = [
        Fault(f"/observations/{position}/unit", f"unit {unit!r} {_reason(unit, known)}")
        for unit, position in positions
        if unit in known or counts[unit] > 1
    ]
    if faults:
        raise RepeatedUnits(faults[:MAXIMAL_FAULTS])
    return {unit: first_sequence + position for unit, position in positions}


def units_of(document: Mapping[str, Any], first_sequence: int) -> dict[str, int]:
    """The units of a submission with their sequences, as they were counted."""
    return {unit: first_sequence + position for unit, position in _positions_of_units(document)}


def _positions_of_units(document: Mapping[str, Any]) -> list[tuple[str, int]]:
    observations = document.get("observations", ())
    return [(observation["unit"].strip(), i) for i, observation in enumerate(observations) if "unit" in observation]


def _reason(unit: str, known: Mapping[str, int]) -> str:
    return f"was reported as observation {known[unit]}" if unit in known else "stands more than once in this submission"
