"""Submissions as the log gives them: what counts of each, with the sequence of its first observation."""

from collections.abc import Iterable, Iterator, Mapping
from typing import Any


def numbered(documents: Iterable[Mapping[str, Any]]) -> Iterator[tuple[int, Mapping[str, Any]]]:
    """Number the observations of submissions that follow each other."""
    first = 1
    for document in documents:
        yield first, document
        first += len(document["values"] if "values" in document else document["observations"])
