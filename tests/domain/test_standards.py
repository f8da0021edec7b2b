"""The catalogue against the figures that are published for its plans."""

from typing import Any

import numpy as np
import pytest

from service.domain.calibrating import exact_figures
from service.domain.characteristics import promise_of
from service.domain.checking import attained_by, checked_content
from service.domain.errors import InvalidPlan
from service.domain.procedure import procedure_of_document
from service.domain.standards import catalogue

# Published risks in per cent (as reproduced in GJB 899A), and exact ones with E[T] at both hypotheses, in units of the
# lower test mean life, by an independent computation.
PUBLISHED = {
    "I-D": (11.1, 12.0, 11.1283, 11.9693, 27.3627, 24.7348),
    "III-D": (12.8, 12.8, 12.8345, 12.8162, 10.2353, 7.6709),
    "IV-D": (22.3, 22.5, 22.3103, 22.4965, 4.8222, 3.7205),
    "VI-D": (18.2, 19.2, 18.2492, 19.2581, 3.4310, 2.5822),
    "VIII-D": (29.3, 29.9, 29.2784, 29.9352, 2.5279, 2.2650),
}


def standard(name: str, **more: Any) -> str:
    return checked_content({"standard": name, **more})


@pytest.mark.parametrize("name", PUBLISHED)
def test_the_true_risks_of_the_reliability_plans(name: str) -> None:
    """MIL-HDBK-781A: true risks to the printed tenth of a per cent, expected times to all digits, at any scale."""
    alpha, beta, exact_alpha, exact_beta, time0, time1 = PUBLISHED[name]
    document = standard(f"MIL-HDBK-781A/{name}", scale=100.0)
    procedure = procedure_of_document(document)
    promise = promise_of(document, procedure.hypotheses)
    assert promise.beta is not None
    assert 100 * promise.alpha == pytest.approx(alpha, abs=0.0501)
    assert 100 * promise.beta == pytest.approx(beta, abs=0.0601)  # VI-D: 19.258 is printed as 19.2
    assert 100 * promise.alpha == pytest.approx(exact_alpha, abs=5.1e-5)
    assert 100 * promise.beta == pytest.approx(exact_beta, abs=5.1e-5)
    times = [point.exposure.mean / 100 for point in promise.points if point.exposure]
    assert times == pytest.approx([time0, time1], abs=5.1e-5)


def test_the_curve_of_plan_three() -> None:
    """MIL-HDBK-781A plan III-D at other mean lives; by an independent computation."""
    document = standard("MIL-HDBK-781A/III-D", scale=1.0)
    promise = promise_of(document, [0.5, 1.0, 2**0.5, 1.5, 2.0, 3.0])
    expected = [0.000298, 0.128162, 0.536875, 0.612184, 0.871655, 0.979960]
    assert [point.probability_of_acceptance for point in promise.points] == pytest.approx(expected, abs=5.1e-7)


def test_failures_agree_with_time_in_every_reliability_plan() -> None:
    """
    E[failures] = E[time] / mean life, the failures counted by a simulation of the printed rows.

    The simulation reads the catalogue's rows itself and knows nothing of regions.
    """
    source = np.random.default_rng(11)
    for entry in catalogue():
        if not entry.needs_scale:
            continue
        rows = {row["failures"]: row for row in entry.content["table"]}
        mean, times, failures, accepted = 1.7, [], [], []
        for _ in range(3000):
            time, count = 0.0, 0
            while True:
                accept = next(rows[k]["accept_at"] for k in range(count, len(rows)) if "accept_at" in rows[k])
                time += source.exponential(mean)
                if time >= accept:
                    time, is_accepted = accept, True
                    break
                count += 1
                if time <= rows[count].get("reject_at", -1.0):
                    is_accepted = False
                    break
            times.append(time)
            failures.append(count)
            accepted.append(is_accepted)
        procedure = procedure_of_document(standard(entry.name, scale=1.0))
        found = exact_figures(procedure, [mean])
        for exact, sample in (
            (found.mean[0], times),
            (found.below[0], accepted),
            (found.mean[0] / mean, failures),
        ):
            assert abs(np.mean(sample) - exact) < 4 * np.std(sample) / len(sample) ** 0.5, entry.name
        assert found.below[0] + found.above[0] == pytest.approx(1.0, abs=1e-12)


