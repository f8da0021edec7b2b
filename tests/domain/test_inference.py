"""Inference from a plan's document and a state: which looks count, and regions that reject on both sides."""

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from scipy.stats import norm

from service.domain.checking import checked_content
from service.domain.errors import ComputationTooLarge
from service.domain.inference import Inference, inference_at, inference_of, looks_of
from service.domain.observing import observe
from service.domain.procedure import procedure_of_document
from service.domain.state import Decision, State, Sum
from service.sequential.tables import UnitTable
from tests.domain.submissions import numbered
from tests.domain.test_observing import NOW

SEAL = {"family": "bernoulli", "h0": 0.01, "h1": 0.10, "alpha": 0.05, "beta": 0.10}
WELD = {"family": "poisson", "h0": 0.5, "h1": 1.5, "alpha": 0.05, "beta": 0.10}
PUMP = {"family": "exponential", "h0": 1000.0, "h1": 500.0, "alpha": 0.10, "beta": 0.10}


def after(content: dict[str, Any], *submissions: dict[str, Any]) -> Inference:
    document, state = checked_content(content), State()
    for submission in submissions:
        state = observe(procedure_of_document(document), state, submission, NOW)
    return inference_of(document, state, numbered(submissions), 0.95)


def test_units_posted_one_by_one_need_no_log() -> None:
    document = checked_content(SEAL)
    state = observe(procedure_of_document(document), State(), {"values": [0, 1, 1]}, NOW)

    def unread() -> Any:
        raise AssertionError("the log was read")
        yield

    assert looks_of(procedure_of_document(document), state, unread()).progress.tolist() == [1.0, 2.0, 3.0]


def test_any_split_of_the_submissions_gives_the_same_answer() -> None:
    groups = [{"value": 0, "size": 10}, {"value": 1, "size": 7}, {"value": 2, "size": 10}, {"value": 0, "size": 3}]
    whole = after(SEAL, {"observations": groups})
    assert after(SEAL, *({"observations": [group]} for group in groups)) == whole
    assert after(SEAL, {"observations": groups[:2]}, {"observations": groups[2:]}) == whole
    assert after(SEAL, {"observations": groups[:3]}) == whole


def test_groups_of_one_size_have_a_bias() -> None:
    """As if later groups were to be of that size as well."""
    groups = [{"value": 0, "size": 10}, {"value": 1, "size": 10}, {"value": 2, "size": 10}]
    assert after(SEAL, {"observations": groups}).bias is not None
    assert after(SEAL, {"observations": [*groups[:2], {"value": 2, "size": 9}]}).bias is None


def test_failures_at_time_zero_say_nothing_about_the_life() -> None:
    found = after(PUMP, {"values": [0.0] * 9})
    assert found.p_value == 0.0
    assert (found.lower, found.upper, found.maximum_likelihood) == (None, None, None)
    assert "probability zero" in found.reasons["lower"]


@pytest.mark.parametrize(("total", "decision"), [(9.0, Decision.REJECT), (0.0, Decision.REJECT)])
def test_a_region_that_rejects_on_both_sides_doubles_the_smaller_tail(total: float, decision: Decision) -> None:
    """One look after 10 units: reject at 1 or fewer and at 9 or more, two-sided about p = 1/2."""
    procedure = procedure_of_document(checked_content({**SEAL, "h0": 0.5, "h1": 0.8}))
    table = UnitTable((10, 11), (1.0, 5.0), (9.0, 6.0), Decision.REJECT, Decision.REJECT)
    state = State()
    two_sided = replace(procedure, region=table)
    looks = looks_of(
        replace(procedure, region=table),
        observe(two_sided, state, {"observations": [{"value": total, "size": 10}]}, NOW),
        [],
    )
    found = inference_at(two_sided, looks, Sum(total), decision, 0.95)
    exact = {9.0: 11 / 1024, 0.0: 1 / 1024}[total]
    assert found.p_value == pytest.approx(2 * exact, rel=1e-12)


def test_measurements_too_far_between_their_limits_are_too_much() -> None:
    content = {"family": "normal", "h0": 0.0, "h1": 0.001, "alpha": 0.05, "beta": 0.05, "known": {"sigma": 1.0}}
    with pytest.raises(ComputationTooLarge):
        after(content, {"values": [2000.0, 2000.0]})


def test_enormous_counts_cost_no_more_than_others() -> None:
    """A last report that only a misread field explains: the first was then as high as the region let it be."""
    reports = [{"value": 1, "exposure": 1.0}, {"value": 900_000_000, "exposure": 0.5}]
    found = after(WELD, {"observations": reports})
    # 0, 1, 2 or 3 counts in the first report; each more is likelier by 2 * 900,000,001 / counts, so it was the most.
    reject = 4
    assert found.unbiased == pytest.approx(reject - 1, rel=1e-8)
    assert found.lower is not None
    assert 0.0 < found.lower < (found.median_unbiased or 0.0) < (found.upper or 0.0)
    assert after(WELD, {"observations": reports[1:]}).unbiased == pytest.approx(1.8e9)


@pytest.mark.parametrize("last", [1e4, -1e4, 1e90])
def test_a_misread_measurement_still_has_an_answer(last: float) -> None:
    content = {"family": "normal", "h0": 0.0, "h1": 1.0, "alpha": 0.05, "beta": 0.1, "known": {"sigma": 1.0}}
    alone = after(content, {"values": [last]})
    assert [alone.lower, alone.upper] == pytest.approx([last, last], rel=1e-3)
    found = after(content, {"values": [0.5, last]})
    low, high = np.log(0.1 / 0.95) + 0.5, np.log(0.9 / 0.05) + 0.5
    # The first measurement, given so large a sum, was as far out as the region let it be.
    assert found.unbiased == pytest.approx(high if last > 0 else low, abs=1e-2)
    assert found.lower is not None
    assert found.lower < (found.median_unbiased or 0.0) < (found.upper or 0.0)


def test_a_mean_measured_twice() -> None:
    """Two measurements, the first inside: both tails by one integral over it."""
    content = {"family": "normal", "h0": 0.0, "h1": 1.0, "alpha": 0.1, "beta": 0.1, "known": {"sigma": 1.0}}
    found = after(content, {"values": [1.0, 3.0]})
    low, high = 0.5 - np.log(9.0), 0.5 + np.log(9.0)
    x, weights = np.polynomial.legendre.leggauss(60)
    x, weights = low + (high - low) * (x + 1) / 2, (high - low) / 2 * weights
    exact = norm.sf(high) + float(np.sum(weights * norm.pdf(x) * norm.sf(4.0 - x)))
    assert found.p_value == pytest.approx(exact, rel=1e-10)
