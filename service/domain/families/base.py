"""What every family answers, and the checks that they share."""

import math
from abc import ABC, abstractmethod
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from enum import StrEnum
from typing import Any, ClassVar

import numpy as np
from numpy.typing import NDArray

from service.domain.checks import Check, order_checks
from service.domain.errors import Fault, InvalidObservations
from service.sequential.approximations import Motion
from service.sequential.deviance import Deviance
from service.sequential.double import Double, FloatArray
from service.sequential.evidence import Evidence
from service.sequential.exact.characteristics import Characteristics
from service.sequential.fixed_sample import FixedSample
from service.sequential.inference.ordering import Outcome
from service.sequential.likelihood import LikelihoodRatio
from service.sequential.region import Limits, Region, Span

# Magnitudes beyond these say that a field was misread; they also keep every product far from overflow.
LARGEST_REAL = 1e100
LARGEST_COUNT = 1_000_000_000

# exp() of more overflows.
LARGEST_EXPONENT = 700.0

MAXIMAL_FAULTS = 20

Document = Mapping[str, Any]


@dataclass(frozen=True)
class Start:
    """
    A point of the region from which sampling goes on.

    Attributes:
        carried: The sums that a family carries, each rounded to a double.
        rest: What the rounding of each left out.
    """

    progress: float = 0.0
    total: float = 0.0
    carried: tuple[float, ...] = ()
    rest: tuple[float, ...] = ()


ORIGIN = Start()


@dataclass(frozen=True)
class Way:
    """
    A shortest way to a decision.

    Attributes:
        observations: Units or reports that it takes, None where time alone does it.
        exposure: Further exposure: as much as it takes, or as much as there may be at most.
        total: By how much the total may rise at most (towards the lower limit) or must rise at least.
        words: The same for people.
    """

    observations: int | None
    exposure: float | None
    total: float
    words: str


@dataclass(frozen=True)
class Increments:
    """
    One submission in the plan's own terms; arrays of shape (observations,).

    Attributes:
        units: What each observation adds to the sample number.
        progress: What it adds to the axis of the region: units or exposure.
        total: What it adds to the sufficient statistic.
        carried: What it adds to each of the running sums that the family carries; those then give progress and total.
    """

    units: NDArray[np.int64]
    progress: FloatArray
    total: FloatArray
    carried: tuple[FloatArray, ...] = ()


@dataclass(frozen=True)
class Column:
    """One field of all observations of a submission, with the pointers to name an element by."""

    values: FloatArray
    pointer: Callable[[int], str]

    def require(self, holds: NDArray[np.bool_], rule: str) -> list[Fault]:
        """A fault for each element that breaks the rule, the first few of them."""
        broken = np.flatnonzero(~holds)[:MAXIMAL_FAULTS]
        return [Fault(self.pointer(int(i)), f"{rule}; received {_plain(self.values[i])}") for i in broken]


@dataclass(frozen=True)
class End:
    """
    Where a test ended, for inference.

    Attributes:
        looks: Array of shape (looks,): the progress at each look taken, the deciding one last; for families watched in
            time only that one.
        total: The total at the end.
        is_above: It ended above the region, or at the wall on that side; else below.
    """

    looks: FloatArray
    total: Double
    is_above: bool


class TableKind(StrEnum):
    """What the rows of a table run over."""

    UNITS = "units"
    TIMES = "times"