def test_plan_aa_of_the_engine_rule() -> None:
    """40 CFR Part 1068, Table A-2, plan AA; figures by an independent computation, to the digits given."""
    document = standard("40-CFR-1068/A-2-AA")
    promise = promise_of(document, [0.2, 0.3, 0.4, 0.5, 0.6, 0.7])
    passes = [0.99788, 0.96671, 0.82664, 0.54815, 0.25536, 0.07939]
    numbers = [4.972, 6.941, 9.437, 11.348, 11.549, 10.095]
    assert [point.probability_of_acceptance for point in promise.points] == pytest.approx(passes, abs=5.1e-6)
    averages = [point.sample_number.mean for point in promise.points if point.sample_number]
    assert averages == pytest.approx(numbers, abs=5.1e-4)


def test_the_distress_signal_rule() -> None:
    """46 CFR 160.066-12; figures by an independent computation, to the digits given."""
    promise = promise_of(standard("46-CFR-160.066-12/280"), [0.065, 0.15])
    first, second = promise.points
    assert first.probability_of_acceptance == pytest.approx(0.99049, abs=5.1e-6)
    assert second.probability_of_acceptance == pytest.approx(0.65940, abs=5.1e-6)
    assert first.sample_number is not None
    assert second.sample_number is not None
    assert [first.sample_number.mean, second.sample_number.mean] == pytest.approx([20.468, 29.790], abs=5.1e-4)


def test_the_risks_stated_for_the_inspection_plans_bound_the_attained_ones() -> None:
    for entry in catalogue():
        if not entry.needs_scale:
            attained = attained_by(entry)
            assert attained.alpha <= entry.content["alpha"]
            assert attained.beta <= entry.content["beta"]


@pytest.mark.parametrize(
    ("given", "pointer"),
    [
        ({"standard": "MIL-HDBK-781A/IX-D", "scale": 1.0}, "/standard"),
        ({"standard": "MIL-HDBK-781A/III-D"}, "/scale"),
        ({"standard": "MIL-HDBK-781A/III-D", "scale": -1.0}, "/scale"),
        ({"standard": "40-CFR-1068/A-2-AA", "scale": 2.0}, "/scale"),
        ({"standard": "MIL-HDBK-781A/III-D", "scale": 100.0, "h0": 150.0}, "/h0"),
        ({"standard": "MIL-HDBK-781A/III-D", "scale": 100.0, "alpha": 0.05}, "/alpha"),
        ({"standard": "MIL-HDBK-781A/III-D", "scale": 100.0, "boundaries": "strict"}, "/boundaries"),
        ({"standard": "MIL-HDBK-781A/III-D", "scale": 100.0, "truncation": {"exposure": 5.0}}, "/truncation"),
        ({"standard": "MIL-HDBK-781A/III-D", "scale": 100.0, "table": []}, "/table"),
        ({"family": "bernoulli", "h0": 0.1, "h1": 0.2, "alpha": 0.1, "beta": 0.1, "scale": 2.0}, "/scale"),
    ],
)
def test_a_standard_cannot_be_bent(given: dict[str, Any], pointer: str) -> None:
    with pytest.raises(InvalidPlan) as caught:
        checked_content(given)
    assert pointer in [fault.pointer for fault in caught.value.faults]


def test_what_the_source_leaves_open_may_be_chosen() -> None:
    document = standard("40-CFR-1068/A-2-AA", h1=0.6, alpha=0.25, beta=0.3)
    procedure = procedure_of_document(document)
    assert procedure.hypotheses == (0.4, 0.6)
    assert procedure.risks == (0.25, 0.3)
