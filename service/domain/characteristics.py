"""What a plan really promises: exact probabilities of acceptance and exact sample numbers."""

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

from service.domain.calibrating import accepts_at, around, exact_figures, fixed_sample_of, risks_of
from service.domain.errors import Fault, InvalidQuestion
from service.domain.families.base import ORIGIN
from service.domain.procedure import Procedure, procedure_of_document
from service.sequential.approximations import OVERSHOOT, approximate
from service.sequential.decision import Decision
from service.sequential.exact.characteristics import QUANTILES, Characteristics
from service.sequential.region import StraightRegion

GRID_POINTS = 51
MOST_PARAMETERS = 500


@dataclass(frozen=True)
class Spread:
    """Mean, standard deviation and quantiles of a number that ends with the decision."""

    mean: float
    standard_deviation: float
    quantiles: dict[str, float]


@dataclass(frozen=True)
class Approximate:
    """An approximation beside the exact figures; `average` is of units, or of the exposure."""

    probability_of_acceptance: float
    average: float


@dataclass(frozen=True)
class Fixed:
    """
    The smallest fixed sample that keeps the plan's stated risks.

    Attributes:
        size: Units, or exposure.
        acceptance_limit: The total that still accepts.
        accepts_at_most: True where totals up to the limit accept, False where those from it on do.
        saving_at_h0, saving_at_h1: The share of the size that sequential sampling saves on average.
    """

    size: float
    acceptance_limit: float
    accepts_at_most: bool
    alpha: float
    beta: float
    saving_at_h0: float
    saving_at_h1: float


@dataclass(frozen=True)
class Point:
    """
    The figures at one true parameter.

    `wald` and `siegmund` are None where the plan is truncated; `siegmund` also where steps are not normal.
    `sample_number` is None where reports have no fixed size (families watched in time, arms measured one at a time);
    `exposure` is None for families without exposure. `failures` is the mean number of failures for families watched in
    time. The errors are the standard errors of the probability and of the mean, where they were simulated.
    """

    parameter: float
    probability_of_acceptance: float
    sample_number: Spread | None
    exposure: Spread | None
    failures: float | None
    wald: Approximate | None
    siegmund: Approximate | None
    probability_error: float | None = None
    average_error: float | None = None


@dataclass(frozen=True)
class Simulation:
    """
    How figures were simulated.

    Attributes:
        seed: The same gives the same figures.
        courses: How many were followed.
        alpha_error, beta_error: Standard errors of the attained risks.
        least_at_h0, least_at_h1: What no test with the stated risks can have a smaller average sample number than.
    """

    seed: int
    courses: int
    alpha_error: float
    beta_error: float
    least_at_h0: float
    least_at_h1: float


@dataclass(frozen=True)
class Promise:
    """
    The attained risks and the figures at each parameter asked for.

    Attributes:
        error_bound: None where the figures were simulated.
        simulation: How they were, None where they are exact.
    """

    method: str
    error_bound: float | None
    alpha: float
    beta: float | None
    points: tuple[Point, ...]
    fixed_sample: Fixed | None
    simulation: Simulation | None = None


def spread_at(found: Characteristics, i: int, idle: int = 0) -> Spread:
    """The figures of the progress at the i-th parameter, with so many units that make no progress."""
    return Spread(
        float(found.mean[i]) + idle,
        float(found.standard_deviation[i]),
        {f"{q:g}": float(value) + idle for q, value in zip(QUANTILES, found.quantiles[i], strict=True)},
    )


def promise_of(document: str, at: Sequence[float]) -> Promise:
    """
    Exact figures of a plan at these parameters, or on a grid fit for plotting when none is given.

    Args:
        document: The plan's canonical document.
        at: True parameters.

    Raises:
        InvalidQuestion: Too many parameters, one outside the family's range, or a family without a model.
        ComputationTooLarge: The recursion would not end within its limit.
    """
    check_parameters(procedure_of_document(document), at)
    return _promise(document, tuple(at) or common_grid([document]))


