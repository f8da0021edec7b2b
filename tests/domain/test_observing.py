"""The one pure step against the slow reference, for every family, direction, truncation and split."""

from datetime import UTC, datetime
from functools import reduce
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from mpmath import mpf

from service.domain.checking import checked_content
from service.domain.observing import observe
from service.domain.plan import Plan
from service.domain.procedure import Procedure, procedure_of
from service.domain.state import State
from service.sequential.likelihood import LikelihoodRatio
from tests.sequential.reference import slow

NOW = datetime(2031, 5, 4, 9, 30, tzinfo=UTC)

PAIRS = {
    "bernoulli": [(0.01, 0.1), (0.1, 0.01), (0.3, 0.5), (0.62, 0.4)],
    "poisson": [(0.5, 1.5), (1.5, 0.5), (2.0, 2.5)],
    "exponential": [(200.0, 100.0), (100.0, 200.0), (150.0, 50.0)],
    "normal": [(10.0, 10.5), (10.5, 10.0), (0.0, 0.1)],
}
SIGMA = 0.7


def procedure(document: dict[str, Any]) -> Procedure:
    return procedure_of(Plan("p", checked_content(document), "", NOW, "a"))


@st.composite
def plans(draw: st.DrawFn) -> dict[str, Any]:
    family = draw(st.sampled_from(sorted(PAIRS)))
    h0, h1 = draw(st.sampled_from(PAIRS[family]))
    document: dict[str, Any] = {
        "family": family,
        "h0": h0,
        "h1": h1,
        "alpha": draw(st.sampled_from([0.05, 0.1, 0.2])),
        "beta": draw(st.sampled_from([0.05, 0.1, 0.2])),
        "boundaries": draw(st.sampled_from(["wald", "strict"])),
        "statistic": "simple",
    }
    if family == "normal":
        document["known"] = {"sigma": SIGMA}
    if draw(st.booleans()):
        document["truncation"] = draw(_truncation(family))
    return document


def _truncation(family: str) -> st.SearchStrategy[dict[str, float]]:
    if family == "exponential":
        exposure = st.sampled_from([90.0, 250.0, 700.0])
        return st.fixed_dictionaries({"exposure": exposure}, optional={"failures": st.integers(1, 6)})
    if family == "poisson":
        return st.fixed_dictionaries({"exposure": st.sampled_from([2.0, 7.5, 20.0])})
    return st.fixed_dictionaries({"sample_number": st.sampled_from([60, 130])})


@st.composite
def reports(draw: st.DrawFn, family: str, h0: float, h1: float) -> list[dict[str, Any]]:
    count = draw(st.integers(1, 120))
    source = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    truth = draw(st.sampled_from([h0, h1, (h0 * h1) ** 0.5 if h0 * h1 > 0 else h1]))
    if family == "bernoulli":
        sizes = source.integers(1, 5, count) if draw(st.booleans()) else np.ones(count, int)
        return [{"value": int(source.binomial(n, truth)), "size": int(n)} for n in sizes]
    if family == "poisson":
        exposures = source.uniform(0.1, 2.0, count).round(2)
        return [{"value": int(source.poisson(truth * e)), "exposure": float(e)} for e in exposures]
    if family == "exponential":
        limit = draw(st.sampled_from([20.0, 80.0, 1000.0]))
        lives = source.exponential(truth, count)
        return [{"time": float(min(t, limit)), "failed": bool(t < limit)} for t in lives]
    return [{"value": float(x)} for x in source.normal(truth, SIGMA, count)]


def weighed(family: str, rows: list[dict[str, Any]]) -> list[tuple[float, float]]:
    names = {"bernoulli": ("value", "size"), "poisson": ("value", "exposure"), "exponential": ("failed", "time")}
    if family == "normal":
        return [(row["value"], 1.0) for row in rows]
    result, weight = names[family]
    return [(row[result], row[weight]) for row in rows]


def slow_answer(document: dict[str, Any], rows: list[dict[str, Any]]) -> slow.Answer:
    limits = procedure(document).thresholds
    assert limits is not None
    truncation = document.get("truncation", {})
    plan = slow.Plan(
        document["family"],
        document["h0"],
        document["h1"],
        limits.accept,
        limits.reject,
        sigma=SIGMA,
        wall=truncation.get("exposure", truncation.get("sample_number")),
        cap=truncation.get("failures"),
    )
    return slow.run(plan, weighed(document["family"], rows))


