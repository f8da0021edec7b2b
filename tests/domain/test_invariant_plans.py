"""Plans for standardised means, and of spread about an unknown mean, against 50 digits one observation at a time."""

import itertools
import json
import math
from collections.abc import Callable
from functools import reduce
from typing import Any

import numpy as np
import pytest
from mpmath import mp, mpf, sqrt, workdps

from service.domain.assumptions import assumptions_of
from service.domain.calibrating import exact_figures
from service.domain.characteristics import promise_of
from service.domain.checking import checked_content
from service.domain.errors import ComputationTooLarge, InvalidObservations, InvalidPlan, InvalidQuestion
from service.domain.families.base import Way
from service.domain.gathering import alone
from service.domain.observing import direction_of_rejection, observe
from service.domain.outlook import outlook_of, ways_of
from service.domain.path import path_of, region_points
from service.domain.procedure import Procedure, lines_of, procedure_of_document
from service.domain.simulating import Progress, question_of, simulated_promise
from service.domain.state import State
from tests.domain.test_observing import NOW
from tests.sequential.reference import noncentral

SHIM: dict[str, Any] = {
    "family": "normal",
    "statistic": "invariant",
    "h0": 0.0,
    "h1": 0.5,
    "alpha": 0.05,
    "beta": 0.10,
    "known": {"reference": 10.0},
}
PAIRS: dict[str, Any] = {**SHIM, "family": "normal_difference", "known": None}
ARMS: dict[str, Any] = {**PAIRS, "family": "normal_two_sample"}
SPREAD: dict[str, Any] = {"family": "normal_variance", "h0": 1.0, "h1": 2.0, "alpha": 0.05, "beta": 0.10}

Rows = list[dict[str, Any]]
# From the observations so far to degrees of freedom, size and t; None where there is no t.
Seen = Callable[[Rows], tuple[int, mpf, mpf] | None]


def compiled(base: dict[str, Any], **content: Any) -> Procedure:
    return procedure_of_document(checked_content({**base, **content}))


def average(values: list[mpf]) -> mpf:
    return sum(values, mpf(0)) / len(values)


def about(values: list[mpf]) -> mpf:
    return sum(((value - average(values)) ** 2 for value in values), mpf(0)) if values else mpf(0)


def single(values: list[mpf]) -> tuple[int, mpf, mpf] | None:
    """Student's t by its definition."""
    n = len(values)
    if n < 2 or about(values) == 0:
        return None
    return n - 1, mpf(n), sqrt(mpf(n)) * average(values) / sqrt(about(values) / (n - 1))


def of_values(rows: Rows) -> tuple[int, mpf, mpf] | None:
    return single([mpf(row["value"]) - 10 for row in rows])


def of_pairs(rows: Rows) -> tuple[int, mpf, mpf] | None:
    return single([mpf(row["b"]) - mpf(row["a"]) for row in rows])


def of_arms(rows: Rows) -> tuple[int, mpf, mpf] | None:
    a, b = ([mpf(row["value"]) for row in rows if row["arm"] == arm] for arm in "ab")
    within = about(a) + about(b)
    if not a or not b or len(rows) < 3 or within == 0:
        return None
    freedom, size = len(rows) - 2, mpf(len(a)) * len(b) / len(rows)
    return freedom, size, sqrt(size) * (average(b) - average(a)) / sqrt(within / freedom)


def slow(procedure: Procedure, rows: Rows, seen: Seen, wall: int | None, sides: int) -> tuple[str, int, mpf, mpf]:
    """Decision, observations used, evidence and t, one observation at a time."""
    assert procedure.thresholds is not None
    (h0, h1), limits = procedure.hypotheses, procedure.thresholds
    evidence, t = mpf(0), mpf(0)
    for used in range(1, len(rows) + 1):
        found = seen(rows[:used])
        evidence, t = mpf(0), mpf(0)
        if found is not None:
            freedom, size, t = found
            evidence = noncentral.log_ratio(freedom, size, t, h0, h1, sides)
        if evidence <= limits.accept:
            return "accept", used, evidence, t
        if evidence >= limits.reject:
            return "reject", used, evidence, t
        if used == wall:
            return ("reject" if evidence > 0 else "accept"), used, evidence, t
    return "continue", len(rows), evidence, t


def values(seed: int, mean: float, sigma: float, count: int = 60) -> Rows:
    return [{"value": float(v)} for v in 10.0 + np.random.default_rng(seed).normal(mean, sigma, count)]


