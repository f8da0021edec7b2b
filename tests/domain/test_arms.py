"""Families that compare two arms: evidence, decisions, exact figures and outlook against slow second computations."""

import math
from fractions import Fraction
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from service.domain.characteristics import promise_of
from service.domain.checking import checked_content
from service.domain.errors import InvalidObservations, InvalidPlan
from service.domain.observing import observe
from service.domain.outlook import outlook_of
from service.domain.procedure import lines_of, procedure_of_document
from service.domain.state import State
from tests.domain.test_observing import NOW
from tests.domain.test_tables import VACCINE
from tests.sequential.reference import arms, paths

PAIRED: dict[str, Any] = {"family": "paired", "h0": 1.0, "h1": 3.0, "alpha": 0.05, "beta": 0.10}

COUNTS: dict[str, Any] = {
    "family": "poisson_ratio",
    "h0": 1.0,
    "h1": 0.5,
    "alpha": 0.05,
    "beta": 0.10,
    "known": {"exposure_ratio": 2.0},
}

LEVELS: dict[str, Any] = {
    "family": "normal_difference",
    "h0": 0.0,
    "h1": 0.5,
    "alpha": 0.05,
    "beta": 0.05,
    "known": {"sigma_a": 0.3, "sigma_b": 0.4},
}

SINGLES: dict[str, Any] = {**LEVELS, "family": "normal_two_sample"}


def document(base: dict[str, Any], **change: Any) -> str:
    return checked_content({**base, **change})


def posted(plan: str, rows: list[dict[str, Any]]) -> State:
    return observe(procedure_of_document(plan), State(), {"observations": rows}, NOW)


def of_pairs(pairs: list[tuple[Any, Any]]) -> list[dict[str, Any]]:
    return [{"a": a, "b": b} for a, b in pairs]


def refused(plan: str, body: dict[str, Any]) -> list[str]:
    with pytest.raises(InvalidObservations) as caught:
        observe(procedure_of_document(plan), State(), body, NOW)
    return [fault.pointer for fault in caught.value.faults]


@pytest.mark.parametrize("chance_in_a", [Fraction(1, 3), Fraction(9, 10), Fraction(1, 1000)])
@pytest.mark.parametrize(("u0", "u1"), [(1.0, 3.0), (3.0, 0.5), (0.25, 0.2500001)])
def test_the_evidence_of_pairs_needs_no_chance_of_either_arm(u0: float, u1: float, chance_in_a: Fraction) -> None:
    source = np.random.default_rng(3)
    pairs = [(int(a), int(b)) for a, b in source.integers(0, 2, (40, 2))]
    plan = document(PAIRED, h0=u0, h1=u1, boundaries="given", thresholds={"accept": -900.0, "reject": 900.0})
    state = posted(plan, of_pairs(pairs))
    slow = arms.evidence_of_pairs(pairs, Fraction(u0), Fraction(u1), chance_in_a)
    size = abs(math.log(u1 / u0)) * 40
    assert abs(state.log_likelihood_ratio - float(slow)) <= 1e-12 * size
    assert state.sample_number == sum(a != b for a, b in pairs)
    assert state.total.value == sum(b > a for a, b in pairs)


def test_the_lines_of_pairs_are_walds() -> None:
    """Wald (1947), Sequential Analysis, chapter 6, formulas of the acceptance and rejection numbers (recalled)."""
    lines = lines_of(procedure_of_document(document(PAIRED)))
    assert lines is not None
    gain = math.log(3.0) - math.log(1.0)
    assert lines.slope == pytest.approx(math.log((1 + 3) / (1 + 1)) / gain, rel=1e-14)
    assert lines.accept_intercept == pytest.approx(-math.log(0.10 / 0.95) / gain, rel=1e-14)
    assert lines.reject_intercept == pytest.approx(math.log(0.90 / 0.05) / gain, rel=1e-14)