class Family(ABC):
    """
    An observation model.

    Attributes:
        name: As a plan names it.
        parameter: What h0 and h1 are.
        counted: What the total is, for people; `displayed` where it shows something else.
        axis: What the region runs over, for people.
        value_field: The field of an observation that carries its result.
        optional: Fields that an observation may carry beside it, with the value taken where one is absent.
        required: Fields that an observation object must carry beside it.
        in_values: What the required fields are for a bare number in `values`; where one is missing there are no such.
        words: Fields that are words, with the number that stands for each.
        known: Names of what the family needs to know beforehand.
        span: The totals it can show.
        has_exposure: The region runs over exposure rather than units.
        is_watched_in_time: The region is watched between reports, not only at their ends.
        parameter_lowers_total: Large parameters make small totals.
        table: The rows of a table for this family, if a plan may be given as one.
        prior: Names of the parameters of its conjugate prior; empty for families without composite hypotheses.
        carries: The running sums that give progress and total where these do not simply add up; see `place`.
        has_model: A plan states h0 and h1, and what they say of the observations gives exact figures.
        has_normal_steps: The total moves by normal amounts, so that Siegmund's overshoot is theirs.
        no_unbiased_estimate: Why the parameter has no unbiased estimate, where it has none.
        no_bias: Why the bias of the maximum-likelihood estimate is not given, where it is not.
        may_know: Names of what a plan may state in `known` beside that.
        is_invariant: The region runs over the log-likelihood ratio itself, and figures are simulated.
        fewest_units: The smallest sample number at which a plan may be truncated.
        looks_at_arms: What a look knows depends on the arms of all measurements so far.
    """

    name: ClassVar[str]
    parameter: ClassVar[str]
    counted: ClassVar[str]
    axis: ClassVar[str] = "units"
    value_field: ClassVar[str] = "value"
    optional: ClassVar[Mapping[str, float]] = {}
    required: ClassVar[tuple[str, ...]] = ()
    in_values: ClassVar[Mapping[str, float]] = {}
    words: ClassVar[Mapping[str, Mapping[str, float]]] = {}
    known: ClassVar[tuple[str, ...]] = ()
    span: ClassVar[Span]
    has_exposure: ClassVar[bool] = False
    is_watched_in_time: ClassVar[bool] = False
    parameter_lowers_total: ClassVar[bool] = False
    table: ClassVar[TableKind | None] = None
    prior: ClassVar[tuple[str, ...]] = ()
    carries: ClassVar[tuple[str, ...]] = ()
    has_model: ClassVar[bool] = True
    has_normal_steps: ClassVar[bool] = False
    no_unbiased_estimate: ClassVar[str | None] = None
    no_bias: ClassVar[str | None] = None
    may_know: ClassVar[tuple[str, ...]] = ()
    is_invariant: ClassVar[bool] = False
    fewest_units: ClassVar[int] = 1
    looks_at_arms: ClassVar[bool] = False

    @abstractmethod
    def hypothesis_rule(self, value: float) -> str | None:
        """The rule that a hypothesis breaks, or None where it lies strictly inside the family's range."""

    @abstractmethod
    def likelihood_ratio(self, h0: float, h1: float, known: Mapping[str, float]) -> LikelihoodRatio:
        """
        The evidence for h1 against h0.

        Raises:
            OutOfRange: Floating point cannot tell the hypotheses apart.
        """

    @abstractmethod
    def increments(self, columns: Mapping[str, Column], known: Mapping[str, float]) -> Increments:
        """
        Check the columns of a submission and turn them into increments.

        Raises:
            InvalidObservations: With a fault for each offending element.
        """

    def place(self, sums: Sequence[Double], known: Mapping[str, float]) -> tuple[Double, Double]:
        """
        Progress and total from the running sums, for families that carry them.

        Args:
            sums: One for each name in `carries`, with arrays of shape (observations,).
            known: What the plan knows beforehand.
        """
        raise TypeError(f"{self.name} adds up progress and total themselves")

    def displayed(self, sums: Sequence[Double], total: Double, known: Mapping[str, float]) -> Double:
        """The total as people know it, where the region runs over something else; arguments as for `place`."""
        return total

    def drawn(self, region: Region, progress: FloatArray, known: Mapping[str, float]) -> Limits:
        """The region's limits of what is shown, where no total lies beyond them infinite; array of shape (points,)."""
        return region.limits(progress)

    def idle_units(self, start: Start) -> int:
        """Units still to come of which the region sees nothing; a truncation counts them."""
        return 0

    def truncation_rule(self, sample_number: float) -> str | None:
        """The rule that a truncation by sample number breaks."""
        few = self.fewest_units
        return f"must be at least {few}: no earlier sample could decide" if sample_number < few else None

    def deviance(self, known: Mapping[str, float]) -> Deviance:
        """How far observations lie from a parameter, for families with composite hypotheses."""
        raise TypeError(f"{self.name} has no composite hypotheses")

    def mixture(self, edge: float, direction: int, known: Mapping[str, float], prior: Mapping[str, float]) -> Evidence:
        """
        The evidence of a mixture over the conjugate prior, for families with composite hypotheses.

        Args:
            edge: H0's value, as a mean of the total in one unit of progress.
            direction: 1 where H1 lies above the edge, -1 below, 0 on both sides.
            known, prior: As a plan states them.
        """
        raise TypeError(f"{self.name} has no composite hypotheses")

    def mean_of(self, parameter: float, known: Mapping[str, float]) -> float:
        """The mean of the total in one unit of progress."""
        return parameter

    def parameter_of(self, mean: float, known: Mapping[str, float]) -> float:
        """The parameter with this mean of the total in one unit of progress; either may lie at infinity."""
        return mean

    def known_rule(self, name: str, value: float) -> str | None:
        """The rule that something known beforehand breaks; `name` is one of `known`."""
        return positive_rule(value)

    def settled(self, known: Mapping[str, float], h0: float, h1: float) -> Mapping[str, float]:
        """What is known of a plan, with what follows from its hypotheses; all that takes `known` is given this."""
        return known

    def parameter_rule(self, value: float) -> str | None:
        """The rule that a true parameter breaks; the ends of the range may be asked for where they mean something."""
        return self.hypothesis_rule(value)

    @abstractmethod
    def exact(
        self, region: Region, parameters: FloatArray, known: Mapping[str, float], start: Start = ORIGIN
    ) -> Characteristics:
        """
        Exact figures of a region at these true parameters, array of shape (points,), from one of its points on.

        Raises:
            TooMuchWork: The computation would need more steps than are allowed.
        """

    def grid(self, low: float, high: float, points: int) -> tuple[float, ...]:
        """Parameters around two hypotheses that show the whole curve; evenly in proportion, for positive ones."""
        return tuple(float(value) for value in np.geomspace(low / 2.0, high * 2.0, points))

    @abstractmethod
    def ways(self, region: Region, start: Start, known: Mapping[str, float]) -> tuple[Way | None, Way | None]:
        """The shortest ways from here to the lower and to the upper limit."""

    def estimate(self, start: Start, known: Mapping[str, float]) -> float | None:
        """The maximum-likelihood estimate of the parameter from the observations so far, None where there is none."""
        return start.total / start.progress if start.progress > 0.0 else None

    @abstractmethod
    def motion(self, parameter: float, known: Mapping[str, float]) -> Motion:
        """How the total moves in one unit of progress under a true parameter."""

    @abstractmethod
    def fixed_sample(
        self, lower: float, upper: float, risks: tuple[float, float], known: Mapping[str, float]
    ) -> FixedSample | None:
        """The smallest fixed sample; `lower` is the hypothesis of small totals, `risks` are in that order."""

    def checks(self, seen: Increments, known: Mapping[str, float]) -> tuple[Check, ...]:
        """Whether a stream looks as supposed: here, that what each observation adds to the total is in no order."""
        return order_checks(seen.total, "observations")

    def outcome(self, region: Region, end: End, known: Mapping[str, float]) -> Outcome:
        """An end among all that could have come, for families whose outcomes are followed exactly."""
        raise TypeError(f"{self.name} does not follow outcomes")

    def bias(self, region: Region, parameter: float, step: float, known: Mapping[str, float]) -> float:
        """
        The bias of the maximum-likelihood estimate at this parameter, with looks `step` of progress apart.

        Raises:
            TooMuchWork: The test may go on for too long.
        """
        raise TypeError(f"{self.name} has no inference")

    @property
    def has_stepwise_risks(self) -> bool:
        """True where the risks move in steps as the limits move: whole-number totals looked at now and then."""
        return self.span.is_integer and not self.is_watched_in_time

    @property
    def has_figures_of_units(self) -> bool:
        """True where exact figures of the progress are figures of the sample number as well."""
        return not self.is_watched_in_time

    @property
    def fields(self) -> tuple[str, ...]:
        """The fields of an observation that say what was observed, its result first."""
        return (self.value_field, *self.required, *self.optional)

    def read(self, document: Document, known: Mapping[str, float]) -> Increments:
        """
        Decode a submission as posted: `{"values": [...]}` or `{"observations": [{...}]}`.

        Raises:
            InvalidObservations: With a fault for each offending element.
        """
        if "values" in document:
            return self.increments(self._columns_of_values(document["values"]), known)
        return self.increments(self._columns_of_objects(document["observations"]), known)

    def _columns_of_values(self, values: Sequence[float]) -> dict[str, Column]:
        unsaid = [field for field in self.required if field not in self.in_values]
        if unsaid:
            fields = " and ".join((self.value_field, *unsaid))
            rule = f'means nothing for {self.name}: post "observations", each with {fields}'
            raise InvalidObservations([Fault("/values", rule)])
        count = len(values)
        columns = {self.value_field: Column(_array(values), lambda i: f"/values/{i}")}
        for field, value in {**self.optional, **self.in_values}.items():
            columns[field] = Column(np.full(count, value), lambda i: f"/values/{i}")
        return columns

    def _columns_of_objects(self, observations: Sequence[Document]) -> dict[str, Column]:
        self._check_fields(observations)
        return {
            field: Column(
                self._numbers(field, observations),
                lambda i, field=field: f"/observations/{i}/{field}",  # type: ignore[misc]
            )
            for field in self.fields
        }

    def _numbers(self, field: str, observations: Sequence[Document]) -> FloatArray:
        """One field of all observations as numbers."""
        if field not in self.words:
            return _array([o.get(field, self.optional.get(field)) for o in observations])
        number_of = self.words[field]
        faults = [
            Fault(f"/observations/{i}/{field}", f"must be one of {', '.join(number_of)}; received {o[field]!r}")
            for i, o in enumerate(observations)
            if o[field] not in number_of
        ]
        refuse(faults)
        return np.array([number_of[o[field]] for o in observations])

    def _check_fields(self, observations: Sequence[Document]) -> None:
        """Every required field is there, and none that means nothing in this family."""
        needed = {self.value_field, *self.required}
        allowed = {*self.fields, "unit", "observed_at"}
        faults = []
        for i, observation in enumerate(observations):
            if needed <= observation.keys() <= allowed:
                continue
            for field in sorted(needed - observation.keys()):
                faults.append(Fault(f"/observations/{i}/{field}", f"is required for {self.name}"))
            for field in sorted(observation.keys() - allowed):
                faults.append(Fault(f"/observations/{i}/{field}", f"means nothing for {self.name}"))
        if faults:
            raise InvalidObservations(faults[:MAXIMAL_FAULTS])


