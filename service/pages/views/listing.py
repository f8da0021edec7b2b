"""The list of tests: filters out of an address, and rows with what each test says at a glance."""

from collections.abc import Mapping
from dataclasses import dataclass, replace
from urllib.parse import urlencode

from service.domain.outlook import ways_of
from service.domain.plan import Plan
from service.domain.procedure import procedure_of
from service.domain.sequential_test import SequentialTest, Stage, SubjectKind
from service.domain.state import Decision
from service.pages.charts.glimpse import glimpse
from service.pages.views.position import position_of
from service.storage.reader import Count, Reader, TestFilters

ROWS = 50


@dataclass(frozen=True)
class Filters:
    """What the list is narrowed by, as the address says it; empty where it does not."""

    stage: str = ""
    words: str = ""
    decision: str = ""
    kind: str = ""
    plan: str = ""
    label: str = ""

    def narrowed(self) -> TestFilters:
        """For the reader; what cannot be is left out."""
        name, _, value = self.label.partition(":")
        return TestFilters(
            stage=Stage(self.stage) if self.stage in set(Stage) else None,
            words=self.words or None,
            decision=Decision(self.decision) if self.decision in set(Decision) else None,
            kind=SubjectKind(self.kind) if self.kind in set(SubjectKind) else None,
            plan=self.plan or None,
            labels=((name.strip(), value.strip()),) if self.label else (),
        )

    def address(self, **changed: str | int) -> str:
        """The list with other filters."""
        values = {**self.__dict__, **changed}
        said = urlencode({name: value for name, value in values.items() if value != ""})
        return f"/?{said}" if said else "/"

    @property
    def are_any(self) -> bool:
        """Whether the list is narrowed by more than the stage."""
        return replace(self, stage="") != Filters()


@dataclass(frozen=True)
class Row:
    """One test in the list."""

    test: SequentialTest
    picture: str
    needed: str


@dataclass(frozen=True)
class Listing:
    """
    A page of the list.

    Attributes:
        further: The address of the next page, None on the last.
        counts: How many tests there are of each stage.
    """

    rows: tuple[Row, ...]
    further: str | None
    counts: Mapping[str, int]


def listing_of(reader: Reader, filters: Filters, before: int | None) -> Listing:
    """The tests that changed last, among those that match."""
    found = reader.recent(filters.narrowed(), before, ROWS + 1)
    shown = found[:ROWS]
    plans = {name: reader.plan(name) for name in {recent.test.plan for recent in shown}}
    rows = tuple(_row(recent.test, plan) for recent in shown if (plan := plans[recent.test.plan]) is not None)
    further = filters.address(before=shown[-1].number) if len(found) > ROWS else None
    return Listing(rows, further, stages(reader.counts()))


def _row(test: SequentialTest, plan: Plan) -> Row:
    procedure = procedure_of(plan)
    return Row(test, glimpse(position_of(procedure, test.state)), _needed(test, plan))


def _needed(test: SequentialTest, plan: Plan) -> str:
    """The shortest way to acceptance, or else to rejection."""
    if test.stage is not Stage.RUNNING:
        return ""
    ways = ways_of(procedure_of(plan), test.state)
    if ways.accept is not None:
        return f"{ways.accept.words} to accept"
    return f"{ways.reject.words} to reject" if ways.reject is not None else ""


def stages(counts: list[Count]) -> dict[str, int]:
    """How many tests are at each stage."""
    found = dict.fromkeys((stage.value for stage in Stage), 0)
    for count in counts:
        goes_on = Stage.RUNNING if count.decision == Decision.CONTINUE else Stage.WAITING
        found[Stage.CLOSED if count.status == "closed" else goes_on] += count.tests
    return found