def wald_numbers(u0: float, u1: float, alpha: float, beta: float, last: int) -> paths.Limits:
    """Acceptance and rejection numbers after t pairs that differ; at the last the sign of the evidence decides."""
    gain = math.log(u1) - math.log(u0)
    slope = math.log((1 + u1) / (1 + u0)) / gain

    def limits(t: int) -> tuple[float, float]:
        if t == last:
            accept = math.floor(slope * t)
            return accept, accept + 1
        accept = math.floor(math.log(beta / (1 - alpha)) / gain + slope * t)
        return accept, math.ceil(math.log((1 - beta) / alpha) / gain + slope * t)

    return limits


@pytest.mark.parametrize("u", [1, 2, 3])
def test_exact_figures_of_pairs_agree_with_every_path(u: int) -> None:
    plan = document(PAIRED, truncation={"sample_number": 40})
    p = Fraction(u, 1 + u)
    slow = paths.looks(wald_numbers(1.0, 3.0, 0.05, 0.10, 40), {0: 1 - p, 1: p}, 40)
    promise = promise_of(plan, [float(u)])
    point = promise.points[0]
    assert point.sample_number is not None
    assert point.probability_of_acceptance == pytest.approx(slow.below, abs=1e-13)
    assert point.sample_number.mean == pytest.approx(slow.mean, rel=1e-13)
    assert point.sample_number.quantiles["0.9"] == slow.quantile(0.9)


def test_pairs_that_agree_change_no_risk() -> None:
    """All pairs followed one by one, those that agree too, from both arms' chances; about 200 of 500 would do."""
    chance_in_a, u = 0.3, 2.0
    chance_in_b = u * 0.3 / 0.7 / (1 + u * 0.3 / 0.7)
    for_b, for_a = chance_in_b * (1 - chance_in_a), chance_in_a * (1 - chance_in_b)
    limits = wald_numbers(1.0, 3.0, 0.05, 0.10, 60)
    alive, accepted, left = {(0, 0): 1.0}, 0.0, 1.0
    for _ in range(500):
        moved: dict[tuple[int, int], float] = {}
        for (t, total), chance in alive.items():
            steps = (((t, total), 1 - for_a - for_b), ((t + 1, total), for_a), ((t + 1, total + 1), for_b))
            for place, step in steps:
                moved[place] = moved.get(place, 0.0) + chance * step
        alive = {}
        for (t, total), chance in moved.items():
            low, high = limits(t) if t else (-1, 1)
            if total <= low:
                accepted += chance
            elif total < high:
                alive[t, total] = chance
        left = sum(alive.values())
    assert left < 1e-12
    plan = document(PAIRED, truncation={"sample_number": 60})
    assert promise_of(plan, [u]).points[0].probability_of_acceptance == pytest.approx(accepted, abs=1e-11)


def test_a_decision_of_pairs_falls_at_the_pair_that_crosses() -> None:
    """By hand: 1 pair for b weighs ln(3/2) = .405, one for a -ln 2 = -.693; ln B = -2.25, so four for a accept."""
    plan = document(PAIRED)
    rows = of_pairs([(1, 1), (1, 0), (0, 0), (1, 0), (1, 0), (1, 1), (1, 0), (0, 1)])
    state = posted(plan, rows)
    assert state.decision == "accept"
    assert state.decided is not None
    assert (state.decided.sequence, state.sample_number, state.total.value, state.overrun) == (7, 4, 0.0, 1)
    assert state.log_likelihood_ratio == pytest.approx(-4 * math.log(2), rel=1e-14)


def test_the_outlook_of_pairs_speaks_of_pairs_that_differ() -> None:
    """By hand: eight pairs for b weigh 3.24 and seven 2.84, ln A = 2.89; the estimate is 3 for b to 1 for a."""
    plan = document(PAIRED)
    outlook = outlook_of(plan, State())
    assert outlook.ways.accept is not None
    assert outlook.ways.reject is not None
    assert outlook.ways.accept.words == "4 pairs that differ, all in a's favour"
    assert outlook.ways.reject.words == "8 pairs that differ, all in b's favour"
    assert outlook.estimate is None
    state = posted(plan, of_pairs([(0, 1), (0, 1), (1, 1), (1, 0), (0, 1)]))
    later = outlook_of(plan, state)
    assert later.estimate == 3.0
    assert [expected.under for expected in later.expected] == ["h0", "h1", "estimate"]
    assert later.expected[1].probability_of_acceptance == later.expected[2].probability_of_acceptance