def check_parameters(procedure: Procedure, at: Sequence[float]) -> None:
    """
    Raises:
        InvalidQuestion: Too many parameters, or one outside the family's range.
    """
    if len(at) > MOST_PARAMETERS:
        raise InvalidQuestion("Too many parameters.", [Fault("/at", f"at most {MOST_PARAMETERS}; received {len(at)}")])
    faults = [
        Fault(f"/at/{i}", f"{rule}: it is a {procedure.family.parameter}; received {value!r}")
        for i, value in enumerate(at)
        if (rule := procedure.family.parameter_rule(value)) is not None
    ]
    if faults:
        raise InvalidQuestion("A parameter lies outside the family's range; see errors.", faults[:20])


@lru_cache(maxsize=256)
def _promise(document: str, at: tuple[float, ...]) -> Promise:
    procedure = procedure_of_document(document)
    found = exact_figures(procedure, (*procedure.hypotheses, *at))
    risks, first = risks_of(procedure, found), len(procedure.hypotheses)
    return Promise(
        method="recursion" if procedure.family.span.is_integer else "quadrature",
        error_bound=found.error_bound,
        alpha=risks.alpha,
        beta=risks.beta,
        points=tuple(_point(procedure, found, i + first, parameter) for i, parameter in enumerate(at)),
        fixed_sample=_fixed_sample(procedure, found),
    )


def _point(procedure: Procedure, found: Characteristics, i: int, parameter: float) -> Point:
    family = procedure.family
    ends = spread_at(found, i, family.idle_units(ORIGIN))
    return Point(
        parameter=parameter,
        probability_of_acceptance=accepts_at(procedure, found, i),
        sample_number=ends if family.has_figures_of_units else None,
        exposure=ends if family.has_exposure else None,
        failures=_failures(procedure, parameter, ends.mean),
        wald=_approximate(procedure, parameter, 0.0),
        siegmund=None if not family.has_normal_steps else _approximate(procedure, parameter, OVERSHOOT),
    )


def _failures(procedure: Procedure, parameter: float, exposure: float) -> float | None:
    """The mean number of failures in the mean exposure, by Wald's identity."""
    family = procedure.family
    return exposure * family.motion(parameter, procedure.known).mean if family.is_watched_in_time else None


def _approximate(procedure: Procedure, parameter: float, overshoot: float) -> Approximate | None:
    """Wald's approximation, with the overshoot in standard deviations added to both intercepts."""
    region, family = procedure.region, procedure.family
    if region.wall is not None or not isinstance(region, StraightRegion):
        return None
    motion = family.motion(parameter, procedure.known)
    more = overshoot * motion.variance**0.5
    found = approximate(motion, region.ratio.slope, region.lower_intercept + more, region.upper_intercept + more)
    if found is None:
        return None
    accepts = found.below if region.below is Decision.ACCEPT else 1.0 - found.below
    return Approximate(accepts, found.progress + family.idle_units(ORIGIN))


def _fixed_sample(procedure: Procedure, found: Characteristics) -> Fixed | None:
    is_upward = procedure.is_upward
    sample = fixed_sample_of(procedure)
    if sample is None:
        return None
    idle = procedure.family.idle_units(ORIGIN)
    next_total = sample.limit + (1.0 if procedure.family.span.is_integer else 0.0)
    return Fixed(
        size=sample.size,
        acceptance_limit=sample.limit if is_upward else next_total,
        accepts_at_most=is_upward,
        alpha=sample.lower_risk if is_upward else sample.upper_risk,
        beta=sample.upper_risk if is_upward else sample.lower_risk,
        saving_at_h0=1.0 - (float(found.mean[0]) + idle) / sample.size,
        saving_at_h1=1.0 - (float(found.mean[1]) + idle) / sample.size,
    )


def common_grid(documents: Sequence[str]) -> tuple[float, ...]:
    """Parameters around all hypotheses of plans of one family."""
    procedures = [procedure_of_document(document) for document in documents]
    ends = [parameter for procedure in procedures for parameter in around(procedure)]
    return procedures[0].family.grid(min(ends), max(ends), GRID_POINTS)
