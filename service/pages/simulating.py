"""Figures that are simulated: asked for, looked at while they run, and shown when they are there."""

from service.pages.views.judging import Judged, while_running, with_promise, without
from service.pages.words import figure
from service.web.parts import Parts
from service.web.simulations import Simulation

FAILED = "The simulation failed; the log of the service has the reason."


def with_simulation(parts: Parts, judged: Judged, *, may_begin: bool) -> Judged:
    """
    A plan whose figures are simulated, with what is known of them by now; others as they are.

    Raises:
        TooManyQuestions: So many simulations are unfinished that this one would wait too long.
    """
    if judged.question is None:
        return judged
    ask = parts.simulations.asked if may_begin else parts.simulations.found
    simulation = ask(judged.question)
    if simulation is None:
        return judged
    if simulation.promise is not None:
        return with_promise(judged, simulation.promise)
    if not simulation.is_unfinished:
        return without(judged, FAILED if simulation.problem is None else str(simulation.problem))
    return while_running(judged, _so_far(simulation))


def _so_far(simulation: Simulation) -> str:
    progress = simulation.progress
    if progress is None:
        return "The simulation waits for its turn."
    courses = f"{figure(progress.courses)} courses of about {figure(max(progress.courses, progress.expected))}"
    return f"The simulation is running: {courses} so far."
