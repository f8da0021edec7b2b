"""Counts: against every outcome there is, in fractions."""

import itertools
import math
from collections import Counter
from fractions import Fraction

import numpy as np
import pytest

from service.sequential.checks import counts
from service.sequential.checks.finding import Finding, Lacking


def compositions(total: int, parts: int) -> list[tuple[int, ...]]:
    if parts == 1:
        return [(total,)]
    return [(first, *rest) for first in range(total + 1) for rest in compositions(total - first, parts - 1)]


def multinomial(outcome: tuple[int, ...], shares: list[Fraction]) -> Fraction:
    probability = Fraction(math.factorial(sum(outcome)))
    for count, share in zip(outcome, shares, strict=True):
        probability *= share**count / math.factorial(count)
    return probability


@pytest.mark.parametrize(
    ("weights", "total"), [([1, 1, 1], 4), ([1, 2, 5], 3), ([1, 2, 3, 4], 5), ([7, 1], 6), ([1, 1, 1, 1, 1], 1)]
)
def test_the_variance_of_chi_squared_is_that_of_all_outcomes(weights: list[int], total: int) -> None:
    shares = [Fraction(w, sum(weights)) for w in weights]
    mean = square = Fraction(0)
    for outcome in compositions(total, len(weights)):
        statistic = sum((c - total * s) ** 2 / (total * s) for c, s in zip(outcome, shares, strict=True))
        probability = multinomial(outcome, shares)
        mean += probability * statistic
        square += probability * statistic**2
    assert mean == len(weights) - 1
    found = counts.multinomial_variance(np.array([float(s) for s in shares]), float(total))
    assert found == pytest.approx(float(square - mean**2), rel=1e-12, abs=1e-12)


@pytest.mark.parametrize(("sizes", "total"), [([2, 3, 4], 4), ([1, 1, 5], 2), ([3, 3, 3, 3], 6), ([6, 2], 3)])
def test_the_variance_over_groups_is_that_of_all_draws(sizes: list[int], total: int) -> None:
    units, p = sum(sizes), Fraction(total, sum(sizes))
    mean = square = Fraction(0)
    for drawn in itertools.product(*(range(size + 1) for size in sizes)):
        if sum(drawn) != total:
            continue
        ways = math.prod(math.comb(size, d) for size, d in zip(sizes, drawn, strict=True))
        probability = Fraction(ways, math.comb(units, total))
        statistic = sum((d - n * p) ** 2 / (n * p * (1 - p)) for d, n in zip(drawn, sizes, strict=True))
        mean += probability * statistic
        square += probability * statistic**2
    assert mean == Fraction(units, units - 1) * (len(sizes) - 1)
    found = counts.hypergeometric_variance(np.array(sizes, float), total)
    assert found == pytest.approx(float(square - mean**2), rel=1e-12)


def test_the_variance_over_large_groups_keeps_its_digits() -> None:
    """Far from small numbers it is that of chi-squared, twice the degrees of freedom."""
    assert counts.hypergeometric_variance(np.full(11, 1e8), 10**7) == pytest.approx(20.0, rel=1e-4)


def test_the_dispersion_of_the_smallest_counts_it_takes_has_its_level() -> None:
    """All 10,626 outcomes of 20 events in 5 equal reports: what is called unusual is at least as rare."""
    alike = Counter(tuple(sorted(outcome)) for outcome in compositions(20, 5))
    sorted_outcomes = {o: orders * float(multinomial(o, [Fraction(1, 5)] * 5)) for o, orders in alike.items()}
    found = [(p, counts.rate_dispersion(np.array(o, float), np.ones(5), "counts")) for o, p in sorted_outcomes.items()]
    p_values = np.array([f.p_value for _, f in found if isinstance(f, Finding)])
    weights = np.array([p for p, _ in found])
    assert weights.sum() == pytest.approx(1.0)
    for level in (0.2, 0.05, 0.01):
        assert weights[p_values <= level].sum() <= level


def test_the_dispersion_of_the_smallest_groups_it_takes_has_its_level() -> None:
    """All ways of 20 nonconforming units among 5 groups of 8."""
    drawn = np.array([d for d in itertools.product(range(9), repeat=5) if sum(d) == 20])
    weights = np.prod([[math.comb(8, d) for d in row] for row in drawn], axis=1) / math.comb(40, 20)
    assert weights.sum() == pytest.approx(1.0)
    known = {tuple(sorted(row)): None for row in drawn.tolist()}
    p_values = {}
    for row in known:
        found = counts.proportion_dispersion(np.array(row, float), np.full(5, 8.0), "failures")
        assert isinstance(found, Finding)
        p_values[row] = found.p_value
    each = np.array([p_values[tuple(sorted(row))] for row in drawn.tolist()])
    for level in (0.2, 0.05, 0.01):
        assert weights[each <= level].sum() <= level