def pairs(seed: int, mean: float, sigma: float, count: int = 60) -> Rows:
    source = np.random.default_rng(seed)
    before = source.normal(50.0, 9.0, count)
    return [{"a": float(a), "b": float(a + d)} for a, d in zip(before, source.normal(mean, sigma, count), strict=True)]


def arms(seed: int, mean: float, sigma: float, count: int = 60) -> Rows:
    source = np.random.default_rng(seed)
    chosen = source.integers(0, 2, count)
    return [
        {"arm": "ab"[int(i)], "value": float(v + i * mean)}
        for i, v in zip(chosen, source.normal(7.0, sigma, count), strict=True)
    ]


EQUAL: Rows = [{"value": 10.4}] * 5
CASES: list[tuple[dict[str, Any], dict[str, Any], Rows, Seen]] = [
    (SHIM, {}, values(1, 0.6, 1.2), of_values),
    (SHIM, {}, values(2, 0.0, 1e-6), of_values),
    (SHIM, {"h0": 0.3, "h1": -0.4}, values(3, -0.5, 1.0), of_values),
    (SHIM, {"sides": 2, "h1": 0.8}, values(4, -1.0, 1.0), of_values),
    (SHIM, {"sides": 2, "h1": 1.2}, values(5, 0.0, 1.0), of_values),
    (SHIM, {"truncation": {"sample_number": 8}}, values(6, 0.2, 1.0), of_values),
    (SHIM, {"truncation": {"sample_number": 4}}, EQUAL, of_values),
    (SHIM, {"boundaries": "given", "thresholds": {"accept": -1.0, "reject": 9.0}}, values(7, 1.0, 1.0), of_values),
    (SHIM, {"boundaries": "strict"}, [*EQUAL, *values(8, 0.9, 1.0)], of_values),
    (PAIRS, {}, pairs(9, 0.7, 1.0), of_pairs),
    (ARMS, {"h1": 1.0}, arms(10, 1.0, 1.0), of_arms),
    (ARMS, {"h1": -1.0}, arms(11, 0.0, 1.0), of_arms),
    (ARMS, {"h1": 1.0, "sides": 2, "truncation": {"sample_number": 30}}, arms(12, -0.9, 1.0), of_arms),
]


@pytest.mark.parametrize(("base", "change", "rows", "seen"), CASES)
def test_decisions_are_those_of_the_noncentral_t(
    base: dict[str, Any], change: dict[str, Any], rows: Rows, seen: Seen
) -> None:
    procedure = compiled(base, **change)
    whole = observe(procedure, State(), {"observations": rows}, NOW)
    for cut in (1, 2, 7):
        pieces = [{"observations": piece} for piece in (rows[:cut], rows[cut:]) if piece]
        assert reduce(lambda state, piece: observe(procedure, state, piece, NOW), pieces, State()) == whole
    single_file = reduce(lambda state, row: observe(procedure, state, {"observations": [row]}, NOW), rows, State())
    assert single_file == whole
    wall = change.get("truncation", {}).get("sample_number")
    with workdps(50):
        decision, used, evidence, t = slow(procedure, rows, seen, wall, change.get("sides", 1))
    assert decision != "continue"
    assert (whole.decision, whole.sample_number) == (decision, used)
    assert whole.log_likelihood_ratio == pytest.approx(float(evidence), abs=1e-11)
    assert whole.total.value == pytest.approx(float(t), rel=1e-12, abs=1e-12)
    if decision == "reject" and change.get("sides") == 2:
        assert direction_of_rejection(procedure, whole) == ("above" if t > 0 else "below")
    path = path_of(procedure, [alone({"observations": rows})], 500)
    assert path.log_likelihood_ratio[-1] == whole.log_likelihood_ratio
    assert path.total[-1] == whole.total.value
    assert len(path.sequence) == used + 1


def test_measurements_far_from_zero_and_near_each_other_keep_their_digits() -> None:
    """
    Spread of 1e-3 about 1e9 in the arms, where plain sums of squares would know nothing of it.

    `studentised` states 1e-14 for a spread of 1e-8 of the size, and two digits less for each digit further: here 1e-6.
    """
    rows = [{"arm": "ab"[i % 2], "value": 1e9 + v} for i, v in enumerate(np.random.default_rng(3).normal(0, 1e-3, 9))]
    procedure = compiled(ARMS)
    with workdps(50):
        found = of_arms(rows)
    assert found is not None
    state = observe(procedure, State(), {"observations": rows}, NOW)
    assert state.total.value == pytest.approx(float(found[2]), rel=1e-6)


