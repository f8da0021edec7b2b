"""What the road tells whoever counts."""

from collections.abc import Sequence
from typing import Protocol

from service.ingest.commands import Outcome


class Measures(Protocol):
    """Told of what happens on the road, from the event loop and from the writer thread."""

    def queued(self) -> None:
        """A command waits to be written."""

    def answered(self) -> None:
        """A command that waited has its answer."""

    def grouped(self, outcomes: Sequence[Outcome | BaseException], seconds: float) -> None:
        """A transaction was committed, with what came of each of its commands."""

    def failed(self) -> None:
        """A transaction did not go through."""


class Unmeasured:
    """Counts nothing."""

    def queued(self) -> None:
        """Nothing."""

    def answered(self) -> None:
        """Nothing."""

    def grouped(self, outcomes: Sequence[Outcome | BaseException], seconds: float) -> None:
        """Nothing."""

    def failed(self) -> None:
        """Nothing."""
