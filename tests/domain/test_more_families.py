"""Families by transformation or with something known, against their densities, observation by observation."""

from collections.abc import Callable
from functools import reduce
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from mpmath import log, mpf

from service.domain.characteristics import promise_of
from service.domain.checking import checked_content
from service.domain.observing import observe
from service.domain.outlook import outlook_of, ways_of
from service.domain.procedure import Procedure, procedure_of_document
from service.domain.state import State
from tests.domain.test_observing import NOW
from tests.sequential.reference import densities

RISKS = {"alpha": 0.05, "beta": 0.10}

Likelihood = Callable[[Any, float], mpf]


def compiled(**content: Any) -> Procedure:
    return procedure_of_document(checked_content({**RISKS, **content}))


def slow(procedure: Procedure, values: list[Any], density: Likelihood, wall: int | None) -> tuple[str, int, mpf]:
    """Decision, observations used and evidence, by multiplying densities."""
    assert procedure.thresholds is not None
    (h0, h1), limits, evidence = procedure.hypotheses, procedure.thresholds, mpf(0)
    for used, value in enumerate(values, start=1):
        evidence += log(density(value, h1)) - log(density(value, h0))
        if evidence <= limits.accept:
            return "accept", used, evidence
        if evidence >= limits.reject:
            return "reject", used, evidence
        if used == wall:
            return ("reject" if evidence > 0 else "accept"), used, evidence
    return "continue", len(values), evidence


def agrees(procedure: Procedure, values: list[Any], density: Likelihood, cut: int, wall: int | None = None) -> None:
    """The fast answer is the slow one, and the same bits in one submission and in two."""
    whole = observe(procedure, State(), {"values": values}, NOW)
    pieces = [piece for piece in (values[:cut], values[cut:]) if piece]
    split = reduce(lambda state, piece: observe(procedure, state, {"values": piece}, NOW), pieces, State())
    assert split == whole
    decision, used, evidence = slow(procedure, values, density, wall)
    assert (whole.decision, whole.sample_number) == (decision, used)
    size = abs(procedure.ratio.gain) * (abs(whole.total.value) + abs(procedure.ratio.slope) * used)
    assert abs(whole.log_likelihood_ratio - float(evidence)) <= 1e-12 * max(1.0, size)


@settings(max_examples=60, deadline=None)
@given(
    st.sampled_from([(10.0, 15.0), (15.0, 10.0), (1e-6, 2e-6), (300.0, 310.0)]),
    st.sampled_from([0.3, 1.0, 2.5]),
    st.sampled_from([0.0, 0.5, 1.0]),
    st.integers(0, 2**32 - 1),
    st.integers(1, 90),
    st.sampled_from([None, 20]),
)
def test_lognormal_agrees_with_its_density(
    medians: tuple[float, float], sigma: float, place: float, seed: int, cut: int, wall: int | None
) -> None:
    known = {"sigma": sigma}
    truncation = {"truncation": {"sample_number": wall}} if wall else {}
    procedure = compiled(family="lognormal", h0=medians[0], h1=medians[1], known=known, **truncation)
    median = medians[0] ** (1 - place) * medians[1] ** place
    values = np.random.default_rng(seed).lognormal(np.log(median), sigma, 90).tolist()
    agrees(procedure, values, lambda x, theta: densities.lognormal(x, theta, sigma), cut, wall)


def test_lognormal_has_the_exact_figures_of_its_logarithm() -> None:
    """One sigma apart, alpha = beta = .05: the normal plan's figures, by two independent computations to 12 digits."""
    plan = checked_content(
        {"family": "lognormal", "h0": 20.0, "h1": 20.0 * np.e, "alpha": 0.05, "beta": 0.05, "known": {"sigma": 1.0}}
    )
    promise = promise_of(plan, [20.0, 20.0 * np.e**0.5])
    assert promise.points[0].probability_of_acceptance == pytest.approx(0.97135781, abs=5e-9)
    means = [point.sample_number.mean for point in promise.points if point.sample_number]
    assert means == pytest.approx([6.92007795, 12.69065621], abs=5e-9)
    assert promise.error_bound < 1e-10
    assert promise.points[0].siegmund is not None
    assert promise.fixed_sample is not None
    assert promise.fixed_sample.size == 11


def test_the_ways_of_lognormal_are_measurements_that_decide() -> None:
    procedure = compiled(family="lognormal", h0=10.0, h1=15.0, known={"sigma": 0.5})
    begun = observe(procedure, State(), {"values": [11.0, 14.0]}, NOW)
    ways = ways_of(procedure, begun)
    assert ways.accept is not None
    assert ways.reject is not None
    for way, decision, inside in ((ways.accept, "accept", 1.001), (ways.reject, "reject", 0.999)):
        edge = np.exp(way.total)
        assert way.words.endswith(f"{edge:.6g}")
        outside = edge / inside**0.001
        assert observe(procedure, begun, {"values": [outside]}, NOW).decision == decision
        assert observe(procedure, begun, {"values": [edge * inside]}, NOW).decision == "continue"


def test_the_estimate_of_lognormal_is_the_geometric_mean() -> None:
    plan = checked_content({**RISKS, "family": "lognormal", "h0": 10.0, "h1": 15.0, "known": {"sigma": 0.5}})
    state = observe(procedure_of_document(plan), State(), {"values": [9.0, 16.0]}, NOW)
    outlook = outlook_of(plan, state)
    assert outlook.estimate == pytest.approx(12.0, rel=1e-14)
    assert [part.under for part in outlook.expected] == ["h0", "h1", "estimate"]