def test_pearsons_statistic_is_the_usual_one() -> None:
    events, exposures = np.array([3.0, 9.0, 4.0, 12.0, 7.0]), np.array([1.0, 2.0, 1.5, 3.0, 2.5])
    expected = 35.0 * exposures / 10.0
    found = counts.rate_dispersion(events, exposures, "counts")
    assert isinstance(found, Finding)
    assert found.figure == pytest.approx(np.sum((events - expected) ** 2 / expected) / 4, rel=1e-12)


def test_neighbours_are_pooled_until_one_is_expected() -> None:
    expected = np.array([0.4, 0.4, 0.4, 2.0, 0.1, 0.1, 0.9, 0.3])
    (ends,) = counts.pooled([expected], expected)
    assert ends.tolist() == pytest.approx([1.2, 2.0, 1.1 + 0.3])
    (alone,) = counts.pooled([np.array([0.2, 0.3])], np.array([0.2, 0.3]))
    assert alone.tolist() == pytest.approx([0.5])


def test_two_halves_have_fishers_p_value() -> None:
    """Fisher's tea tasting: 3 of 4 and 1 of 4, two-sided 34/70; then one more table in fractions."""
    found = counts.halves((1, 4), (3, 4), "wrong")
    assert isinstance(found, Finding)
    assert found.p_value == pytest.approx(34 / 70, rel=1e-12)
    assert found.figure == 0.5

    def weight(a: int) -> Fraction:
        return Fraction(math.comb(12, a) * math.comb(9, 8 - a), math.comb(21, 8))

    other = counts.halves((2, 12), (6, 9), "wrong")
    assert isinstance(other, Finding)
    exact = sum(weight(a) for a in range(9) if weight(a) <= weight(2))
    assert other.p_value == pytest.approx(float(exact), rel=1e-10)


def test_the_centre_has_the_variance_of_all_outcomes() -> None:
    exposures = np.array([1.0, 2.0, 1.0, 3.0, 1.0, 2.0, 1.0, 1.0])
    events = np.array([0.0, 1.0, 0.0, 2.0, 1.0, 2.0, 1.0, 3.0])
    found = counts.centre(events, exposures, "counts")
    assert isinstance(found, Finding)
    places = [Fraction(1, 24), Fraction(4, 24), Fraction(7, 24), Fraction(11, 24)]
    places += [Fraction(15, 24), Fraction(18, 24), Fraction(21, 24), Fraction(23, 24)]
    shares = [Fraction(int(e), 12) for e in exposures]
    assert sum(s * x for s, x in zip(shares, places, strict=True)) == Fraction(1, 2)
    one = sum(s * (x - Fraction(1, 2)) ** 2 for s, x in zip(shares, places, strict=True))
    mean = sum(int(c) * x for c, x in zip(events, places, strict=True)) / 10
    assert found.figure == pytest.approx(float(mean), rel=1e-12)
    z = float(mean - Fraction(1, 2)) / math.sqrt(float(one) / 10)
    assert found.p_value == pytest.approx(math.erfc(z / math.sqrt(2.0)), rel=1e-12)


def test_residuals_do_not_move_with_the_exposures() -> None:
    """Few counts over rising exposures: plain counts would rise, and zeros over more exposure fall."""
    generator = np.random.default_rng(4)
    exposures = np.linspace(0.1, 1.5, 4000)
    residuals = counts.rate_residuals(generator.poisson(exposures).astype(float), exposures)
    assert np.mean(residuals) == pytest.approx(0.0, abs=4.0 / math.sqrt(len(residuals)))
    assert np.var(residuals) == pytest.approx(1.0, abs=0.15)
    half = len(residuals) // 2
    assert np.mean(residuals[:half]) == pytest.approx(np.mean(residuals[half:]), abs=0.15)


def test_what_is_lacking_is_said() -> None:
    few, ones = np.array([3.0, 4.0, 5.0]), np.ones(3)
    assert counts.rate_dispersion(few, ones, "counts") == Lacking("needs at least 20 counts, and there are 12")
    assert isinstance(counts.rate_dispersion(10 * few, ones, "counts"), Lacking)
    assert isinstance(counts.proportion_dispersion(few, 100 * ones, "failures"), Lacking)
    assert isinstance(counts.proportion_dispersion(20 * few, 100 * ones, "failures"), Lacking)
    assert counts.halves((0, 5), (0, 5), "leaking") == Lacking("no units are leaking, so that nothing can drift")
    assert counts.halves((5, 5), (5, 5), "leaking") == Lacking("all units are leaking, so that nothing can drift")
    assert isinstance(counts.halves((1, 2), (1, 2), "leaking"), Lacking)
    assert counts.halves((3, 50), (0, 0), "leaking") == Lacking("needs at least 2 groups")
    assert isinstance(counts.centre(few, ones, "counts"), Lacking)
    assert isinstance(counts.centre(np.zeros(9), np.ones(9), "counts"), Lacking)
    lopsided = np.array([1e100, *np.full(8, 1e-300)])
    assert isinstance(counts.centre(np.full(9, 5.0), lopsided, "counts"), Lacking)
