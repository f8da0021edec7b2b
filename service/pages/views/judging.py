"""What candidates and stored plans promise: figures at their hypotheses, a curve, or why there are none."""

import json
import threading
from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import lru_cache
from typing import cast

from service.domain.characteristics import Point, Promise, common_grid, promise_of
from service.domain.checking import checked_content
from service.domain.errors import Fault, Invalid
from service.domain.plan import Content, canonical
from service.domain.procedure import Procedure, procedure_of_document
from service.domain.simulating import Question, question_of
from service.pages.views.candidates import Candidate

# Documents of plans that took long to check, kept for the next keystroke.
MOST_KEPT = 64

SLOW = (
    "The boundaries or figures of this plan take some seconds to compute, so they do not follow each keystroke: "
    "press Show."
)
SIMULATED = (
    "The figures of an invariant plan are simulated, which takes some seconds to a minute, and so are its calibrated "
    "boundaries. Press Simulate to begin."
)


@dataclass(frozen=True)
class Judged:
    """
    A plan with what it promises.

    Attributes:
        document: Canonical; None where the plan is faulty, or is not computed yet.
        ends: At its hypotheses.
        curve: Over a grid around them.
        question: What a simulation of it would be asked; None where its figures are exact.
        trouble: Why there are no figures, for people; empty where there are.
        needs_simulating, is_running: What may be done about it.
    """

    letter: str
    name: str
    document: str | None = None
    ends: tuple[Point, ...] = ()
    curve: Promise | None = None
    question: Question | None = None
    trouble: str = ""
    needs_simulating: bool = False
    is_running: bool = False

    @property
    def procedure(self) -> Procedure:
        """Compiled; only where there is a document."""
        if self.document is None:  # not reached: asked of plans without faults
            raise ValueError(self.name)
        return procedure_of_document(self.document)

    @property
    def content(self) -> Content:
        """Of the document."""
        return cast("Content", json.loads(self.document or "{}"))

    @property
    def title(self) -> str:
        """Its name in drawings and tables."""
        return self.name or self.letter.upper()


class _Kept:
    """Checked documents by what was stated; the oldest go first."""

    def __init__(self) -> None:
        self._documents: dict[str, str] = {}
        self._lock = threading.Lock()

    def find(self, stated: str) -> str | None:
        with self._lock:
            return self._documents.get(stated)

    def keep(self, stated: str, document: str) -> None:
        with self._lock:
            self._documents[stated] = document
            while len(self._documents) > MOST_KEPT:
                del self._documents[next(iter(self._documents))]


@lru_cache(maxsize=1)
def _kept() -> _Kept:
    return _Kept()


def is_slow(content: Content) -> bool:
    """Whether checking or judging such a plan may take seconds."""
    return content.get("boundaries") == "calibrated" or content.get("statistic", "simple") in ("generalised", "mixture")


def is_simulated(content: Content) -> bool:
    """Whether its figures are simulated."""
    return content.get("statistic") == "invariant"


def checked(content: Content) -> str:
    """
    The canonical document of a content, computed once.

    Raises:
        Invalid: As for `checked_content`.
    """
    stated = canonical(content)
    document = _kept().find(stated)
    if document is None:
        document = checked_content(content)
        _kept().keep(stated, document)
    return document


def judged_candidates(
    candidates: Sequence[Candidate], *, may_take_long: bool, may_simulate: bool
) -> tuple[tuple[Candidate, ...], tuple[Judged, ...]]:
    """
    The candidates with what the domain finds wrong, and each with its exact figures, or with its question.

    Args:
        may_take_long: Whether whoever asks waits for an answer that takes seconds.
        may_simulate: Whether boundaries may be calibrated by simulation.
    """
    found: list[Candidate] = []
    judged: list[Judged] = []
    family = ""
    for candidate in candidates:
        checked_one, one = _checked_candidate(candidate, may_take_long=may_take_long, may_simulate=may_simulate)
        if one.document is not None:
            own = one.procedure.family.name
            family = family or own
            if own != family:
                fault = Fault("/family", f"must be that of the first candidate, {family}, to be compared with it")
                checked_one, one = checked_one.with_faults((fault,)), Judged(one.letter, one.name)
        found.append(checked_one)
        judged.append(one)
    return tuple(found), with_figures(judged)


def with_figures(judged: Sequence[Judged]) -> tuple[Judged, ...]:
    """The same with exact figures on a common grid, or with the reason why there are none."""
    exact = [each.document for each in judged if each.document is not None and _has_curve(each)]
    grid = common_grid(exact) if exact else ()
    return tuple(_with_figures(each, grid) for each in judged)


def judged_plan(name: str, document: str) -> Judged:
    """A stored plan."""
    return with_figures([_with_question(Judged("a", name, document))])[0]


def with_promise(judged: Judged, promise: Promise) -> Judged:
    """The same with what its simulation has found."""
    # The grid of a simulation holds both hypotheses but for rounding.
    ends = tuple(
        replace(min(promise.points, key=lambda point: abs(point.parameter - at)), parameter=at)
        for at in judged.procedure.hypotheses
    )
    return replace(judged, ends=ends, curve=promise, trouble="", needs_simulating=False)


def while_running(judged: Judged, words: str) -> Judged:
    """The same while its simulation runs."""
    return replace(judged, trouble=words, is_running=True, needs_simulating=False)


def without(judged: Judged, trouble: str) -> Judged:
    """The same without figures, and why."""
    return replace(judged, trouble=trouble, needs_simulating=False)


def _checked_candidate(candidate: Candidate, *, may_take_long: bool, may_simulate: bool) -> tuple[Candidate, Judged]:
    judged = Judged(candidate.letter, candidate.name)
    if candidate.faults:
        return candidate, judged
    content = candidate.content
    needs_simulating = is_simulated(content) and content.get("boundaries") == "calibrated"
    if _kept().find(canonical(content)) is None:
        if needs_simulating and not may_simulate:
            return candidate, replace(judged, trouble=SIMULATED, needs_simulating=True)
        if is_slow(content) and not may_take_long:
            return candidate, replace(judged, trouble=SLOW)
    try:
        document = checked(content)
    except Invalid as error:
        if error.faults:
            return candidate.with_faults(error.faults), judged
        return candidate, replace(judged, trouble=str(error))
    return candidate, _with_question(replace(judged, document=document))


def _with_question(judged: Judged) -> Judged:
    """An invariant plan with what its simulation would be asked."""
    if judged.document is None or not judged.procedure.family.is_invariant:
        return judged
    try:
        question = question_of(judged.document, (), None)
    except Invalid as error:
        return replace(judged, trouble=str(error))
    return replace(judged, question=question, trouble=SIMULATED, needs_simulating=True)


def _has_curve(judged: Judged) -> bool:
    procedure = judged.procedure
    family = procedure.family
    return family.has_model and not family.is_invariant and not procedure.may_go_on_for_ever


def _with_figures(judged: Judged, grid: tuple[float, ...]) -> Judged:
    if judged.document is None or judged.trouble:
        return judged
    try:
        ends = promise_of(judged.document, judged.procedure.hypotheses or grid)
        return replace(judged, ends=ends.points, curve=promise_of(judged.document, grid))
    except Invalid as error:
        return replace(judged, trouble=str(error))
