"""What the page for designing shows, out of its address."""

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

from service.domain.designing import Suggestion, suggested_truncation
from service.domain.plan import Plan
from service.domain.simulating import LARGEST_SEED
from service.pages.views.candidates import (
    LETTERS,
    Candidate,
    address_of,
    candidate_from,
    candidates_of,
    number_in,
    number_text,
    whole_in,
)
from service.pages.views.picture import View
from service.pages.views.showing import view_in

DESIGN = "/design"
SEED, INFLATION = "1", "0.05"
# What a button asks for before its letter.
ADD, REMOVE, SAVE, TRUNCATE, SIMULATE = "add", "remove-", "save-", "truncate-", "simulate"
SHARE_FAULT = "must lie above 0 and at most 1"


@dataclass(frozen=True)
class Design:
    """
    What an address asks for.

    Attributes:
        seed_text, inflation_text: As typed.
        seed: Of the courses that are drawn; None for none.
        faults: Of the fields that belong to no candidate, by their names.
    """

    candidates: tuple[Candidate, ...]
    view: View
    seed_text: str
    seed: int | None
    inflation_text: str
    faults: Mapping[str, str]

    def address(self, path: str = DESIGN, **others: str) -> str:
        """The same in as few words as will do."""
        said = {"seed": self.seed_text if self.seed_text != SEED else "", "view": self.view}
        if not self.seed_text:
            said["seed"] = "none"
        if self.view is View.COUNT:
            said["view"] = ""
        if self.inflation_text != INFLATION:
            said["inflation"] = self.inflation_text
        return address_of(path, self.candidates, **{**said, **others})

    @property
    def has_room(self) -> bool:
        """Whether another candidate can be laid beside these."""
        return len(self.candidates) < len(LETTERS)

    def named(self, letter: str) -> Candidate | None:
        """The candidate of a letter."""
        return next((candidate for candidate in self.candidates if candidate.letter == letter), None)

    def with_another(self) -> "Design":
        """With one more, which begins as the last."""
        free = next((letter for letter in LETTERS if self.named(letter) is None), None)
        if free is None:
            return self
        another = replace(self.candidates[-1], letter=free, name="")
        return replace(self, candidates=tuple(sorted((*self.candidates, another), key=lambda each: each.letter)))

    def without(self, letter: str) -> "Design":
        """Without one of them, if another is left."""
        left = tuple(candidate for candidate in self.candidates if candidate.letter != letter)
        return replace(self, candidates=left) if left else self

    def truncated(self, letter: str, suggestion: Suggestion) -> "Design":
        """With a truncation in one of them, and the calibrated boundaries that belong to it."""
        at: Any = suggestion.at if suggestion.axis == "exposure" else int(suggestion.at)
        changed = tuple(
            candidate_from(
                letter,
                candidate.name,
                {**candidate.content, "boundaries": "calibrated", "truncation": {suggestion.axis: at}},
            )
            if candidate.letter == letter
            else candidate
            for candidate in self.candidates
        )
        return replace(self, candidates=changed)


def design_in(query: Mapping[str, str], plan: Plan | None = None) -> Design:
    """The design that an address holds, or one that starts from a stored plan."""
    candidates = candidates_of(query)
    if plan is not None:
        candidates = (candidate_from(LETTERS[0], plan.name, plan.content),)
    faults: dict[str, str] = {}
    seed_text = "" if query.get("seed") == "none" else query.get("seed", SEED).strip()
    inflation = query.get("inflation", INFLATION).strip()
    return Design(candidates, view_in(query.get("view", "")), seed_text, _seed(seed_text, faults), inflation, faults)


def suggestion_for(design: Design, candidate: Candidate) -> Suggestion:
    """
    A truncation for one of the candidates.

    Raises:
        ValueError: The share by which tests may become longer is no number.
        Invalid: As for `suggested_truncation`.
    """
    inflation = number_in(design.inflation_text)
    if not 0.0 < inflation <= 1.0:
        raise ValueError(f"{SHARE_FAULT}; received {number_text(inflation)}")
    return suggested_truncation(candidate.content, inflation)


def _seed(text: str, faults: dict[str, str]) -> int | None:
    if not text:
        return None
    try:
        seed = whole_in(text)
    except ValueError as error:
        faults["seed"] = str(error)
        return None
    if not 0 <= seed <= LARGEST_SEED:
        faults["seed"] = f"must be a whole number from 0 to 2**53; received {seed}"
        return None
    return seed
