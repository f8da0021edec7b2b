"""A log read many observations at a time: small submissions are put together, for reading each alone costs far more."""

import json
from collections.abc import Iterable, Iterator, Sequence
from itertools import chain, groupby
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from service.domain.families.base import Document

# Bodies are decoded together up to so many characters; a single one may be longer.
MOST_CHARACTERS = 200_000

Bodies = Iterable[tuple[int, str]]


class Gathered(NamedTuple):
    """Observations in order as one submission would carry them, and the sequence of each; gaps may lie between."""

    sequences: NDArray[np.int64]
    document: Document


def gathered(bodies: Bodies) -> Iterator[Gathered]:
    """
    Submissions of one form that follow each other, put together; what they say stays the same.

    Args:
        bodies: JSON texts of sound form as they count now and in order, each with its first sequence.
    """
    for portion in _portions(bodies):
        documents = json.loads(f"[{','.join(body for _, body in portion)}]")
        firsts = (first for first, _ in portion)
        for form, some in groupby(zip(firsts, documents, strict=True), key=lambda each: form_of(each[1])):
            yield _together(form, list(some))


def alone(document: Document) -> Gathered:
    """One submission by itself."""
    return Gathered(np.arange(1, len(document[form_of(document)]) + 1), document)


def form_of(document: Document) -> str:
    """The member that holds the observations."""
    return "values" if "values" in document else "observations"


def _portions(bodies: Bodies) -> Iterator[list[tuple[int, str]]]:
    portion, characters = list[tuple[int, str]](), 0
    for first, body in bodies:
        portion.append((first, body))
        characters += len(body)
        if characters >= MOST_CHARACTERS:
            yield portion
            portion, characters = [], 0
    if portion:
        yield portion


def _together(form: str, documents: Sequence[tuple[int, Document]]) -> Gathered:
    lists = [document[form] for _, document in documents]
    observations, counts = list(chain.from_iterable(lists)), np.array([len(each) for each in lists])
    begins = np.array([first for first, _ in documents], np.int64) - (np.cumsum(counts) - counts)
    return Gathered(np.repeat(begins, counts) + np.arange(len(observations)), {form: observations})