def test_calibrated_pairs_are_calibrated_proportions() -> None:
    """Odds of 1 and 3 are chances of 1/2 and 3/4: only the names differ."""
    calibrated = {"boundaries": "calibrated", "truncation": {"sample_number": 60}}
    pairs = promise_of(document(PAIRED, **calibrated), [1.0, 3.0])
    plain = promise_of(document({**PAIRED, "family": "bernoulli"}, h0=0.5, h1=0.75, **calibrated), [0.5, 0.75])
    assert pairs.beta is not None
    assert 0.03 < pairs.alpha <= 0.05
    assert 0.06 < pairs.beta <= 0.10
    assert (pairs.alpha, pairs.beta) == pytest.approx((plain.alpha, plain.beta), abs=1e-12)
    assert pairs.fixed_sample is not None
    assert plain.fixed_sample is not None
    assert pairs.fixed_sample.size == plain.fixed_sample.size


def test_a_table_of_pairs_is_a_sign_test() -> None:
    """One look at 10 pairs that differ, against at 9 or more: P = 11/1024 (binomial, by hand)."""
    rows = [{"sample_number": 10, "accept": 8, "reject": 9}]
    promise = promise_of(document(PAIRED, boundaries="table", table=rows), [1.0])
    assert promise.alpha == pytest.approx(11 / 1024, abs=1e-15)
    state = posted(document(PAIRED, boundaries="table", table=rows), of_pairs([(0, 1)] * 9 + [(1, 1), (1, 0)]))
    assert (state.decision, state.sample_number) == ("reject", 10)


def test_bad_pairs_are_named() -> None:
    plan = document(PAIRED)
    assert refused(plan, {"observations": [{"a": 0, "b": 2}, {"a": 0.5, "b": 0}]}) == [
        "/observations/1/a",
        "/observations/0/b",
    ]
    assert refused(plan, {"observations": [{"b": 1}, {"a": 1, "b": 1, "value": 0}]}) == [
        "/observations/0/a",
        "/observations/1/value",
    ]
    assert refused(plan, {"values": [0, 1]}) == ["/values"]


@pytest.mark.parametrize("change", [{"h0": 0.0}, {"h1": 1e7}, {"h0": -1.0}, {"h1": 1e-7}])
def test_odds_out_of_reach_are_refused(change: dict[str, float]) -> None:
    with pytest.raises(InvalidPlan) as caught:
        document(PAIRED, **change)
    assert [fault.pointer for fault in caught.value.faults] == [f"/{name}" for name in change]


@pytest.mark.parametrize("rate", [0.3, 40.0])
@pytest.mark.parametrize(("h0", "h1", "exposure"), [(1.0, 0.5, 2.0), (0.2, 1.7, 0.01), (3.0, 3.000001, 1.0)])
def test_the_evidence_of_a_ratio_needs_no_rate(h0: float, h1: float, exposure: float, rate: float) -> None:
    source = np.random.default_rng(5)
    counts = [(int(a), int(b)) for a, b in source.poisson(3.0, (30, 2))]
    limits = {"boundaries": "given", "thresholds": {"accept": -900.0, "reject": 900.0}}
    plan = document(COUNTS, h0=h0, h1=h1, known={"exposure_ratio": exposure}, **limits)
    state = posted(plan, of_pairs(counts))
    events = sum(a + b for a, b in counts)
    slow = arms.evidence_of_counts(counts, (h0, h1), exposure, rate)
    assert abs(state.log_likelihood_ratio - float(slow)) <= 1e-12 * abs(math.log(h1 / h0)) * events
    assert (state.sample_number, state.total.value) == (events, sum(b for _, b in counts))