@pytest.mark.parametrize("change", [{}, {"h1": -0.6}, {"sides": 2, "h1": 1.0}, {"truncation": {"sample_number": 30}}])
def test_the_region_that_is_drawn_is_where_the_ratio_comes_to_the_thresholds(change: dict[str, Any]) -> None:
    procedure = compiled(SHIM, **change)
    thresholds = procedure.thresholds
    assert thresholds is not None
    h0, h1 = procedure.hypotheses
    wall = change.get("truncation", {}).get("sample_number")
    sides = change.get("sides", 1)
    points = [point for point in region_points(procedure, 30.0) if point.progress in (4.0, 12.0, 30.0)]
    assert len(points) == 3
    for point in points:
        n = int(point.progress)
        accept, reject = (0.0, 0.0) if n == wall else (thresholds.accept, thresholds.reject)
        for limit, expected in ((point.accept, accept), (point.reject, reject)):
            if limit is not None:
                at_limit = noncentral.log_ratio(n - 1, n, limit, h0, h1, sides)
                assert float(at_limit) == pytest.approx(expected, abs=1e-10)
        assert (point.reject_below is None) == (sides == 1 or point.reject is None)
    assert points[1].accept is not None
    assert points[2].reject is not None


def ends(way: Way) -> list[float]:
    """The numbers in the words of a way."""
    found = []
    for word in way.words.split():
        try:
            found.append(float(word.rstrip(",")))
        except ValueError:
            continue
    return found


@pytest.mark.parametrize("change", [{}, {"h1": -0.6}, {"sides": 2, "h1": 1.0}, {"truncation": {"sample_number": 9}}])
@pytest.mark.parametrize("base", [SHIM, ARMS])
def test_the_ways_say_which_single_measurement_decides(base: dict[str, Any], change: dict[str, Any]) -> None:
    """From many standings; the ends of an interval decide inside of it, and do not outside."""
    if base is ARMS and "truncation" in change:
        change = {"truncation": {"sample_number": 10}}
    # Two samples see no limit so early where the hypotheses are near.
    procedure, met = compiled(base, **(change if base is SHIM else {"h1": 1.0, **change})), set()
    for seed in range(10):
        source = np.random.default_rng(seed)
        size = int(source.integers(2, 9 if base is SHIM else 20))
        made = values if base is SHIM else arms
        state = observe(procedure, State(), {"observations": made(seed, source.normal(), 1.0, size)}, NOW)
        if state.is_decided:
            continue
        ways = ways_of(procedure, state)

        def after(value: float, state: State = state, ways: Any = ways) -> str:
            row: dict[str, Any] = {"value": value}
            if base is ARMS:
                row["arm"] = (ways.accept or ways.reject).words.split()[3]
            return str(observe(procedure, state, {"observations": [row]}, NOW).decision)

        grid = [float(x) for x in np.linspace(-60.0, 80.0, 29)]
        for decision, way in (("accept", ways.accept), ("reject", ways.reject)):
            if way is None:
                if ways.accept or ways.reject or base is SHIM:
                    assert decision not in {after(value) for value in grid}
                continue
            met.add(decision)
            for end in ends(way):
                away = 1e-6 * max(1.0, abs(end))
                assert (after(end - away) == decision) != (after(end + away) == decision), way.words
    assert met


def test_no_single_measurement_makes_a_t_of_nothing() -> None:
    assert outlook_of(checked_content(SHIM), State()).ways.accept is None
    outlook = outlook_of(checked_content(SHIM), observe(compiled(SHIM), State(), {"values": [10.1, 10.3]}, NOW))
    assert outlook.expected == ()
    assert outlook.reason is not None
    assert outlook.estimate == pytest.approx(0.2 / 0.1)


def test_a_long_submission_decides_where_its_parts_do() -> None:
    """The decision falls in the third thousand, far from where a submission is cut for the work."""
    plan = compiled(SHIM, h0=-0.02, h1=0.02, boundaries="given", thresholds={"accept": -2.0, "reject": 3.0})
    rows = (10.0 + np.random.default_rng(5).normal(0.0, 1.0, 9000)).tolist()
    whole = observe(plan, State(), {"values": rows}, NOW)
    assert 1024 < whole.sample_number < 9000
    pieces = [{"values": rows[begin : begin + 700]} for begin in range(0, 9000, 700)]
    assert reduce(lambda state, piece: observe(plan, state, piece, NOW), pieces, State()) == whole
    assert (whole.sequence, whole.sample_number + whole.overrun) == (9000, 9000)


