"""The figures and calibrated thresholds of invariant plans, which are simulated: each with its standard error."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from service.domain.characteristics import Point, Promise, Simulation, Spread, check_parameters
from service.domain.errors import ComputationTooLarge, Fault, InvalidPlan, InvalidQuestion
from service.domain.families.invariant import Invariant, ratio_of
from service.domain.plan import Content, rounded
from service.domain.procedure import Procedure, procedure_of_document, with_thresholds
from service.sequential.boundaries import Thresholds, strict
from service.sequential.calibration import Risks, RisksNotMet
from service.sequential.exact.characteristics import QUANTILES, TooMuchWork
from service.sequential.invariant_bounds import fewest_looks, information
from service.sequential.invariant_calibration import Search, calibrated
from service.sequential.invariant_risks import LARGEST_INTERPOLATED, Effort, Progress, simulated
from service.sequential.invariant_risks import Point as SimulatedPoint
from service.sequential.invariant_walks import InvariantTest, invariant_test

# The seed where none is asked for, and of all calibrations.
SEED = 1
LARGEST_SEED = 2**53
# One-sided, that a calibrated plan keeps its stated risks.
CONFIDENCE = 0.95
# Standard error of a probability at which a simulation ends, and courses at which it ends all the same: fewer where
# the ratio of a course takes a quadrature.
STANDARD_ERROR, MOST_COURSES, MOST_COURSES_FAR = 5e-4, 400_000, 60_000
# Looks of all courses together, about.
MOST_LOOKS_TOGETHER = 100_000_000
# Parameters of a curve, and the most that may be asked for at once.
CURVE_POINTS, MOST_POINTS = 13, 25
# Average looks that a simulation and a calibration may take, as far as they can be foreseen.
MOST_LOOKS, MOST_LOOKS_CALIBRATED = 2_000.0, 500.0
# Batches of a calibration with few looks, and looks that many batches share.
BATCHES, FEWEST_BATCHES, SHARED_LOOKS = 6, 2, 400.0

__all__ = ["Progress", "Question", "question_of", "simulated_promise", "simulated_test", "simulated_thresholds"]

Report = Callable[[Progress], None]


@dataclass(frozen=True)
class Question:
    """What is simulated: a plan's canonical document, true parameters and a seed."""

    document: str
    at: tuple[float, ...]
    seed: int


def question_of(document: str, at: Sequence[float], seed: int | None) -> Question:
    """
    A question that can be answered; without parameters, about a curve fit for plotting.

    Raises:
        InvalidQuestion: Too many parameters, one outside the range, or no such seed.
        ComputationTooLarge: The courses would be too long.
    """
    procedure = procedure_of_document(document)
    check_parameters(procedure, at)
    if len(at) > MOST_POINTS:
        fault = Fault("/at", f"at most {MOST_POINTS} where figures are simulated; received {len(at)}")
        raise InvalidQuestion("Too many parameters.", [fault])
    if seed is not None and not 0 <= seed <= LARGEST_SEED:
        fault = Fault("/seed", f"must be a whole number from 0 to 2**53; received {seed}")
        raise InvalidQuestion("There is no such seed.", [fault])
    if procedure.thresholds is not None:
        _check_looks(simulated_test(procedure, procedure.thresholds), MOST_LOOKS)
    return Question(document, tuple(at) or _curve(procedure), SEED if seed is None else seed)


def simulated_promise(question: Question, report: Report) -> Promise:
    """
    The figures; the same question gives the same to the last digit.

    Args:
        report: Called again and again; what it raises ends the simulation, and passes.

    Raises:
        ComputationTooLarge: The courses are too long.
    """
    procedure = procedure_of_document(question.document)
    thresholds, (h0, h1), (alpha, beta) = procedure.thresholds, procedure.hypotheses, procedure.risks
    if thresholds is None or beta is None:  # not reached: an invariant plan has both
        raise InvalidQuestion("A plan without both thresholds cannot be simulated.")
    test = simulated_test(procedure, thresholds)
    asked = (h0, h1, *question.at)
    try:
        found = simulated(test, asked, question.seed, _effort(test, asked), report)
    except TooMuchWork as error:
        raise ComputationTooLarge(error.limit) from error
    least = fewest_looks((h0, h1), alpha, beta, test.samples)
    under0, under1 = found.points[0].rejection, found.points[1].rejection
    return Promise(
        method="simulation",
        error_bound=None,
        alpha=under0.value,
        beta=1.0 - under1.value,
        points=tuple(_point(point) for point in found.points[2:]),
        fixed_sample=None,
        simulation=Simulation(
            seed=question.seed,
            courses=found.courses,
            alpha_error=under0.standard_error,
            beta_error=under1.standard_error,
            least_at_h0=least[0] * test.samples,
            least_at_h1=least[1] * test.samples,
        ),
    )


