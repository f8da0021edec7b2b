"""
The log and the history of a test, in order and some rows at a time, on whatever connection the caller reads.

Give as end what a test had when it was read before, for more may have been written since.
"""

import heapq
import json
from bisect import bisect_left, bisect_right
from collections.abc import Callable, Iterator, Mapping
from itertools import islice
from typing import Any

from sqlalchemy import RowMapping, Select, func, literal, or_, select

from service.domain.chain import Entry
from service.domain.correcting import Correction, Corrections, Piece, in_force, objects_of, pieces
from service.domain.families import Family
from service.domain.history import corrected, submitted
from service.domain.sequential_test import SequentialTest, Submission
from service.domain.state import State
from service.storage import rows, tables

# A page of the log ends with whichever comes first; a single submission may be larger.
PAGE_SUBMISSIONS = 5000
PAGE_CHARACTERS = 4_000_000

# Acts that are read at once.
PAGE_ACTS = 200

# No test comes so far.
NO_END = 2**62

Ask = Callable[[Select[Any]], list[RowMapping]]

_WITHOUT_BODY = select(*(column for column in tables.submissions.c if column.name != "body"), literal("").label("body"))


class InForce:
    """Corrections by the observation that they correct, to be asked for those of one submission."""

    def __init__(self, corrections: Corrections) -> None:
        self._corrections, self._observations = corrections, sorted(corrections)

    def within(self, first: int, last: int) -> Corrections:
        """Those of the observations from `first` to `last`."""
        some = self._observations[bisect_left(self._observations, first) : bisect_right(self._observations, last)]
        return {observation: self._corrections[observation] for observation in some}


