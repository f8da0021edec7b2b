"""Courses that tests of a plan may take, drawn at random for people to look at. Pure: the generator is an argument."""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from service.domain.families import Increments
from service.domain.path import Path, begun, followed
from service.domain.procedure import Procedure
from service.domain.sampling import sampled
from service.domain.state import Decision

# Observations drawn at first, and those of a course that is not followed any further.
FIRST_PIECE, MOST_OBSERVATIONS = 64, 16_384
# Points that are kept of a course.
POINTS = 200


@dataclass(frozen=True)
class Course:
    """
    One course under a true parameter.

    Attributes:
        decision: What it came to; continue where it was not followed to its end.
    """

    parameter: float
    path: Path
    decision: Decision


def courses_of(procedure: Procedure, parameter: float, source: np.random.Generator, number: int) -> tuple[Course, ...]:
    """
    So many independent courses, each through the same steps as the observations of a test.

    Args:
        parameter: The true one.
        source: What they are drawn from; in the same state it gives the same courses.

    Raises:
        InvalidQuestion: The family has no model, or its observations would be too large.
    """
    return tuple(_course(procedure, parameter, source) for _ in range(number))


def _course(procedure: Procedure, parameter: float, source: np.random.Generator) -> Course:
    walked = followed(procedure, begun(procedure), _drawn(procedure, parameter, source), POINTS)
    return Course(parameter, walked.path, walked.state.decision)


def _drawn(
    procedure: Procedure, parameter: float, source: np.random.Generator
) -> Iterator[tuple[NDArray[np.int64], Increments]]:
    """Observations with their sequences, as many again each time, while they are asked for."""
    drawn, count = 0, FIRST_PIECE
    while drawn < MOST_OBSERVATIONS:
        yield np.arange(drawn + 1, drawn + count + 1), sampled(procedure, parameter, source, count)
        drawn += count
        count = drawn