def simulated_thresholds(content: Content) -> dict[str, Any]:
    """
    The members `thresholds` and `attained` of a calibrated plan: both risks are kept with the confidence stated there.

    Raises:
        OutOfRange: The hypotheses cannot be told apart.
        InvalidPlan: No thresholds keep the risks, because of the truncation.
        ComputationTooLarge: It would take too long.
    """
    stated = Risks(content["alpha"], content["beta"])
    widest = strict(stated.alpha, stated.beta)
    test = simulated_test(with_thresholds(content, widest), widest)
    looks = _check_looks(test, MOST_LOOKS_CALIBRATED)
    batches = int(min(BATCHES, max(FEWEST_BATCHES, SHARED_LOOKS / looks)))
    try:
        found = calibrated(test, stated, SEED, Search(is_guarded=True, confidence=CONFIDENCE, batches=batches))
    except RisksNotMet as error:
        detail = f"the nearest attain alpha {error.least.alpha:.4g} and beta {error.least.beta:.4g}"
        rule = f"leaves no calibrated boundaries that keep both risks; {detail}"
        raise InvalidPlan([Fault("/truncation" if "truncation" in content else "/alpha", rule)]) from error
    except TooMuchWork as error:
        raise ComputationTooLarge(error.limit) from error
    figures = {
        "alpha": found.alpha.value,
        "alpha_standard_error": found.alpha.standard_error,
        "alpha_limit": found.alpha_limit,
        "beta": found.beta.value,
        "beta_standard_error": found.beta.standard_error,
        "beta_limit": found.beta_limit,
    }
    attained = {name: rounded(value) for name, value in figures.items()}
    thresholds = {"accept": rounded(found.thresholds.accept), "reject": rounded(found.thresholds.reject)}
    return {"thresholds": thresholds, "attained": {**attained, "confidence": CONFIDENCE, "seed": SEED}}


def simulated_test(procedure: Procedure, thresholds: Thresholds) -> InvariantTest:
    """The test whose courses are simulated; of two samples with one measurement of each at every look."""
    family, wall = procedure.family, procedure.region.wall
    if not isinstance(family, Invariant):
        raise InvalidQuestion(f"The figures of {family.name} plans of this statistic are exact.")
    last = None if wall is None else int(wall.progress) // family.samples
    return invariant_test(ratio_of(procedure.known), thresholds, family.samples, last)


def _check_looks(test: InvariantTest, most: float) -> float:
    """About how many looks a course takes on average, for plans that are not hopelessly long."""
    ratio, thresholds = test.ratio, test.thresholds
    under0 = -thresholds.accept / information(ratio.delta0, ratio.delta1, test.samples)
    under1 = thresholds.reject / information(ratio.delta1, ratio.delta0, test.samples)
    looks = max(2.0, under0, under1) if test.last is None else min(float(test.last), max(2.0, under0, under1))
    if looks > most:
        raise ComputationTooLarge(f"{most:.0f} looks on average")
    return looks


def _effort(test: InvariantTest, asked: Sequence[float]) -> Effort:
    is_far = max(map(abs, asked)) > LARGEST_INTERPOLATED
    most = MOST_COURSES_FAR if is_far else MOST_COURSES
    return Effort(STANDARD_ERROR, min(most, int(MOST_LOOKS_TOGETHER / _check_looks(test, MOST_LOOKS))))


def _curve(procedure: Procedure) -> tuple[float, ...]:
    low, high = sorted(procedure.hypotheses)
    if procedure.has_two_directions:
        return tuple(float(at) for at in np.linspace(0.0, 1.5 * high, CURVE_POINTS))
    return procedure.family.grid(low, high, CURVE_POINTS)


def _point(point: SimulatedPoint) -> Point:
    quantiles = {f"{q:g}": value for q, value in zip(QUANTILES, point.quantiles, strict=True)}
    mean = point.average_sample_number
    return Point(
        parameter=point.delta,
        probability_of_acceptance=1.0 - point.rejection.value,
        sample_number=Spread(mean.value, point.standard_deviation, quantiles),
        exposure=None,
        failures=None,
        wald=None,
        siegmund=None,
        probability_error=point.rejection.standard_error,
        average_error=mean.standard_error,
    )
