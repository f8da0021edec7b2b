"""Figures that are simulated: how far the simulation is, and what it found."""

from typing import Any

from pydantic import Field

from service.api.problems import document, document_of
from service.api.schemas.characteristics import SIMULATED, CharacteristicsOut
from service.api.schemas.common import Answer, ProblemOut, shown_as
from service.web.simulations import Simulation

RUNNING: dict[str, Any] = {
    "id": "5f0c1a2b3c4d5e6f708192a3b4c5d6e7",
    "status": "done",
    "seed": 1,
    "progress": {"courses": 57344, "expected": 57344},
    "result": SIMULATED,
    "problem": None,
}


class ProgressOut(Answer):
    """Simulated courses so far, and how many are expected by what is known of the standard error."""

    courses: int
    expected: int


class SimulationOut(Answer):
    """A simulation: ask again until it is done."""

    model_config = shown_as(RUNNING)

    id: str
    status: str = Field(description="waiting, running, done, failed, or ended by a caller.")
    seed: int
    progress: ProgressOut | None = Field(description="Null while it waits.")
    result: CharacteristicsOut | None = Field(description="Once it is done.")
    problem: ProblemOut | None = Field(description="Where it failed.")

    @classmethod
    def of(cls, simulation: Simulation) -> "SimulationOut":
        """From the simulation."""
        promise, question = simulation.promise, simulation.question
        progress = simulation.progress
        return cls(
            id=simulation.id,
            status=simulation.status,
            seed=question.seed,
            progress=None if progress is None else ProgressOut(courses=progress.courses, expected=progress.expected),
            result=None if promise is None else CharacteristicsOut.of(promise, question.document),
            problem=_problem(simulation),
        )


def _problem(simulation: Simulation) -> ProblemOut | None:
    if simulation.status != "failed":
        return None
    if simulation.problem is None:
        return ProblemOut.model_validate(document("internal-error", "The log of the service has the reason."))
    return ProblemOut.model_validate(document_of(simulation.problem))
