"""Inference after tests of spread, from a plan's document on: the mean known and not known."""

import math
from typing import Any

import numpy as np
import pytest
from scipy.stats import chi, chi2

from service.domain.checking import checked_content
from service.domain.inference import Inference, inference_of, looks_of
from service.domain.observing import observe
from service.domain.procedure import procedure_of_document
from service.domain.state import State
from tests.domain.submissions import numbered
from tests.domain.test_inference import after
from tests.domain.test_observing import NOW

BORE: dict[str, Any] = {"family": "normal_variance", "h0": 1.0, "h1": 2.0, "alpha": 0.05, "beta": 0.10}
KNOWN = {**BORE, "known": {"mean": -3.0}}
WIDE = {"boundaries": "given", "thresholds": {"accept": -300.0, "reject": 300.0}, "truncation": {"sample_number": 5}}


def figures(found: Inference) -> list[float]:
    """All but the bias; not a number where there is none."""
    limits = (found.median_unbiased, found.unbiased, found.lower, found.upper)
    return [found.p_value, *(math.nan if one is None else one for one in (found.maximum_likelihood, *limits))]


def about_mean(deviations: list[float]) -> list[float]:
    """Measurements, one more, whose deviations from the average of those before them are worth these (Helmert)."""
    values = [10.0]
    for i, deviation in enumerate(deviations, start=1):
        values.append(math.fsum(values) / i + deviation * math.sqrt((i + 1.0) / i))
    return values


@pytest.mark.parametrize("deviations", [[1.9, -2.2, 3.0], [0.3, 0.2, -0.4, 0.1, 0.2], [4.5]])
@pytest.mark.parametrize("change", [{}, {"h0": 2.0, "h1": 1.0}, {"truncation": {"sample_number": 4}}])
def test_an_unknown_mean_costs_one_measurement_and_nothing_else(deviations: list[float], change: Any) -> None:
    known, unknown = {**KNOWN, **change}, {**BORE, **change}
    if "truncation" in change:
        unknown["truncation"] = {"sample_number": 5}
    of_known = after(known, {"values": [value - 3.0 for value in deviations]})
    of_unknown = after(unknown, {"values": about_mean(deviations)})
    assert figures(of_unknown) == pytest.approx(figures(of_known), rel=1e-9)
    assert of_unknown.bias == pytest.approx(of_known.bias, rel=1e-9)
    assert of_unknown.reasons == of_known.reasons == {}


@pytest.mark.parametrize("content", [KNOWN, BORE])
def test_each_measurement_that_says_something_is_a_look_and_the_log_stays_unread(content: dict[str, Any]) -> None:
    document = checked_content(content)
    procedure = procedure_of_document(document)
    state = observe(procedure, State(), {"values": [-2.0, -4.0, -1.5, 9.0, 9.0]}, NOW)

    def unread() -> Any:
        raise AssertionError("the log was read")
        yield

    looks = looks_of(procedure, state, unread())
    assert looks.progress.tolist() == ([1.0, 2.0, 3.0, 4.0] if content is KNOWN else [1.0, 2.0, 3.0])


@pytest.mark.parametrize("content", [KNOWN, BORE])
def test_any_split_gives_the_same_answer_and_overrun_none(content: dict[str, Any]) -> None:
    values = [-2.0, -4.0, -1.5, 9.0]
    whole = after(content, {"values": values})
    assert after(content, *({"values": [value]} for value in values)) == whole
    assert after(content, {"values": values[:3]}, {"values": [*values[3:], 80.0, -7.0]}) == whole