def test_all_equal_measurements_say_nothing_and_go_on() -> None:
    state = observe(compiled(SHIM), State(), {"values": [12.0] * 500}, NOW)
    assert (state.decision, state.log_likelihood_ratio, state.total.value) == ("continue", 0.0, 0.0)
    assert state.sample_number == 500


BAD: list[tuple[dict[str, Any], dict[str, Any], str]] = [
    (SHIM, {"known": {"sigma": 1.0}}, "/known/sigma"),
    (ARMS, {"known": {"reference": 0.0}}, "/known/reference"),
    (SHIM, {"h1": 0.0}, "/h1"),
    (SHIM, {"h1": 1e-9}, "/h1"),
    (SHIM, {"h1": 101.0}, "/h1"),
    (SHIM, {"h1": None}, "/h1"),
    (SHIM, {"beta": None}, "/beta"),
    (SHIM, {"sides": 2, "h0": 0.1}, "/h0"),
    (SHIM, {"sides": 2, "h1": -0.5}, "/h1"),
    (SHIM, {"sides": 3}, "/sides"),
    (SHIM, {"direction": "above"}, "/direction"),
    (SHIM, {"truncation": {"sample_number": 1}}, "/truncation/sample_number"),
    (ARMS, {"truncation": {"sample_number": 2}}, "/truncation/sample_number"),
    (ARMS, {"truncation": {"sample_number": 21}}, "/truncation/sample_number"),
    (ARMS, {"truncation": {"exposure": 20.0}}, "/truncation/exposure"),
    (SHIM, {"boundaries": "given", "thresholds": {"reject": 2.0}}, "/thresholds/accept"),
    (SHIM, {"boundaries": "table"}, "/boundaries"),
    (SHIM, {"family": "bernoulli", "known": None}, "/statistic"),
    (SHIM, {"known": {"prior": {"tau": 1.0}}}, "/known/prior"),
    (SHIM, {"boundaries": "calibrated", "truncation": {"sample_number": 5}}, "/truncation"),
    (SPREAD, {"known": {"sigma": 1.0}}, "/known/sigma"),
    (SPREAD, {"truncation": {"sample_number": 1}}, "/truncation/sample_number"),
]


@pytest.mark.parametrize(("base", "change", "pointer"), BAD)
def test_a_plan_that_cannot_be_right_names_the_field(
    base: dict[str, Any], change: dict[str, Any], pointer: str
) -> None:
    with pytest.raises(InvalidPlan) as caught:
        checked_content({**base, **change})
    assert pointer in [fault.pointer for fault in caught.value.faults]


def test_a_difference_too_small_to_square_is_refused() -> None:
    with pytest.raises(InvalidObservations):
        observe(compiled(SHIM, known={"reference": 0.0}), State(), {"values": [1e-200, 1.0]}, NOW)
    for extreme in ([1e100, -1e100, 3e99], [1e-100, 2e-100, 1e-100]):
        state = observe(compiled(SHIM, known={"reference": 0.0}), State(), {"values": extreme}, NOW)
        assert math.isfinite(state.log_likelihood_ratio)
        assert math.isfinite(state.total.value)


@pytest.mark.parametrize(
    "change",
    [
        {"h1": 1e-3},
        {"h1": 1e-4, "boundaries": "calibrated"},
        {"boundaries": "given", "thresholds": {"accept": -1e6, "reject": 1e6}},
    ],
)
def test_what_would_take_for_ever_is_refused_at_once(change: dict[str, Any]) -> None:
    with pytest.raises(ComputationTooLarge):
        question_of(checked_content({**SHIM, **change}), [], None)


