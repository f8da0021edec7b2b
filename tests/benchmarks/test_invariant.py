"""Weighted courses of the invariant test against plain ones: how many each needs for one standard error."""

import time

import numpy as np
import pytest

from service.sequential.boundaries import wald
from service.sequential.calibration import Risks
from service.sequential.invariant import invariant_ratio, one_sample
from service.sequential.invariant_calibration import calibrated
from service.sequential.invariant_risks import Effort, Run, simulated
from service.sequential.invariant_walks import BATCH, Walker, invariant_test

BATCHES = 10


@pytest.mark.benchmark
@pytest.mark.parametrize(
    ("risk", "last", "asked"),
    # A wall decides between ratios near one, whose weights tell little; there the shapes of the courses do.
    [(0.05, None, 20), (0.01, None, 20), (0.001, None, 20), (0.05, 100, 20), (0.05, 60, 20), (0.05, 40, 20)],
)
def test_weighted_courses_are_worth_many_plain_ones(risk: float, last: int | None, asked: float) -> None:
    """
    Plain courses need p(1 - p)/error**2.

    Those to a near wall are followed to it, and their shapes with them: what a course costs is measured too.
    """
    test = invariant_test(invariant_ratio(0.0, 0.5), wald(risk, risk), last=last)
    at = (0.0, 0.5)
    start = time.process_time()
    run = Run(test, at, 1)
    run.extend(BATCHES)
    found = run.figures(at)
    spent = time.process_time() - start
    start, walker = time.process_time(), Walker(test, follows_shapes=False)
    for number in range(BATCHES):
        walker.batch(0.0, 1, 0, number)
    dearer = spent / found.courses / ((time.process_time() - start) / (BATCHES * BATCH))
    print(f"\nrisks {risk}, wall {last}: a course takes {dearer:.1f} times as long as a plain one")
    ratios = []
    for point in found.points:
        p, error = point.rejection.value, point.rejection.standard_error
        plain = p * (1.0 - p) / error**2
        ratios.append(plain / found.courses)
        print(
            f"\nrisks {risk}, wall {last}, delta {point.delta}: P(reject) {p:.6f} +- {error:.1e}"
            f" from {found.courses} courses, plainly from {plain:.0f}: {ratios[-1]:.0f} times fewer"
        )
    assert min(ratios) >= asked


@pytest.mark.benchmark
@pytest.mark.parametrize("delta1", [0.1, 0.2, 0.5, 1.0])
def test_what_figures_and_thresholds_cost(delta1: float) -> None:
    test = invariant_test(invariant_ratio(0.0, delta1), wald(0.05, 0.05))
    for at in ((0.0, delta1), (0.0, 0.5 * delta1, delta1)):
        start = time.process_time()
        found = simulated(test, at, 1, Effort(5e-4))
        print(f"\ndelta1 {delta1}, {len(at)} means: {time.process_time() - start:.1f} s, {found.courses} courses")
    if delta1 >= 0.2:
        start = time.process_time()
        thresholds = calibrated(test, Risks(0.05, 0.05), 1)
        print(f"calibration {time.process_time() - start:.1f} s: {thresholds}")


@pytest.mark.benchmark
def test_what_one_ratio_and_many_limits_cost() -> None:
    ratio = invariant_ratio(0.0, 0.5)
    for count in (10.0, 60.0, 5000.0):
        looks, at = one_sample(np.array([count])), np.array([0.2])
        start = time.process_time()
        for _ in range(200):
            ratio.log(looks, at)
        print(f"\none ratio after {count:.0f}: {1e3 * (time.process_time() - start) / 200:.3f} ms")
    start = time.process_time()
    ratio.t_limits(one_sample(np.arange(1.0, 10_001.0)), wald(0.05, 0.05))
    print(f"limits of 10,000 looks: {time.process_time() - start:.2f} s")
