"""What may be said after the decision of an invariant plan, and of evidence that comes without a model."""

import math
from typing import Any

import numpy as np
import pytest
from scipy.stats import nct, ttest_1samp, ttest_ind, ttest_rel

from service.domain.checking import checked_content
from service.domain.errors import ComputationTooLarge
from service.domain.inference import inference_of, meanings_of
from service.domain.inferred import Inference, Kind
from service.domain.observing import observe
from service.domain.procedure import procedure_of_document
from service.domain.state import State, Sum
from tests.domain.submissions import numbered
from tests.domain.test_inference import after
from tests.domain.test_observing import NOW

RISKS = {"alpha": 0.05, "beta": 0.1, "statistic": "invariant"}
SHIM = {**RISKS, "family": "normal", "h0": 0.0, "h1": 0.8, "known": {"reference": 10.0}}
PAIRS = {**RISKS, "family": "normal_difference", "h0": 0.0, "h1": 0.8}
ARMS = {**RISKS, "family": "normal_two_sample", "h0": 0.0, "h1": 1.0}
# Nothing but the truncation decides: ten measurements never come to 50 nats.
FIXED = {"boundaries": "given", "thresholds": {"accept": -50.0, "reject": 50.0}}
VALUES = [10.4, 11.3, 9.1, 10.9, 12.2, 10.2, 9.8, 11.6, 10.7, 11.1]
ORDER = "aababbbbab"
ERRORS = {"p_value", "median_unbiased", "lower", "upper"}


def of_values(values: list[float]) -> dict[str, Any]:
    return {"values": values}


def of_pairs(values: list[float]) -> dict[str, Any]:
    return {"observations": [{"a": 3.0, "b": 3.0 + value - 10.0} for value in values]}


def of_arms(values: list[float], order: str = ORDER) -> dict[str, Any]:
    return {"observations": [{"arm": arm, "value": value} for arm, value in zip(order, values, strict=True)]}


def in_arm(arm: str) -> list[float]:
    return [value for value, in_ in zip(VALUES, ORDER, strict=True) if in_ == arm]


@pytest.mark.parametrize("sides", [1, 2])
@pytest.mark.parametrize("h1", [0.8, -0.8])
def test_where_the_truncation_alone_decides_it_is_the_t_test(h1: float, sides: int) -> None:
    """The textbooks' t-tests, as scipy has them."""
    way: Any = "two-sided" if sides == 2 else "greater" if h1 > 0.0 else "less"
    change = {**FIXED, "truncation": {"sample_number": 10}, "h1": abs(h1) if sides == 2 else h1, "sides": sides}
    change = {name: value for name, value in change.items() if name != "sides" or sides == 2}
    a, b = in_arm("a"), in_arm("b")
    for plan, body, test, size in (
        (SHIM, of_values(VALUES), ttest_1samp(VALUES, 10.0, alternative=way), 10.0),
        (PAIRS, of_pairs(VALUES), ttest_rel(VALUES, [10.0] * 10, alternative=way), 10.0),
        (ARMS, of_arms(VALUES), ttest_ind(b, a, alternative=way), len(a) * len(b) / 10.0),
    ):
        found = after({**plan, **change}, body)
        assert found.p_value == pytest.approx(test.pvalue, rel=1e-9)
        assert (found.kind, found.simulated) == (Kind.EXACT, None)
        for limit, share in ((found.lower, 0.025), (found.median_unbiased, 0.5), (found.upper, 0.975)):
            assert limit is not None
            assert nct.sf(test.statistic, test.df, limit * math.sqrt(size)) == pytest.approx(share, rel=1e-8)


def test_the_maximum_likelihood_estimate_divides_by_the_number_of_measurements() -> None:
    found = after({**SHIM, **FIXED, "truncation": {"sample_number": 10}}, of_values(VALUES))
    assert found.maximum_likelihood == pytest.approx((np.mean(VALUES) - 10.0) / np.std(VALUES), rel=1e-12)
    a, b = in_arm("a"), in_arm("b")
    pooled = math.sqrt((np.var(a) * len(a) + np.var(b) * len(b)) / 10.0)
    found = after({**ARMS, **FIXED, "truncation": {"sample_number": 10}}, of_arms(VALUES))
    assert found.maximum_likelihood == pytest.approx((np.mean(b) - np.mean(a)) / pooled, rel=1e-12)


def drawn(seed: int, mean: float, count: int = 80) -> list[float]:
    return [float(value) for value in 10.0 + np.random.default_rng(seed).normal(mean, 1.0, count)]