@settings(max_examples=400, deadline=None)
@given(plans(), st.data())
def test_every_decision_agrees_with_the_slow_reference_in_any_split(
    document: dict[str, Any], data: st.DataObject
) -> None:
    rows = data.draw(reports(document["family"], document["h0"], document["h1"]))
    compiled = procedure(document)
    whole = observe(compiled, State(), {"observations": rows}, NOW)
    expected = slow_answer(document, rows)
    assert whole.decision == expected.decision
    assert whole.sample_number == expected.units
    assert whole.sequence == len(rows)
    assert whole.total.value == pytest.approx(float(expected.total), rel=1e-13, abs=1e-13)
    if compiled.family.has_exposure:
        assert whole.exposure.value == pytest.approx(float(expected.position), rel=1e-12)
    ratio = compiled.evidence
    assert isinstance(ratio, LikelihoodRatio)
    size = abs(ratio.gain) * (abs(whole.total.value) + abs(ratio.slope) * float(expected.position))
    assert abs(whole.log_likelihood_ratio - float(expected.evidence)) <= 1e-12 * max(1.0, size)
    if whole.decided is not None:
        assert whole.decided.cause == expected.cause
        assert whole.decided.sequence == expected.used
        assert whole.overrun == len(rows) - expected.used

    cuts = sorted(data.draw(st.sets(st.integers(1, len(rows)), max_size=6)) | {len(rows)})
    pieces = [rows[start:end] for start, end in zip([0, *cuts[:-1]], cuts, strict=True) if end > start]
    split = reduce(lambda state, piece: observe(compiled, state, {"observations": piece}, NOW), pieces, State())
    assert split == whole


def test_many_measurements_give_one_answer_however_they_are_posted(request: pytest.FixtureRequest) -> None:
    """
    In one piece, a thousand, and ten at a time; a drift between the hypotheses keeps the test running.

    A hundred thousand of them, with `--long` a million.
    """
    count = 1_000_000 if request.config.getoption("--long") else 100_000
    source = np.random.default_rng(11)
    values = source.normal(1000.00005, 0.01, count)
    document = {
        "family": "normal",
        "h0": 1000.0,
        "h1": 1000.0001,
        "alpha": 0.001,
        "beta": 0.001,
        "boundaries": "given",
        "statistic": "simple",
        "thresholds": {"accept": -1e5, "reject": 1e5},
        "known": {"sigma": 0.01},
    }
    compiled = procedure(document)

    def posted_in(pieces: int) -> State:
        state = State()
        for piece in np.split(values, pieces):
            state = observe(compiled, state, {"values": piece.tolist()}, NOW)
        return state

    one, thousand, many = posted_in(1), posted_in(1000), posted_in(count // 10)
    assert one == thousand == many
    exact = sum(map(mpf, values.tolist()), mpf(0))
    deviation = exact - len(values) * (mpf(1000.0) + mpf(1000.0001)) / 2
    evidence = (mpf(1000.0001) - mpf(1000.0)) / mpf(0.01) ** 2 * deviation
    assert one.log_likelihood_ratio == pytest.approx(float(evidence), rel=1e-12)


def test_a_decision_is_latched() -> None:
    document = {"family": "bernoulli", "h0": 0.1, "h1": 0.3, "alpha": 0.02, "beta": 0.03}
    compiled = procedure({**document, "boundaries": "wald", "statistic": "simple"})
    decided = observe(compiled, State(), {"values": [0] * 14}, NOW)
    later = observe(compiled, decided, {"values": [1] * 100}, NOW)
    assert decided.is_decided
    assert (later.decision, later.decided, later.log_likelihood_ratio) == (
        decided.decision,
        decided.decided,
        decided.log_likelihood_ratio,
    )
    assert (later.sequence, later.overrun) == (114, 100)


def test_time_comes_before_the_failure_at_the_same_instant() -> None:
    document = {"family": "exponential", "h0": 200.0, "h1": 100.0, "alpha": 0.1, "beta": 0.1, "statistic": "simple"}
    compiled = procedure({**document, "boundaries": "wald", "truncation": {"exposure": 50.0}})
    state = observe(compiled, State(), {"observations": [{"time": 50.0, "failed": True}]}, NOW)
    assert (state.decision, state.total.value, state.exposure.value) == ("accept", 0.0, 50.0)
