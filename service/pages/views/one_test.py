"""What the page of one test shows beside its picture."""

from collections.abc import Mapping
from dataclasses import dataclass

from service.domain.anytime import always_valid_p_value, confidence_at
from service.domain.errors import ComputationTooLarge
from service.domain.joint import Joint, joint_of
from service.domain.outlook import Outlook, outlook_of
from service.domain.plan import Plan, known_of, prior_of
from service.domain.procedure import Procedure, procedure_of
from service.domain.sequential_test import SequentialTest, Stage
from service.pages.words import figure, percent, signed
from service.storage.reader import Reader, TestFilters

# Characteristics of one subject that are shown beside each other.
MOST_OTHERS = 100

Facts = tuple[tuple[str, str], ...]


@dataclass(frozen=True)
class Expectation:
    """What is to be expected of the rest of a test; `reason` says why nothing is, where that is so."""

    outlook: Outlook | None
    reason: str | None


@dataclass(frozen=True)
class Others:
    """
    The tests of one subject, this one included, as far as they are shown.

    Attributes:
        joint: What they come to together; None where there are more than are shown.
    """

    tests: tuple[SequentialTest, ...]
    joint: Joint | None


def others_of(reader: Reader, test: SequentialTest) -> Others | None:
    """The tests of the same subject and their joint decision; None where this is the only one."""
    found = reader.tests(TestFilters(kind=test.subject.kind, subject=test.subject.name), None, MOST_OTHERS + 1)
    if len(found) < 2:
        return None
    tests = [(each, plan) for each in found[:MOST_OTHERS] if (plan := reader.plan(each.plan)) is not None]
    return Others(tuple(each for each, _ in tests), joint_of(tests) if len(found) <= MOST_OTHERS else None)


def facts_of(test: SequentialTest, plan: Plan) -> Facts:
    """The figures of where the test stands, each with what it is."""
    procedure, state = procedure_of(plan), test.state
    family = procedure.family
    found = [("Sample number", f"{figure(state.sample_number)}")]
    if family.has_exposure:
        found.append((family.axis.capitalize(), figure(state.exposure.value)))
    found.append((family.counted[:1].upper() + family.counted[1:], figure(state.total.value)))
    found.append(("Log-likelihood ratio Λ", signed(state.log_likelihood_ratio)))
    found += _limits(procedure)
    p_value = always_valid_p_value(procedure, state.log_likelihood_ratio)
    if p_value is not None:
        found.append(("Always-valid p-value", figure(p_value)))
    sequence = confidence_at(procedure, state)
    if sequence is not None:
        ends = f"{figure(float(sequence.lower[0]))} to {figure(float(sequence.upper[0]))}"
        found.append((f"{percent(sequence.level)} confidence sequence, {family.parameter}", ends))
    if state.overrun:
        found.append(("Overrun, not counted", figure(state.overrun)))
    if test.corrections:
        found.append(("Corrections", figure(test.corrections)))
    return tuple(found)


def promises_of(plan: Plan) -> Facts:
    """What the plan states and promises."""
    content, procedure = plan.content, procedure_of(plan)
    family = procedure.family
    found = [("Observations", content["family"].replace("_", " ")), ("Parameter", family.parameter)]
    found += [(name.upper(), figure(content[name])) for name in ("h0", "h1") if name in content]
    found.append(("Producer's risk α", percent(content["alpha"])))
    if "beta" in content:
        found.append(("Consumer's risk β", percent(content["beta"])))
    if content["statistic"] != "simple":
        found.append(("Statistic", _statistic(content)))
    found.append(("Boundaries", content.get("standard", content["boundaries"])))
    if "truncation" in content:
        found.append(
            ("Truncation", ", ".join(f"{_words(name)} {figure(at)}" for name, at in content["truncation"].items()))
        )
    found += [(f"Known {name}", figure(value)) for name, value in known_of(content).items()]
    prior = prior_of(content)
    if prior is not None:
        found.append(("Prior", ", ".join(f"{name} {figure(value)}" for name, value in prior.items())))
    attained = "attained" if family.has_model else "whatever the model is, at most"
    found += [
        (f"{whose} risk {attained}", percent(risk, 4))
        for name, whose in (("alpha", "Producer's"), ("beta", "Consumer's"))
        if (risk := content.get("attained", {}).get(name)) is not None
    ]
    return tuple(found)


def expectation_of(test: SequentialTest, plan: Plan) -> Expectation:
    """The exact figures of the rest, or why there are none."""
    if test.stage is not Stage.RUNNING:
        return Expectation(None, None)
    try:
        outlook = outlook_of(plan.document, test.state)
    except ComputationTooLarge as error:
        return Expectation(None, str(error))
    return Expectation(outlook, outlook.reason)


def _limits(procedure: Procedure) -> Facts:
    thresholds = procedure.thresholds
    if thresholds is None:
        return ()
    ends = (("Accept at or below", thresholds.accept), ("Reject at or above", thresholds.reject))
    return tuple((name, signed(value)) for name, value in ends if value > float("-inf"))


def _statistic(content: Mapping[str, object]) -> str:
    sides = ", two-sided" if content.get("sides") == 2 else ""
    return f"{content['statistic']}{sides}"


def _words(name: str) -> str:
    return name.replace("_", " ")