SIMULATED: list[tuple[dict[str, Any], dict[str, Any]]] = [
    (SHIM, of_values(drawn(1, 0.8))),
    (SHIM, of_values(drawn(2, 0.0))),
    ({**SHIM, "h1": -0.6}, of_values(drawn(3, -0.8))),
    ({**SHIM, "truncation": {"sample_number": 12}}, of_values(drawn(4, 0.5))),
    (PAIRS, of_pairs(drawn(6, 0.8))),
    ({**SHIM, "sides": 2}, of_values(drawn(7, -1.0))),
    (ARMS, of_arms([x + (arm == "b") for x, arm in zip(drawn(9, 0.0), ORDER * 8, strict=True)], ORDER * 8)),
    ({**ARMS, "sides": 2}, of_arms(drawn(10, 0.0), ORDER * 8)),
]


@pytest.mark.parametrize(("plan", "body"), SIMULATED)
def test_simulated_figures_have_their_errors_and_hang_together(plan: dict[str, Any], body: dict[str, Any]) -> None:
    document = checked_content(plan)
    procedure = procedure_of_document(document)
    state = observe(procedure, State(), body, NOW)
    found = inference_of(document, state, numbered([body]), 0.95)
    assert found.simulated is not None
    assert (found.kind, found.simulated.seed, set(found.simulated.errors)) == (Kind.SIMULATED, 1, ERRORS)
    assert found.lower is not None
    assert found.median_unbiased is not None
    assert found.upper is not None
    assert found.lower < found.median_unbiased < found.upper
    width = found.upper - found.lower
    assert all(0.0 < found.simulated.errors[name] < 0.02 * width for name in ERRORS - {"p_value"})
    assert 0.0 < found.simulated.errors["p_value"] < 0.05 * found.p_value
    assert found.reasons.keys() == {"unbiased", "bias_of_maximum_likelihood"}
    # The limit on the side of H0 is beyond it where the p-value, of that side, is below what lies outside.
    slack = 4.0 * found.simulated.errors["p_value"]
    toward_h0 = found.lower if found.median_unbiased > 0.0 else -found.upper
    outside = 0.05 if plan.get("sides") == 2 else 0.025
    if (plan["h1"] > 0.0) == (found.median_unbiased > 0.0) or plan.get("sides") == 2:
        assert toward_h0 > 0.0 or found.p_value > outside - slack
        assert toward_h0 < 0.0 or found.p_value < outside + slack
    # Ville (1939): no rejection is so early that it would be less usual than its limit says.
    if state.decision == "reject" and "truncation" not in plan:
        assert procedure.thresholds is not None
        assert found.p_value < math.exp(-procedure.thresholds.reject) + slack


def test_any_split_of_the_submissions_gives_the_same_answer() -> None:
    for plan, body in (SIMULATED[0], SIMULATED[6]):
        (name, items), document = next(iter(body.items())), checked_content(plan)
        pieces = [{name: items[:5]}, {name: items[5:7]}, {name: items[7:]}]
        state = State()
        for piece in pieces:
            state = observe(procedure_of_document(document), state, piece, NOW)
        assert inference_of(document, state, numbered(pieces), 0.95) == after(plan, body)


def test_the_order_of_the_arms_matters_only_as_far_as_it_was_looked_at() -> None:
    """What came after the decision changes nothing, nor do gaps that a correction left in the sequences."""
    plan, body = SIMULATED[6]
    document = checked_content(plan)
    procedure = procedure_of_document(document)
    state = observe(procedure, State(), body, NOW)
    assert state.decided is not None
    used, rows = state.decided.sequence, body["observations"]
    found = inference_of(document, state, numbered([body]), 0.95)
    assert inference_of(document, state, numbered([{"observations": rows[:used]}]), 0.95) == found
    head = observe(procedure, State(), {"observations": rows[:3]}, NOW)
    shifted = State(**{**vars(head), "sequence": head.sequence + 1, "voided": 1})
    after_gap = observe(procedure, shifted, {"observations": rows[3:]}, NOW)
    log = [(1, {"observations": rows[:3]}), (5, {"observations": rows[3:]})]
    assert inference_of(document, after_gap, log, 0.95) == found
    others = [{**row, "arm": {"a": "b", "b": "a"}[row["arm"]]} if i > used else row for i, row in enumerate(rows)]
    assert inference_of(document, state, numbered([{"observations": others}]), 0.95) == found