def test_simulated_figures_agree_with_plain_courses() -> None:
    """1,000 courses of the plan itself, drawn and decided as observations are; four standard errors apart at most."""
    plan = checked_content({**SHIM, "h1": 0.8, "truncation": {"sample_number": 40}})
    procedure, source, seen = procedure_of_document(plan), np.random.default_rng(11), list[Progress]()
    promise = simulated_promise(question_of(plan, [0.8], 5), seen.append)
    assert promise.simulation is not None
    assert promise.simulation.seed == 5
    assert seen[-1].courses == promise.simulation.courses
    assert promise == simulated_promise(question_of(plan, [0.8], 5), seen.append)
    courses, accepted, used = 1000, 0, 0
    for row in 10.0 + 0.3 * source.normal(0.8, 1.0, (courses, 40)):
        state = observe(procedure, State(), {"values": row.tolist()}, NOW)
        accepted += state.decision == "accept"
        used += state.sample_number
    point = promise.points[0]
    assert point.sample_number is not None
    assert point.probability_error is not None
    assert point.probability_error <= 5e-4
    assert abs(accepted / courses - point.probability_of_acceptance) < 4 * math.sqrt(0.25 / courses)
    assert abs(used / courses - point.sample_number.mean) < 4 * point.sample_number.standard_deviation / courses**0.5
    assert promise.simulation.least_at_h0 < point.sample_number.mean


def test_figures_of_two_arms_count_units() -> None:
    plan = checked_content({**ARMS, "h1": 1.0, "truncation": {"sample_number": 30}})
    point = simulated_promise(question_of(plan, [1.0], None), lambda _: None).points[0]
    assert point.sample_number is not None
    assert set(point.sample_number.quantiles.values()) <= set(range(4, 31, 2))


def test_exact_figures_are_refused_and_say_why() -> None:
    with pytest.raises(InvalidQuestion, match="simulated"):
        promise_of(checked_content(SHIM), [0.0])
    procedure = compiled(SHIM)
    with pytest.raises(InvalidQuestion, match="simulated"):
        exact_figures(procedure, procedure.hypotheses)
    with pytest.raises(InvalidQuestion):
        question_of(checked_content(SHIM), [101.0], None)
    with pytest.raises(InvalidQuestion):
        question_of(checked_content(SHIM), [0.0], -1)


def test_calibrated_limits_keep_both_risks_with_the_confidence_stated() -> None:
    content = {**SHIM, "h1": 1.5, "boundaries": "calibrated", "truncation": {"sample_number": 14}}
    document = checked_content(content)
    attained = json.loads(document)["attained"]
    assert attained["alpha"] < attained["alpha_limit"] <= 0.05
    assert attained["beta"] < attained["beta_limit"] <= 0.10
    assert (attained["confidence"], attained["seed"]) == (0.95, 1)
    again = simulated_promise(question_of(document, [0.0], 99), lambda _: None)
    assert again.simulation is not None
    apart = abs(again.alpha - attained["alpha"])
    assert apart < 4 * math.hypot(again.simulation.alpha_error, attained["alpha_standard_error"])


def test_the_checks_of_unknown_spread_say_nothing_about_a_known_one() -> None:
    names: dict[str, list[str]] = {}
    for base, rows in ((SHIM, values(1, 0.0, 1.0, 20)), (PAIRS, pairs(1, 0.0, 1.0, 20)), (ARMS, arms(1, 0.0, 1.0, 24))):
        procedure = compiled(base, boundaries="given", thresholds={"accept": -90.0, "reject": 90.0})
        body = json.dumps({"observations": rows})
        found = assumptions_of(procedure, observe(procedure, State(), {"observations": rows}, NOW), [(1, body)])
        names[base["family"]] = [check.name for check in found.checks]
        assert all(check.found is not None for check in found.checks)
        assert assumptions_of(procedure, State(), []).made == 0
    order = ["runs", "autocorrelation", "trend"]
    assert names["normal"] == names["normal_difference"] == [*order, "shape"]
    assert names["normal_two_sample"] == [*order, "equal_spread", "shape"]


def about_mean(procedure: Procedure, rows: list[float], wall: int | None) -> tuple[str, int, mpf, mpf]:
    """The density of the deviations from their own mean: chi-square with one degree of freedom less."""
    assert procedure.thresholds is not None
    (h0, h1), evidence, squares = procedure.hypotheses, mpf(0), mpf(0)
    for used in range(1, len(rows) + 1):
        squares = about([mpf(value) for value in rows[:used]])
        evidence = squares / 2 * (1 / mpf(h0) ** 2 - 1 / mpf(h1) ** 2) - (used - 1) * mp.log(mpf(h1) / mpf(h0))
        if evidence <= procedure.thresholds.accept:
            return "accept", used, evidence, squares
        if evidence >= procedure.thresholds.reject:
            return "reject", used, evidence, squares
        if used == wall:
            return ("reject" if evidence > 0 else "accept"), used, evidence, squares
    return "continue", len(rows), evidence, squares


