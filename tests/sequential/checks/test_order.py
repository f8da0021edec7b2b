"""Order of values: against every order there is, and printed tables."""

import itertools
from collections import Counter
from fractions import Fraction

import numpy as np
import pytest

from service.sequential.checks import order
from service.sequential.checks.finding import Finding, Lacking, normal_p_value


def runs_by_enumeration(first: int, second: int) -> dict[int, Fraction]:
    """Every arrangement of two kinds, each as likely."""
    found: Counter[int] = Counter()
    for places in itertools.combinations(range(first + second), first):
        kinds = [i in places for i in range(first + second)]
        found[1 + sum(a != b for a, b in itertools.pairwise(kinds))] += 1
    return {r: Fraction(count, sum(found.values())) for r, count in found.items()}


@pytest.mark.parametrize(("first", "second"), [(1, 1), (1, 6), (6, 1), (2, 5), (4, 4), (5, 7), (6, 6)])
def test_runs_have_the_distribution_of_all_arrangements(first: int, second: int) -> None:
    exact = runs_by_enumeration(first, second)
    found = order.runs_distribution(first, second)
    assert found.sum() == pytest.approx(1.0, rel=1e-12)
    for index, probability in enumerate(found):
        assert probability == pytest.approx(float(exact.get(index + 2, 0)), abs=1e-14)
    for r in exact:
        lower = sum(p for at, p in exact.items() if at <= r)
        upper = sum(p for at, p in exact.items() if at >= r)
        assert order.runs_p_value(r, first, second) == pytest.approx(float(min(1, 2 * min(lower, upper))), rel=1e-12)


def test_printed_tails_of_runs() -> None:
    """Swed and Eisenhart (1943), 10 and 10 values (recalled): P(R <= 6) = .019, P(R <= 7) = .051; upper limit 16."""
    tails = np.cumsum(order.runs_distribution(10, 10))
    assert round(float(tails[6 - 2]), 3) == 0.019
    assert round(float(tails[7 - 2]), 3) == 0.051
    assert order.runs_p_value(16, 10, 10) < 0.05 < order.runs_p_value(15, 10, 10)


def test_a_million_values_keep_their_digits() -> None:
    """The sum of all probabilities, and the mean 1 + 2ab/n, are those of the formula."""
    found = order.runs_distribution(700_000, 300_000)
    runs = np.arange(2, 2 + len(found))
    assert found.sum() == pytest.approx(1.0, rel=1e-7)
    assert float(np.dot(runs, found)) == pytest.approx(1.0 + 2.0 * 0.7 * 0.3 * 1e6, rel=1e-7)


def test_runs_of_passes_and_failures_are_counted_as_one_would() -> None:
    found = order.runs(np.array([0, 0, 0, 1, 1, 0, 0, 1, 0, 0.0]), "units")
    assert isinstance(found, Finding)
    assert found.figure == 5.0
    assert found.expected == 1 + 2 * 3 * 7 / 10
    mostly_ones = order.runs(1.0 - np.array([0, 0, 0, 1, 1, 0, 0, 1, 0, 0.0]), "units")
    assert mostly_ones == found


def test_the_moments_of_neighbours_are_those_of_all_orders() -> None:
    for values in ([1.0, 2.0, 3.0, 4.0], [0.0, 0.0, 0.0, 1.0, 5.0], [3.0, -1.0, 4.0, 1.0, -5.0, 9.0, 2.0]):
        z = (np.array(values) - np.mean(values)) / np.std(values)
        sums = [float(np.dot(p[1:], p[:-1])) for p in map(np.array, itertools.permutations(z))]
        mean, variance = order.products_of_neighbours(len(z), float(np.sum(z**4)))
        assert mean == pytest.approx(np.mean(sums), rel=1e-10)
        assert variance == pytest.approx(np.var(sums), rel=1e-10)


def test_the_autocorrelation_is_the_usual_one() -> None:
    values = np.random.default_rng(2).normal(size=30)
    centred = values - values.mean()
    found = order.autocorrelation(values, "values")
    assert isinstance(found, Finding)
    assert found.figure == pytest.approx(np.sum(centred[1:] * centred[:-1]) / np.sum(centred**2), rel=1e-12)
    assert found.expected == pytest.approx(-1 / 30)
    for factor, shift in ((1e99, 0.0), (1e-99, 0.0), (1.0, 1e6)):
        moved = order.autocorrelation(values * factor + shift, "values")
        assert isinstance(moved, Finding)
        assert moved.p_value == pytest.approx(found.p_value, rel=1e-6)


@pytest.mark.parametrize("kind", ["normal", "exponential"])
def test_the_autocorrelation_of_twenty_shuffled_values_is_as_rare_as_it_says(kind: str) -> None:
    """At 5 % and 1 %; the bounds are four standard errors of 50,000 shuffles."""
    generator = np.random.default_rng(7)
    z = order.standardised(getattr(generator, kind)(size=20))
    assert z is not None
    mean, variance = order.products_of_neighbours(20, float(np.sum(z**4)))
    shuffled = generator.permuted(np.tile(z, (50_000, 1)), axis=1)
    figures = (np.sum(shuffled[:, 1:] * shuffled[:, :-1], axis=1) - mean) / np.sqrt(variance)
    p_values = np.array([normal_p_value(float(figure)) for figure in figures])
    for level in (0.05, 0.01):
        assert np.mean(p_values <= level) <= level + 4.0 * np.sqrt(level / 50_000)
    assert np.mean(p_values <= 0.05) >= 0.04


def test_the_trend_of_eight_values_is_that_of_all_orders() -> None:
    values = np.array([2.0, 1.0, 5.0, 3.0, 4.0, 8.0, 6.0, 7.0])
    found = order.trend(values, "values")
    assert isinstance(found, Finding)
    pairs = list(itertools.combinations(range(8), 2))
    orders = np.array(list(itertools.permutations(range(8))))
    concordance = sum(np.sign(orders[:, j] - orders[:, i]) for i, j in pairs)
    seen = sum(np.sign(values[j] - values[i]) for i, j in pairs)
    assert found.figure == pytest.approx(seen / 28, rel=1e-12)
    assert found.p_value == pytest.approx(np.mean(np.abs(concordance) >= abs(seen)), rel=1e-10)
    # Kendall's table, n = 8 (recalled): P(S >= 18) = .016.
    assert round(float(np.mean(concordance >= 18)), 3) == 0.016


def test_what_is_lacking_is_said() -> None:
    few, same = np.arange(5.0), np.full(30, 3.0)
    for check in (order.runs, order.autocorrelation, order.trend):
        assert isinstance(check(few, "results"), Lacking)
        assert check(same, "results") == order.ALL_ALIKE
    assert order.runs(few, "results") == Lacking("needs at least 8 results, and there are 5")
    one_apart = np.array([1.0, *np.zeros(29)])
    assert order.runs(one_apart, "units") == Lacking("needs at least 2 units on either side, and one side has 1")
    assert isinstance(order.autocorrelation(one_apart, "units"), Lacking)


def test_an_alternating_stream_and_a_rising_one_are_found() -> None:
    alternating, rising = np.tile([0.0, 1.0], 20), np.arange(40.0)
    for check, values in ((order.runs, alternating), (order.runs, rising), (order.trend, rising)):
        found = check(values, "values")
        assert isinstance(found, Finding)
        assert found.p_value < 1e-8
    for values, sign in ((alternating, -1.0), (rising, 1.0)):
        found = order.autocorrelation(values, "values")
        assert isinstance(found, Finding)
        assert found.p_value < 1e-8
        assert np.sign(found.figure) == sign
