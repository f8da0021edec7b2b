"""Published staged designs, entered as tables."""

import numpy as np
import pytest

from service.domain.characteristics import promise_of
from service.domain.checking import checked_content
from service.domain.errors import InvalidObservations
from service.domain.observing import observe
from service.domain.procedure import procedure_of_document
from service.domain.state import State
from tests.domain.test_observing import NOW


def share(efficacy: float) -> float:
    """The vaccine arm's share of the cases at this efficacy, with equal arms."""
    return (1 - efficacy) / (2 - efficacy)


STAGES = [(32, 6, 15), (62, 15, 26), (92, 25, 35), (120, 35, None), (164, 53, 54)]
VACCINE = {
    "family": "bernoulli",
    "h0": share(0.30),
    "h1": share(0.60),
    "alpha": 0.025,
    "beta": 0.15,
    "boundaries": "table",
    "table": [
        {"sample_number": n, "reject": success, **({} if futility is None else {"accept": futility})}
        for n, success, futility in STAGES
    ],
}


def test_the_staged_vaccine_design() -> None:
    """Protocol C4591001, Tables 6-8: overall success; exact figures by enumeration with fractions, cases as well."""
    promise = promise_of(checked_content(VACCINE), [share(0.3), share(0.5), share(0.6), share(0.8)])
    success = [1 - point.probability_of_acceptance for point in promise.points]
    assert success[:3] == pytest.approx([0.021, 0.439, 0.866], abs=5.1e-4)
    assert success[3] > 0.999
    assert success == pytest.approx([0.020967565249692666, 0.4392519566372702, 0.8656225063463551, 0.9999293386877558])
    cases = [point.sample_number.mean for point in promise.points[:3] if point.sample_number]
    assert cases == pytest.approx([80.29, 120.36, 103.02], abs=5.1e-3)


@pytest.mark.parametrize(
    ("p0", "p1", "first", "second", "size", "early"),
    [
        (0.05, 0.25, (9, 0), (17, 2), 12.0, 0.63),
        (0.1, 0.3, (10, 1), (29, 5), 15.0, 0.74),
        (0.3, 0.5, (15, 5), (46, 18), 23.6, 0.72),
    ],
)
def test_simons_two_stage_designs(
    p0: float, p1: float, first: tuple[int, int], second: tuple[int, int], size: float, early: float
) -> None:
    """Simon (1989), Controlled Clinical Trials 10: r1/n1, r/n, expected size and early-stop probability at p0."""
    plan = {"family": "bernoulli", "h0": p0, "h1": p1, "alpha": 0.1, "beta": 0.2, "boundaries": "table"}
    (n1, r1), (n, r) = first, second
    rows = [{"sample_number": n1, "accept": r1}, {"sample_number": n, "accept": r, "reject": r + 1}]
    promise = promise_of(checked_content({**plan, "table": rows}), [p0])
    spread = promise.points[0].sample_number
    assert spread is not None
    assert spread.mean == pytest.approx(size, abs=0.051)
    assert (n - spread.mean) / (n - n1) == pytest.approx(early, abs=0.0051)


def test_observations_are_judged_by_the_rows_alone() -> None:
    """The design's rows read one by one against the region, on streams drawn with a seed."""
    procedure = procedure_of_document(checked_content(VACCINE))
    source = np.random.default_rng(23)
    for _ in range(200):
        values = (source.random(164) < source.uniform(0.1, 0.6)).astype(int).tolist()
        expected = None
        for n, success, futility in STAGES:
            total = sum(values[:n])
            if total <= success:
                expected = ("reject", n)
            elif futility is not None and total >= futility:
                expected = ("accept", n)
            if expected:
                break
        cut = int(source.integers(1, 164))
        state = observe(procedure, State(), {"values": values[:cut]}, NOW)
        state = observe(procedure, state, {"values": values[cut:]}, NOW)
        assert state.decided is not None
        assert (state.decision, state.decided.sample_number) == expected


def test_no_group_passes_over_a_row() -> None:
    """What would have been decided at the row could never be known, and the risks of the table would not hold."""
    procedure = procedure_of_document(checked_content(VACCINE))
    groups = [{"value": 10, "size": 30}, {"value": 0, "size": 1}, {"value": 1, "size": 2}]
    with pytest.raises(InvalidObservations) as caught:
        observe(procedure, State(), {"observations": groups}, NOW)
    assert caught.value.faults[0].pointer == "/observations/2/size"
    assert "1 units lead to sample number 32" in caught.value.faults[0].detail
    state = observe(procedure, State(), {"observations": [{"value": 10, "size": 32}, {"value": 1, "size": 30}]}, NOW)
    assert (state.decision, state.sample_number) == ("reject", 62)