def test_a_voided_measurement_leaves_no_trace() -> None:
    """The looks are those of the measurements that count."""
    plan, body = SIMULATED[0]
    document, values = checked_content(plan), body["values"]
    procedure = procedure_of_document(document)
    head = observe(procedure, State(), of_values(values[:4]), NOW)
    state = observe(
        procedure, State(**{**vars(head), "sequence": head.sequence + 1, "voided": 1}), of_values(values[4:]), NOW
    )
    log = [(1, of_values(values[:4])), (6, of_values(values[4:]))]
    assert inference_of(document, state, log, 0.95) == after(plan, body)


@pytest.mark.parametrize(
    ("plan", "body"),
    [
        ({**SHIM, "truncation": {"sample_number": 4}}, of_values([10.4] * 4)),
        ({**ARMS, "truncation": {"sample_number": 4}}, of_arms([1.0, 2.0, 3.0, 4.0], "aaaa")),
    ],
)
def test_without_a_t_nothing_is_said(plan: dict[str, Any], body: dict[str, Any]) -> None:
    found = after(plan, body)
    assert (found.p_value, found.maximum_likelihood, found.lower, found.upper) == (1.0, None, None, None)
    assert "t was not defined" in found.reasons["p_value"]
    assert found.reasons.keys() == ERRORS | {"maximum_likelihood", "unbiased", "bias_of_maximum_likelihood"}


def test_a_test_that_is_too_long_is_refused() -> None:
    """The same values again and again: t grows slowly."""
    plan = {**SHIM, "h1": 0.002, "alpha": 0.01, "beta": 0.01}
    values = [10.0 + 0.0014 + (1.0 if i % 2 else -1.0) for i in range(30_000)]
    document = checked_content({**plan, "truncation": {"sample_number": 30_000}})
    state = observe(procedure_of_document(document), State(), of_values(values), NOW)
    assert state.is_decided
    with pytest.raises(ComputationTooLarge):
        inference_of(document, state, numbered([of_values(values)]), 0.95)


def test_it_is_said_how_later_looks_are_supposed() -> None:
    """Only where ends that come later lie on both sides: an acceptance of a two-sided plan."""
    accepted, rejected = after(*SIMULATED[7]), after(*SIMULATED[6])
    assert "the arm with fewer" in accepted.looks
    assert "the arm with fewer" not in rejected.looks
    text = meanings_of(checked_content({**SHIM, "sides": 2}), 0.95)
    assert "acceptances with positive t" in text["ordering"]
    assert text["p_value"].startswith("Twice the smaller")
    assert "standardised mean" in meanings_of(checked_content(SHIM), 0.95)["maximum_likelihood"]


@pytest.mark.parametrize(("values", "decision"), [([2.0, 1.5], "reject"), ([-1.0, -1.5], "accept")])
def test_evidence_without_a_model_has_a_bound(values: list[float], decision: str) -> None:
    """Ville (1939): exp(-sum), and nothing more."""
    plan = {"family": "score", "alpha": 0.05, "beta": 0.1, "boundaries": "strict"}
    document = checked_content(plan)
    state = observe(procedure_of_document(document), State(), {"values": values}, NOW)
    found: Inference = inference_of(document, state, [], 0.95)
    assert state.decision == decision
    assert found.kind is Kind.BOUND
    assert found.p_value == pytest.approx(min(1.0, math.exp(-sum(values))), rel=1e-14)
    assert set(found.reasons.values()) == {next(iter(found.reasons.values()))}
    assert found.reasons.keys() == ERRORS - {"p_value"} | {
        "maximum_likelihood",
        "unbiased",
        "bias_of_maximum_likelihood",
    }
    assert (found.maximum_likelihood, found.median_unbiased, found.lower, found.upper) == (None,) * 4
    assert meanings_of(document, 0.95).keys() == {"p_value", "overrun"}
    assert meanings_of(document, 0.95)["p_value"].startswith("A bound")
    assert state.total != Sum()


@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_an_end_further_out_than_means_are_looked_for_is_refused(sign: float) -> None:
    """Measurements near 240 with a spread of 0.2 against a reference of 0, which nobody meant."""
    plan = {**SHIM, "h0": 0.0, "h1": 0.5 * sign, "known": {"reference": 0.0}}
    with pytest.raises(ComputationTooLarge, match="100 standard deviations from the mean to the reference"):
        after(plan, of_values([sign * value for value in (240.1, 239.9, 240.2, 240.0, 239.8, 240.1, 240.0, 239.9)]))