@pytest.mark.parametrize("ratio", [1.0, 0.7, 0.5])
def test_exact_figures_of_a_ratio_agree_with_every_path(ratio: float) -> None:
    """With twice the exposure in b an event is there with chance 2r/(1 + 2r); ratios 1 and 1/2 are odds of 2 and 1."""
    plan = document(COUNTS, truncation={"sample_number": 50})
    p = Fraction(2 * Fraction(ratio), 1 + 2 * Fraction(ratio))
    gain, slope = math.log(1 / 2), math.log(2 / 3) / math.log(1 / 2)
    lower, upper = math.log(0.90 / 0.05) / gain, math.log(0.10 / 0.95) / gain

    def limits(n: int) -> tuple[float, float]:
        if n == 50:  # Few events in b speak for H1; the sign of the evidence decides.
            return math.ceil(slope * n) - 1, math.ceil(slope * n)
        return math.floor(slope * n + lower), math.ceil(slope * n + upper)

    slow = paths.looks(limits, {0: 1 - p, 1: p}, 50)
    point = promise_of(plan, [ratio]).points[0]
    assert point.sample_number is not None
    assert point.probability_of_acceptance == pytest.approx(slow.above, abs=1e-13)
    assert point.sample_number.mean == pytest.approx(slow.mean, rel=1e-13)


def test_the_staged_vaccine_design_is_a_ratio_of_rates() -> None:
    """Protocol C4591001, Tables 6-8: efficacy is one less the ratio, with equal exposures; 30 %, 50 % and 60 %."""
    known = {"exposure_ratio": 1.0}
    plan = checked_content({**VACCINE, "family": "poisson_ratio", "h0": 0.7, "h1": 0.4, "known": known})
    promise = promise_of(plan, [0.7, 0.5, 0.4])
    assert [1 - point.probability_of_acceptance for point in promise.points] == pytest.approx(
        [0.021, 0.439, 0.866], abs=5.1e-4
    )
    cases = [point.sample_number.mean for point in promise.points if point.sample_number]
    assert cases == pytest.approx([80.29, 120.36, 103.02], abs=5.1e-3)
    assert posted(plan, [{"a": 26, "b": 6}]).decision == "reject"
    with pytest.raises(InvalidObservations, match="refused") as caught:
        posted(plan, [{"a": 20, "b": 5}, {"a": 7, "b": 1}])
    assert caught.value.faults[0].pointer == "/observations/1"


def test_a_report_of_events_is_looked_at_only_at_its_end() -> None:
    """By hand: an event in a weighs ln(3/2) = .405 for H1; eight reach ln A = 2.89, and three in b take back .863."""
    plan = document(COUNTS)
    assert posted(plan, of_pairs([(1, 0)] * 8)).decision == "reject"
    state = posted(plan, of_pairs([(8, 3), (0, 0)]))
    assert state.decision == "continue"
    assert state.log_likelihood_ratio == pytest.approx(8 * math.log(1.5) - 3 * math.log(4 / 3), rel=1e-14)
    assert (state.sample_number, state.total.value) == (11, 3)


def test_the_outlook_of_a_ratio_speaks_of_events() -> None:
    """By hand: seven events in b weigh -2.01 and eight -2.30, ln B = -2.25; 3 in b over 8 in a, halved."""
    plan = document(COUNTS)
    ways = outlook_of(plan, State()).ways
    assert ways.accept is not None
    assert ways.reject is not None
    assert (ways.accept.words, ways.reject.words) == ("8 events, all in b", "8 events, all in a")
    later = outlook_of(plan, posted(plan, of_pairs([(4, 3)])))
    assert later.estimate == pytest.approx(3 / 4 / 2, rel=1e-15)
    assert later.ways.reject is not None
    assert later.ways.reject.words == "6 events, all in a"


def test_arms_that_are_missing_or_no_counts_are_named() -> None:
    plan = document(COUNTS)
    assert refused(plan, {"observations": [{"a": 3}]}) == ["/observations/0/b"]
    assert refused(plan, {"observations": [{"a": 3, "b": -1}, {"a": 0.5, "b": 2}]}) == [
        "/observations/1/a",
        "/observations/0/b",
    ]
    assert refused(plan, {"observations": [{"a": 3, "b": 2e9}]}) == ["/observations/0/b"]
    with pytest.raises(InvalidPlan) as caught:
        document({name: value for name, value in COUNTS.items() if name != "known"})
    assert [fault.pointer for fault in caught.value.faults] == ["/known/exposure_ratio"]


