"""
The log and the history of a test, in order and some rows at a time, on whatever connection the caller reads.

Give as end what a test had when it was read before, for more may have been written since.
"""

import heapq
from collections.abc import Callable, Iterator
from typing import Any

from sqlalchemy import RowMapping, Select, func, literal, select

from service.domain.chain import Entry
from service.domain.history import submitted
from service.domain.sequential_test import SequentialTest, Submission
from service.storage import rows, tables

# A page of the log ends with whichever comes first; a single submission may be larger.
PAGE_SUBMISSIONS = 200
PAGE_CHARACTERS = 4_000_000

# Acts that are read at once.
PAGE_ACTS = 200

# No test comes so far.
NO_END = 2**62

Ask = Callable[[Select[Any]], list[RowMapping]]

_WITHOUT_BODY = select(*(column for column in tables.submissions.c if column.name != "body"), literal("").label("body"))


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

    def bodies(self, test: str, after: int = 0, through: int = NO_END) -> Iterator[tuple[int, str]]:
        """The first sequence and the body of the same submissions, for work that needs no more of them."""
        log = tables.submissions.c
        for row in self._pages(select(log.first_sequence, log.last_sequence, log.body), test, after, through):
            yield row["first_sequence"], row["body"]

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
        for entry in heapq.merge(*sources, key=lambda entry: entry.number):
            if entry.number > through:
                return
            yield entry

    def records(self, test: SequentialTest) -> Iterator[Submission | Entry]:
        """The whole history of a test as it was read, submissions with what was posted."""
        submissions: Iterator[Submission | Entry] = self.submissions(test.key, 0, test.state.sequence)
        for record in heapq.merge(submissions, self._other_acts(test.key, 0), key=lambda record: record.number):
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
        weighed = select(log.last_sequence, func.length(log.body).label("weight"))
        within = weighed.where(log.test == test, log.first_sequence.between(first, through))
        last, total = None, 0
        for row in self._ask(within.order_by(log.first_sequence).limit(PAGE_SUBMISSIONS)):
            total += row["weight"]
            if last is not None and total > PAGE_CHARACTERS:
                break
            last = row["last_sequence"]
        return last