@pytest.mark.parametrize(
    ("hypotheses", "sigma", "wall", "mean"),
    [*itertools.product([(1.0, 2.0), (2.0, 1.0)], [1.0, 1.5, 2.0], [None, 2, 7], [0.0, 1e7])],
)
def test_spread_about_an_unknown_mean_agrees_with_its_density(
    hypotheses: tuple[float, float], sigma: float, wall: int | None, mean: float
) -> None:
    change = {"truncation": {"sample_number": wall}} if wall else {}
    procedure = compiled(SPREAD, h0=hypotheses[0], h1=hypotheses[1], **change)
    rows = np.random.default_rng(int(10 * sigma)).normal(mean, sigma, 40).tolist()
    whole = observe(procedure, State(), {"values": rows}, NOW)
    assert whole == reduce(lambda state, row: observe(procedure, state, {"values": [row]}, NOW), rows, State())
    with workdps(50):
        decision, used, evidence, squares = about_mean(procedure, rows, wall)
    assert (whole.decision, whole.sample_number) == (decision, used)
    assert whole.log_likelihood_ratio == pytest.approx(float(evidence), abs=1e-12 * max(1.0, float(squares)))
    assert whole.total.value == pytest.approx(float(squares), rel=1e-14)


def test_figures_about_an_unknown_mean_are_one_unit_longer() -> None:
    """Helmert (1876): n measurements about their mean are n - 1 about a known one."""
    known = promise_of(checked_content({**SPREAD, "known": {"mean": 0.0}, "truncation": {"sample_number": 19}}), [1.5])
    unknown = promise_of(checked_content({**SPREAD, "truncation": {"sample_number": 20}}), [1.5])
    assert (unknown.alpha, unknown.beta) == (known.alpha, known.beta)
    one, other = unknown.points[0].sample_number, known.points[0].sample_number
    assert one is not None
    assert other is not None
    assert one.mean == other.mean + 1
    assert one.quantiles == {q: value + 1 for q, value in other.quantiles.items()}
    assert unknown.fixed_sample is not None
    assert known.fixed_sample is not None
    assert unknown.fixed_sample.size == known.fixed_sample.size + 1
    plan = checked_content({**SPREAD, "truncation": {"sample_number": 20}})
    outlook = outlook_of(plan, State())
    assert outlook.room is not None
    assert outlook.room.sample_number == 20
    further = outlook.expected[0].further_sample_number
    first = promise_of(plan, [1.0]).points[0].sample_number
    assert first is not None
    assert further is not None
    assert further.mean == pytest.approx(first.mean, rel=1e-12)
    later = outlook_of(plan, observe(procedure_of_document(plan), State(), {"values": [5.0]}, NOW))
    assert later.room is not None
    assert later.room.sample_number == 19
    assert later.expected[0].further_sample_number is not None
    assert later.expected[0].further_sample_number.mean == pytest.approx(first.mean - 1, rel=1e-12)


@pytest.mark.parametrize("begun", [[], [5.0], [5.5, 3.0, 4.0]])
def test_the_ways_about_an_unknown_mean_decide_and_a_little_less_does_not(begun: list[float]) -> None:
    procedure = compiled(SPREAD)
    state = observe(procedure, State(), {"values": begun}, NOW) if begun else State()
    ways = ways_of(procedure, state)
    assert ways.accept is not None
    assert ways.reject is not None
    needed = ways.accept.observations
    assert needed is not None
    centre = float(np.mean(begun)) if begun else 8.0
    assert observe(procedure, state, {"values": [centre] * needed}, NOW).decision == "accept"
    assert observe(procedure, state, {"values": [centre] * (needed - 1)}, NOW).decision == "continue"
    far = float(ways.reject.words.split(" at least ")[1].split()[0])
    first = [] if begun else [centre]
    assert observe(procedure, state, {"values": [*first, centre + far * 1.00001]}, NOW).decision == "reject"
    assert observe(procedure, state, {"values": [*first, centre + far * 0.99999]}, NOW).decision == "continue"


def test_the_lines_about_an_unknown_mean_run_over_the_sample_number() -> None:
    procedure = compiled(SPREAD)
    lines, point = lines_of(procedure), region_points(procedure, 12.0)[-1]
    assert lines is not None
    assert point.accept == pytest.approx(lines.slope * point.progress - lines.accept_intercept, rel=1e-12)
    assert point.reject == pytest.approx(lines.slope * point.progress + lines.reject_intercept, rel=1e-12)
    assert lines_of(compiled(SHIM)) is None