def test_exposures_too_far_apart_leave_no_test() -> None:
    with pytest.raises(InvalidPlan, match="errors") as caught:
        document(COUNTS, known={"exposure_ratio": 1e9})
    assert caught.value.faults[0].pointer == "/h1"
    assert "odds of b against a from 1e-06 to 1e+06" in caught.value.faults[0].detail


@pytest.mark.parametrize(("h0", "h1"), [(0.0, 0.5), (0.2, -0.3)])
def test_the_evidence_of_a_difference_is_that_of_its_density(h0: float, h1: float) -> None:
    source = np.random.default_rng(8)
    pairs = [(float(a), float(b)) for a, b in source.normal(100.0, 0.4, (40, 2))]
    limits = {"boundaries": "given", "thresholds": {"accept": -900.0, "reject": 900.0}}
    state = posted(document(LEVELS, h0=h0, h1=h1, **limits), of_pairs(pairs))
    slow = arms.evidence_of_differences(pairs, (h0, h1), (0.3, 0.4))
    assert state.log_likelihood_ratio == pytest.approx(float(slow), rel=1e-12)
    assert state.total.value == pytest.approx(math.fsum(b - a for a, b in pairs), rel=1e-14)


def test_exact_figures_of_a_difference_are_those_of_a_mean() -> None:
    """Two independent computations of the normal test with risks .05 and a shift of one sigma: ASN 6.92007795."""
    promise = promise_of(document(LEVELS), [0.0, 0.25])
    assert [point.sample_number.mean for point in promise.points if point.sample_number] == pytest.approx(
        [6.92007795, 12.69065621], abs=5e-9
    )
    assert promise.points[0].probability_of_acceptance == pytest.approx(0.97135781, abs=5e-9)
    assert promise.points[0].wald is not None
    assert promise.points[0].wald.average == pytest.approx(5.29999, abs=5e-6)
    # (1.645 + 1.645)**2 = 10.8 pairs of a fixed sample (Neyman and Pearson).
    assert promise.fixed_sample is not None
    assert promise.fixed_sample.size == 11


def test_a_calibrated_difference_has_the_stated_risks() -> None:
    promise = promise_of(document(LEVELS, boundaries="calibrated", truncation={"sample_number": 20}), [0.0])
    assert (promise.alpha, promise.beta) == pytest.approx((0.05, 0.05), abs=1e-8)


def test_the_outlook_of_a_difference_asks_for_a_pair() -> None:
    """By hand: gain .5/.25 = 2, so the lines are n/4 - 1.4722 and n/4 + 1.4722; ln(19) = 2.9444."""
    plan = document(LEVELS)
    outlook = outlook_of(plan, posted(plan, [{"a": 10.0, "b": 10.5}]))
    assert outlook.estimate == 0.5
    assert outlook.ways.accept is not None
    assert outlook.ways.accept.words == "a pair whose b less a is at most -1.47222"
    assert outlook.ways.accept.total == pytest.approx(0.5 - math.log(19) / 2 - 0.5, rel=1e-14)
    assert outlook.ways.reject is not None
    assert outlook.ways.reject.total == pytest.approx(math.log(19) / 2, rel=1e-14)


def test_bad_measurements_of_pairs_are_named() -> None:
    plan = document(LEVELS)
    assert refused(plan, {"observations": [{"a": 1.0, "b": 1e101}]}) == ["/observations/0/b"]
    assert refused(plan, {"observations": [{"a": 1.0}]}) == ["/observations/0/b"]
    with pytest.raises(InvalidPlan) as caught:
        document(LEVELS, known={"sigma_a": 1.0, "sigma": 1.0})
    assert [fault.pointer for fault in caught.value.faults] == ["/known/sigma_b", "/known/sigma"]


def measured(order: list[bool], seed: int) -> list[dict[str, Any]]:
    values = np.random.default_rng(seed).normal(100.0, 0.35, len(order)).round(3)
    return [{"arm": "b" if is_b else "a", "value": float(x)} for is_b, x in zip(order, values, strict=True)]


