"""What inference costs after long tests, against the outlook of the plan at its beginning."""

import statistics
import time
from typing import Any

import numpy as np
import pytest

from service.domain.checking import checked_content
from service.domain.inference import Inference, _inference, _studied, inference_of
from service.domain.observing import observe
from service.domain.outlook import _outlook, outlook_of
from service.domain.procedure import procedure_of_document
from service.domain.state import State
from tests.domain.submissions import numbered
from tests.domain.test_observing import NOW

ROUNDS = 5
# A plan, and what the units, counts, lives or measurements are really like: near where neither hypothesis wins soon.
LONG: list[tuple[dict[str, Any], float]] = [
    ({"family": "bernoulli", "h0": 0.01, "h1": 0.02, "alpha": 0.01, "beta": 0.01}, 0.0144),
    ({"family": "bernoulli", "h0": 0.0001, "h1": 0.0002, "alpha": 0.01, "beta": 0.01}, 0.000144),
    ({"family": "bernoulli", "h0": 0.40, "h1": 0.43, "alpha": 0.01, "beta": 0.01}, 0.415),
    ({"family": "poisson", "h0": 0.50, "h1": 0.55, "alpha": 0.01, "beta": 0.01}, 0.5246),
    ({"family": "exponential", "h0": 110.0, "h1": 100.0, "alpha": 0.01, "beta": 0.01}, 104.9),
    ({"family": "normal", "h0": 0.0, "h1": 0.1, "alpha": 0.01, "beta": 0.01, "known": {"sigma": 1.0}}, 0.05),
    ({"family": "normal_variance", "h0": 1.0, "h1": 1.1, "alpha": 0.01, "beta": 0.01, "known": {"mean": 0.0}}, 1.048),
]


def drawn(family: str, parameter: float, source: np.random.Generator, count: int) -> list[float]:
    if family == "bernoulli":
        return [float(failed) for failed in source.random(count) < parameter]
    if family == "poisson":
        return [float(value) for value in source.poisson(parameter, count)]
    if family == "normal_variance":
        return [float(value) for value in source.normal(0.0, parameter, count)]
    draws = source.exponential(parameter, count) if family == "exponential" else source.normal(parameter, 1.0, count)
    return [float(value) for value in draws]


@pytest.mark.benchmark
@pytest.mark.parametrize(("content", "parameter"), LONG)
def test_inference_after_long_tests(content: dict[str, Any], parameter: float) -> None:
    document, source = checked_content(content), np.random.default_rng(3)
    procedure = procedure_of_document(document)
    state, submissions = State(), []
    while not state.is_decided:
        submissions.append({"values": drawn(content["family"], parameter, source, 20_000)})
        state = observe(procedure, state, submissions[-1], NOW)
    spent: list[float] = []
    found: Inference | None = None
    for _ in range(ROUNDS):
        _inference.cache_clear()
        start = time.perf_counter()
        found = inference_of(document, state, numbered(submissions), 0.95)
        spent.append(1000 * (time.perf_counter() - start))
    _outlook.cache_clear()
    start = time.perf_counter()
    outlook_of(document, State())
    beside = 1000 * (time.perf_counter() - start)
    assert found is not None
    print(f"\ninference of {content['family']} after {state.sample_number}: {statistics.median(spent):.0f} ms")
    print(f"of that the bias: {'left out' if found.bias is None else 'computed'}; outlook of the plan: {beside:.0f} ms")


# Plans of unknown spread, and the standardised mean that the measurements really have.
STUDIED: list[tuple[dict[str, Any], float]] = [
    ({"family": "normal", "h1": 0.5, "alpha": 0.05, "beta": 0.10}, 0.5),
    ({"family": "normal", "h1": 0.5, "alpha": 0.05, "beta": 0.10}, 0.0),
    ({"family": "normal", "h1": 0.5, "alpha": 0.05, "beta": 0.10, "sides": 2}, 0.0),
    ({"family": "normal", "h1": 1.5, "alpha": 0.001, "beta": 0.001}, 1.5),
    ({"family": "normal", "h1": 0.1, "alpha": 0.01, "beta": 0.01}, 0.05),
    ({"family": "normal", "h1": 0.03, "alpha": 0.01, "beta": 0.01}, 0.03),
]


@pytest.mark.benchmark
@pytest.mark.parametrize(("content", "delta"), STUDIED)
def test_inference_of_sequential_t_tests(content: dict[str, Any], delta: float) -> None:
    document = checked_content({**content, "statistic": "invariant", "h0": 0.0})
    source = np.random.default_rng(4)
    submission = {"values": [float(value) for value in source.normal(delta, 1.0, 40_000)]}
    state = observe(procedure_of_document(document), State(), submission, NOW)
    spent: list[float] = []
    found: Inference | None = None
    for _ in range(ROUNDS):
        _studied.cache_clear()
        start = time.process_time()
        found = inference_of(document, state, numbered([submission]), 0.95)
        spent.append(time.process_time() - start)
    assert found is not None
    assert found.simulated is not None
    width = (found.upper or 0.0) - (found.lower or 0.0)
    errors = found.simulated.errors
    print(
        f"\nh1 {content['h1']}, {content.get('sides', 1)} sides, {state.decision} after {state.sample_number}: "
        f"{statistics.median(spent):.2f} s of processor time, {found.simulated.courses} courses; errors of limits "
        f"{100 * errors['lower'] / width:.2f} and {100 * errors['upper'] / width:.2f} % of the width, "
        f"of p = {found.p_value:.2g} {100 * errors['p_value'] / found.p_value:.1f} %"
    )