def whole_numbers(column: Column, smallest: int) -> list[Fault]:
    """Faults where a column is not a whole number from `smallest` to the largest count."""
    values = column.values
    holds = (values == np.floor(values)) & (values >= smallest) & (values <= LARGEST_COUNT)
    return column.require(holds, f"must be a whole number from {smallest} to {LARGEST_COUNT}")


def reals(column: Column, rule: str, holds: NDArray[np.bool_]) -> list[Fault]:
    """Faults where a column breaks the rule or is too large in magnitude."""
    return column.require(holds & (np.abs(column.values) <= LARGEST_REAL), f"{rule}, at most 1e100 in magnitude")


def refuse(faults: list[Fault]) -> None:
    """Raise when there is a fault."""
    if faults:
        raise InvalidObservations(faults[:MAXIMAL_FAULTS])


def plural(count: int, singular: str, several: str | None = None) -> str:
    """The number with its noun."""
    return f"{count} {singular}" if count == 1 else f"{count} {several or singular + 's'}"


def poisson_motion(rate: float) -> Motion:
    """A count with this mean in one unit of exposure."""
    return Motion(lambda t: rate * math.expm1(t) if t < LARGEST_EXPONENT else math.inf, rate, rate)


def positive_rule(value: float) -> str | None:
    """For parameters on the positive half-line."""
    return None if 1.0 / LARGEST_REAL <= value <= LARGEST_REAL else "must be above 0 (from 1e-100 to 1e100)"


def _array(values: Sequence[float]) -> FloatArray:
    try:
        return np.asarray(values, dtype=np.float64)
    except OverflowError:  # a whole number of more than 308 digits
        return np.asarray([_float(value) for value in values])


def _float(value: float) -> float:
    try:
        return float(value)
    except OverflowError:
        return math.inf


def _plain(value: np.float64) -> str:
    number = float(value)
    return str(int(number)) if number.is_integer() and abs(number) < 1e15 else repr(number)  # noqa: PLR2004