@pytest.mark.parametrize("h1", [2.0, 0.5])
def test_between_far_limits_all_is_as_in_a_fixed_sample(h1: float) -> None:
    """Five measurements about a known mean, whatever came before the last: the textbook's chi-square."""
    content = {**KNOWN, "h1": h1, **WIDE}
    deviations = [0.4, -1.1, 0.9, -0.2, 1.3]
    found, total = (
        after(content, {"values": [-3.0 + value for value in deviations]}),
        math.fsum(d * d for d in deviations),
    )
    assert found.p_value == pytest.approx((chi2.sf if h1 > 1.0 else chi2.cdf)(total, 5), rel=1e-9)
    assert found.lower == pytest.approx(math.sqrt(total / chi2.isf(0.025, 5)), rel=1e-9)
    assert found.upper == pytest.approx(math.sqrt(total / chi2.ppf(0.025, 5)), rel=1e-9)
    assert found.median_unbiased == pytest.approx(math.sqrt(total / chi2.median(5)), rel=1e-9)
    assert found.maximum_likelihood == pytest.approx(math.sqrt(total / 5.0), rel=1e-12)
    assert found.unbiased == pytest.approx(math.sqrt(total) / chi.mean(5), rel=1e-9)
    assert found.bias == pytest.approx(math.sqrt(total / 5.0) * (chi.mean(5) / math.sqrt(5.0) - 1.0), rel=1e-7)


def test_the_unit_of_the_measurements_does_not_matter() -> None:
    """Micrometres or kilometres: limits scale, probabilities stay."""
    values = [-0.9, 0.4, 1.1, -2.2, 2.0, 1.9, -2.4, 2.8, 3.0]
    plain = after({**KNOWN, "known": {"mean": 0.0}}, {"values": values})
    for unit in (1e-9, 1e60):
        content = {**KNOWN, "h0": unit, "h1": 2.0 * unit, "known": {"mean": 0.0}}
        scaled = after(content, {"values": [unit * value for value in values]})
        assert scaled.p_value == pytest.approx(plain.p_value, rel=1e-9)
        assert [figure / unit for figure in figures(scaled)[1:]] == pytest.approx(figures(plain)[1:], rel=1e-9)


@pytest.mark.parametrize("content", [KNOWN, BORE])
def test_measurements_without_any_spread_have_ends_of_the_range_with_reasons(content: dict[str, Any]) -> None:
    found = after(content, {"values": [-3.0] * 8})
    assert (found.p_value, found.lower, found.upper, found.median_unbiased) == (1.0, 0.0, 0.0, 0.0)
    assert (found.maximum_likelihood, found.bias) == (None, None)
    assert set(found.reasons) == {
        "lower",
        "upper",
        "median_unbiased",
        "maximum_likelihood",
        "bias_of_maximum_likelihood",
    }


@pytest.mark.parametrize("size", [1e-95, 1e-30, 1e-3, 1e3, 1e99])
@pytest.mark.parametrize("content", [KNOWN, BORE, {**KNOWN, "h1": 0.5}, {**KNOWN, "h1": 1.05}])
def test_misread_measurements_have_figures(content: dict[str, Any], size: float) -> None:
    """Nothing is a nonsense number: limits in order around the middle, a probability for a p-value."""
    values = (size * np.random.default_rng(3).normal(size=60)).tolist()
    content = {**content, "known": {"mean": 0.0}} if "known" in content else content
    found = after(content, {"values": values})
    assert 0.0 <= found.p_value <= 1.0
    assert found.lower is not None
    assert found.median_unbiased is not None
    assert found.upper is not None
    assert found.lower <= found.median_unbiased <= found.upper
    assert found.reasons.keys() <= {
        "bias_of_maximum_likelihood",
        "maximum_likelihood",
        "lower",
        "upper",
        "median_unbiased",
    }


def test_a_higher_confidence_has_wider_limits() -> None:
    document, values = checked_content(BORE), [1.0, -2.0, 3.0, -1.0, 2.5, 4.0, -3.5]
    state = observe(procedure_of_document(document), State(), {"values": values}, NOW)
    found = [
        inference_of(document, state, numbered([{"values": values}]), level) for level in (0.5, 0.9, 0.99, 0.99999)
    ]
    lower, upper = ([getattr(one, name) for one in found] for name in ("lower", "upper"))
    assert lower == sorted(lower, reverse=True)
    assert upper == sorted(upper)