class Log:
    """
    Reads through `ask`, which answers one question with all its rows.

    Each page is a question of its own, so that no transaction needs to stay open for a reader that takes its time.
    """

    def __init__(self, ask: Ask) -> None:
        self._ask = ask

    def submissions(self, test: str, after: int = 0, through: int = NO_END) -> Iterator[Submission]:
        """The submissions that hold the observations of a test after `after` and up to `through`."""
        for row in self._pages(select(tables.submissions), test, after, through):
            yield rows.submission_of(row)

    def corrected(self, test: SequentialTest, after: int = 0) -> Iterator[tuple[Submission, Corrections]]:
        """What was posted after the observation `after`, each submission with the corrections in force within it."""
        made = self._in_force(test, after, test.state.sequence, test.history.length)
        for submission in self.submissions(test.key, after, test.state.sequence):
            yield submission, made.within(submission.first_sequence, submission.last_sequence)

    def pieces(
        self, test: SequentialTest, after: int, through: int, new: Corrections | None = None, before: int | None = None
    ) -> Iterator[Piece]:
        """
        The observations after `after` and up to `through` as they count now; voided ones are gaps.

        A piece may begin before, where a submission does.

        Args:
            test: As it was read.
            after, through: Sequences.
            new: A correction that is about to be made.
            before: Leave out corrections from this number in the history on; None for none.
        """
        log = tables.submissions.c
        limit = test.history.length if before is None else before - 1
        found = select(log.first_sequence, log.last_sequence, log.body, log.received_at)
        made = self._in_force(test, after, through, limit, new)
        for row in self._pages(found, test.key, after, through):
            within = made.within(row["first_sequence"], row["last_sequence"])
            yield from pieces(row["first_sequence"], row["body"], row["received_at"], within)

    def bodies(self, test: SequentialTest, after: int, through: int) -> Iterator[tuple[int, str]]:
        """The same with the first sequences alone; quicker where nothing is corrected."""
        if test.corrections:
            yield from ((piece.first_sequence, piece.body) for piece in self.pieces(test, after, through))
            return
        log = tables.submissions.c
        for row in self._pages(select(log.first_sequence, log.last_sequence, log.body), test.key, after, through):
            yield row["first_sequence"], row["body"]

    def first_corrected(self, test: str) -> int | None:
        """The first observation that was ever corrected."""
        made = tables.corrections.c
        (row,) = self._ask(select(func.min(made.observation).label("first")).where(made.test == test))
        return row["first"]  # type: ignore[no-any-return]

    def observation(
        self, test: SequentialTest, family: Family, sequence: int
    ) -> tuple[Mapping[str, Any], Mapping[str, Any] | None]:
        """One observation of the test as it was posted, and as it counts now; None where it is voided."""
        submission, corrections = next(self.corrected(test, sequence - 1))
        objects = objects_of(family, json.loads(submission.body))
        posted = next(islice(objects, sequence - submission.first_sequence, None))
        return posted, in_force(posted, corrections.get(sequence))

    def corrections(self, test: SequentialTest) -> list[Correction]:
        """Every correction ever made of a test as it was read, in order."""
        made = self._all_corrections(test.key, 0) if test.corrections else iter(())
        return [each for each in made if each.number <= test.history.length]

    def state_before(self, test: str, observation: int) -> State:
        """The state after the last submission that ends before an observation; no earlier one may be corrected."""
        log = tables.submissions.c
        found = select(tables.submissions).where(log.test == test, log.first_sequence < observation)
        for row in self._ask(found.order_by(log.first_sequence.desc()).limit(2)):
            if row["last_sequence"] < observation:
                return rows.state_of(row)
        return State()

    def acts(self, chain: str, after: int = 0, sequence: int = 0, through: int = NO_END) -> Iterator[Entry]:
        """
        The history of a test, or of the service, after the entry `after` and up to the entry `through`.

        Args:
            chain: The key of the test, or `chain.SERVICE`.
            after: A number in the history.
            sequence: How many observations the test had after that entry.
            through: The last number.
        """
        sources = [self._other_acts(chain, after)]
        if chain:
            sources.append(submitted(entry) for entry in self._submissions_without_bodies(chain, sequence))
            sources.append(corrected(correction) for correction in self._all_corrections(chain, after))
        for entry in heapq.merge(*sources, key=lambda entry: entry.number):
            if entry.number > through:
                return
            yield entry

    def records(self, test: SequentialTest) -> Iterator[Submission | Correction | Entry]:
        """The whole history of a test as it was read, submissions with what was posted."""
        sources: list[Iterator[Submission | Correction | Entry]] = [
            self.submissions(test.key, 0, test.state.sequence),
            self._all_corrections(test.key, 0),
            self._other_acts(test.key, 0),
        ]
        for record in heapq.merge(*sources, key=lambda record: record.number):
            if record.number > test.history.length:
                return
            yield record

    def _submissions_without_bodies(self, test: str, after: int) -> Iterator[Submission]:
        log = tables.submissions.c
        while True:
            found = _WITHOUT_BODY.where(log.test == test, log.first_sequence > after)
            page = self._ask(found.order_by(log.first_sequence).limit(PAGE_ACTS))
            yield from map(rows.submission_of, page)
            if len(page) < PAGE_ACTS:
                return
            after = page[-1]["first_sequence"]

    def _in_force(
        self, test: SequentialTest, after: int, through: int, limit: int, new: Corrections | None = None
    ) -> "InForce":
        """
        The corrections in force of the submissions that hold these observations, up to this number in the history.

        They are read at once: people make them one by one.
        """
        made, found = tables.corrections.c, dict(new or {})
        if test.corrections:
            first = self._first_around(test.key, after)
            asked = select(tables.corrections).where(
                made.test == test.key, made.observation.between(first, through), made.number <= limit
            )
            rows_found = self._ask(asked.order_by(made.number))
            found = {row["observation"]: rows.correction_of(row) for row in rows_found} | found
        return InForce(found)

    def _all_corrections(self, test: str, after: int) -> Iterator[Correction]:
        made = tables.corrections.c
        while True:
            found = select(tables.corrections).where(made.test == test, made.number > after)
            page = self._ask(found.order_by(made.number).limit(PAGE_ACTS))
            yield from map(rows.correction_of, page)
            if len(page) < PAGE_ACTS:
                return
            after = page[-1]["number"]

    def _other_acts(self, chain: str, after: int) -> Iterator[Entry]:
        history = tables.history.c
        while True:
            found = select(tables.history).where(history.chain == chain, history.number > after)
            page = self._ask(found.order_by(history.number).limit(PAGE_ACTS))
            yield from map(rows.entry_of, page)
            if len(page) < PAGE_ACTS:
                return
            after = page[-1]["number"]

    def _pages(self, found: Select[Any], test: str, after: int, through: int) -> Iterator[RowMapping]:
        log = tables.submissions.c
        first = self._first_around(test, after)
        while (last := self._last_of_page(test, first, through)) is not None:
            page = found.where(log.test == test, log.first_sequence.between(first, last))
            yield from (row for row in self._ask(page.order_by(log.first_sequence)) if row["last_sequence"] > after)
            first = last + 1

    def _first_around(self, test: str, after: int) -> int:
        """The first sequence of the submission that holds the observation after `after`, found by the index alone."""
        log = tables.submissions.c
        first = func.max(log.first_sequence).label("first")
        (row,) = self._ask(select(first).where(log.test == test, log.first_sequence <= after + 1))
        return row["first"] or 1

    def _last_of_page(self, test: str, first: int, through: int) -> int | None:
        """The last sequence of the next submissions that are together small enough to hold; None without any."""
        log = tables.submissions.c
        some = select(log.first_sequence, log.last_sequence, func.length(log.body).label("weight"))
        some = some.where(log.test == test, log.first_sequence.between(first, through))
        page = some.order_by(log.first_sequence).limit(PAGE_SUBMISSIONS).subquery().c
        total = func.sum(page.weight).over(order_by=page.first_sequence)
        weighed = select(page.first_sequence, page.last_sequence, total.label("total")).subquery().c
        holds = or_(weighed.total <= PAGE_CHARACTERS, weighed.first_sequence == first)
        (row,) = self._ask(select(func.max(weighed.last_sequence).label("last")).where(holds))
        return row["last"]  # type: ignore[no-any-return]