@settings(max_examples=60, deadline=None)
@given(st.lists(st.booleans(), min_size=1, max_size=60), st.integers(0, 10**6), st.data())
def test_arms_measured_in_any_order_and_split_decide_as_the_likelihood_does(
    order: list[bool], seed: int, data: st.DataObject
) -> None:
    plan = document(SINGLES)
    rows = measured(order, seed)
    whole = posted(plan, rows)
    limits = procedure_of_document(plan).thresholds
    assert limits is not None
    seen: list[tuple[bool, float]] = []
    evidence, decision = 0.0, "continue"
    for is_b, row in zip(order, rows, strict=True):
        seen.append((is_b, row["value"]))
        evidence = float(arms.evidence_of_measurements(seen, (0.0, 0.5), (0.3, 0.4)))
        decision = "accept" if evidence <= limits.accept else "reject" if evidence >= limits.reject else "continue"
        if decision != "continue":
            break
    assert (whole.decision, whole.sample_number) == (decision, len(seen))
    assert whole.log_likelihood_ratio == pytest.approx(evidence, abs=1e-9)
    cut = data.draw(st.integers(0, len(rows)))
    state = State()
    for piece in (rows[:cut], rows[cut:]):
        state = observe(procedure_of_document(plan), state, {"observations": piece}, NOW) if piece else state
    assert state == whole


def test_one_at_a_time_comes_to_what_pairs_come_to() -> None:
    pairs = [(100.0, 100.4), (99.8, 100.1), (100.3, 100.2)]
    singles = [row for a, b in pairs for row in ({"arm": "a", "value": a}, {"arm": "b", "value": b})]
    in_pairs, one_by_one = posted(document(LEVELS), of_pairs(pairs)), posted(document(SINGLES), singles)
    assert one_by_one.log_likelihood_ratio == pytest.approx(in_pairs.log_likelihood_ratio, rel=1e-12)
    assert (one_by_one.exposure.value, one_by_one.sample_number) == (3.0, 6)
    assert (
        promise_of(document(SINGLES), [0.1]).points[0].exposure
        == promise_of(document(LEVELS), [0.1]).points[0].sample_number
    )
    assert promise_of(document(SINGLES), [0.1]).points[0].sample_number is None


def test_one_arm_alone_says_nothing() -> None:
    state = posted(document(SINGLES), [{"arm": "b", "value": 1e6}] * 9)
    assert (state.decision, state.log_likelihood_ratio, state.sample_number, state.exposure.value) == (
        "continue",
        0.0,
        9,
        0.0,
    )


@pytest.mark.parametrize("order", [[], [True], [False], [False, True], [False, False, True], [True, True, False]])
def test_the_way_of_single_measurements_leads_to_the_decision(order: list[bool]) -> None:
    plan = document(SINGLES)
    procedure = procedure_of_document(plan)
    state = posted(plan, measured(order, 4)) if order else State()
    ways = outlook_of(plan, state).ways
    for way, decision in ((ways.accept, "accept"), (ways.reject, "reject")):
        assert way is not None
        if not order:
            assert way.words.startswith("a pair whose b less a is")
            assert way.observations == 2
            continue
        arm, value = way.words.split()[3], float(way.words.split()[-1])
        towards = 1e-3 if "at least" in way.words else -1e-3
        for step, reached in ((towards, decision), (-towards, "continue")):
            after = observe(procedure, state, {"observations": [{"arm": arm, "value": value + step}]}, NOW)
            assert after.decision == reached, way.words
        assert way.exposure == pytest.approx(after.exposure.value - state.exposure.value)


def test_an_arm_that_is_not_there_is_named() -> None:
    plan = document(SINGLES)
    assert refused(plan, {"observations": [{"arm": "c", "value": 1.0}]}) == ["/observations/0/arm"]
    assert refused(plan, {"observations": [{"value": 1.0}]}) == ["/observations/0/arm"]
    assert refused(plan, {"observations": [{"a": 1.0, "b": 2.0}]})[:1] == ["/observations/0/arm"]
    assert refused(plan, {"values": [1.0]}) == ["/values"]
    with pytest.raises(InvalidPlan) as caught:
        document(SINGLES, truncation={"sample_number": 30})
    assert "/truncation/exposure" in [fault.pointer for fault in caught.value.faults]
