"""Inference after tests of overdispersed counts, against all outcomes in fractions and against 40 digits."""

import math
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
import pytest
from mpmath import betainc, mp, mpf

from service.sequential import likelihood
from service.sequential.boundaries import Thresholds
from service.sequential.inference.bias import bias_of_counts
from service.sequential.inference.counting import CountedOutcome
from service.sequential.inference.laws import OverdispersedLaw, RateLaw
from service.sequential.inference.ordering import lower_limit, median_unbiased, upper_limit
from service.sequential.inference.schedules import schedule_of_looks
from service.sequential.region import UNIT_COUNTS, Region, Wall, straight_region

MOST = 50


@dataclass(frozen=True)
class Path:
    """An outcome: after which look, at which total, on which side; its weight, and that times the first count."""

    look: int
    total: int
    side: str
    weight: Fraction
    weighted: Fraction


def weight(dispersion: Fraction, count: int) -> Fraction:
    """The probability of a count in one unit without its powers: dispersion (dispersion + 1) … / count!."""
    found = Fraction(1)
    for k in range(count):
        found *= (dispersion + k) / Fraction(k + 1)
    return found


def all_ends(region: Region, dispersion: Fraction, wall: int) -> list[Path]:
    """Every outcome with a total of at most 50, furthest up first."""
    weights = [weight(dispersion, count) for count in range(MOST + 1)]
    alive = {0: (Fraction(1), Fraction(0))}
    found = []
    for look in range(1, wall + 1):
        limits = region.limits(np.array([float(look)]))
        moved: dict[int, tuple[Fraction, Fraction]] = {}
        for total, (plain, first) in alive.items():
            for count in range(MOST - total + 1):
                more = weights[count]
                added = (plain * more, (plain * count if look == 1 else first) * more)
                so_far = moved.get(total + count, (Fraction(0), Fraction(0)))
                moved[total + count] = (so_far[0] + added[0], so_far[1] + added[1])
        alive = {}
        for total, pair in sorted(moved.items()):
            side = "above" if total >= limits.upper[0] else "below" if total <= limits.lower[0] else None
            if side is None:
                alive[total] = pair
            else:
                found.append(Path(look, total, side if look < wall else "wall", *pair))
    order = {"above": 0, "wall": 1, "below": 2}
    when = {"above": 1, "wall": 0, "below": -1}
    return sorted(found, key=lambda end: (order[end.side], when[end.side] * end.look, -end.total))


def chance(end: Path, mean: float, dispersion: Fraction) -> float:
    share = Fraction(mean) / (Fraction(mean) + dispersion)
    return float(float(end.weight * share**end.total) * float(1 - share) ** float(dispersion * end.look))


def outcome(region: Region, dispersion: Fraction, end: Path) -> CountedOutcome:
    looks = np.arange(1.0, end.look + 1.0)
    is_above = end.total >= region.limits(looks[-1:]).upper[0]
    return CountedOutcome(
        OverdispersedLaw(float(dispersion)), schedule_of_looks(region, looks), end.total, is_above=is_above
    )


CASES = [(Fraction(2), 0.5, 1.5), (Fraction(1, 2), 1.0, 0.25), (Fraction(5), 0.3, 0.9)]
WALL = 6


def region_of(dispersion: Fraction, mean0: float, mean1: float) -> Region:
    ratio = likelihood.negative_binomial(mean0, mean1, float(dispersion))
    return straight_region(ratio, Thresholds(-1.3, 1.5), UNIT_COUNTS, Wall(float(WALL)))


@pytest.mark.parametrize(("dispersion", "mean0", "mean1"), CASES)
def test_tails_and_the_first_count_against_all_outcomes(dispersion: Fraction, mean0: float, mean1: float) -> None:
    region = region_of(dispersion, mean0, mean1)
    ends = all_ends(region, dispersion, WALL)
    for at in (0.1, 0.3, 0.5):
        chances = [chance(end, at, dispersion) for end in ends]
        for i, end in enumerate(ends):
            if end.total > 30:
                continue
            found = outcome(region, dispersion, end)
            tails = found.tails(found.natural(at))
            assert abs(tails.up - math.fsum(chances[: i + 1])) < 1e-11
            assert abs(tails.further_up - math.fsum(chances[:i])) < 1e-11
            if not found.is_above:
                assert tails.down == pytest.approx(math.fsum(chances[i:]), rel=1e-10)
            first = float(end.weighted / end.weight)
            assert found.first_step_mean() == pytest.approx(first, rel=1e-11, abs=1e-14)


@pytest.mark.parametrize(("dispersion", "mean0", "mean1"), CASES)
def test_limits_cover_and_the_bias_and_the_unbiased_estimate_have_their_means(
    dispersion: Fraction, mean0: float, mean1: float
) -> None:
    """Outcomes beyond 50 have a probability below 1e-11 here."""
    region, law = region_of(dispersion, mean0, mean1), OverdispersedLaw(float(dispersion))
    ends = all_ends(region, dispersion, WALL)
    ends = [end for end in ends if chance(end, 0.4, dispersion) > 1e-13]
    outcomes = [outcome(region, dispersion, end) for end in ends]
    means = [found.first_step_mean() for found in outcomes]
    limits = [(law.mean(lower_limit(one, 0.05)), law.mean(upper_limit(one, 0.05))) for one in outcomes[::-1]][::-1]
    for at in (0.2, 0.4):
        chances = [chance(end, at, dispersion) for end in ends]
        missed = math.fsum(
            c
            for c, (low, high) in zip(chances, limits, strict=True)
            if not low <= at * (1 + 1e-12) <= high * (1 + 2e-12)
        )
        assert missed <= 0.1 + 1e-9
        assert math.fsum(c * mean for c, mean in zip(chances, means, strict=True)) == pytest.approx(at, abs=1e-9)
        error = math.fsum(c * (end.total / end.look - at) for c, end in zip(chances, ends, strict=True))
        assert bias_of_counts(region, law, law.natural(at), 1.0) == pytest.approx(error, abs=1e-9)


@pytest.mark.parametrize("dispersion", [1e-6, 0.3, 2.0, 1e4, 1e12])
@pytest.mark.parametrize(
    ("mean", "units", "count"), [(0.7, 5.0, 4.0), (0.7, 5.0, 20.0), (40.0, 3.0, 90.0), (1e-4, 1.0, 2.0)]
)
def test_the_law_in_forty_digits(dispersion: float, mean: float, units: float, count: float) -> None:
    """P(at least so many) is an incomplete beta function: Johnson, Kemp and Kotz, section 5.3."""
    law = OverdispersedLaw(dispersion)
    with mp.workdps(40):
        share = mpf(mean) / (mpf(mean) + mpf(dispersion))
        shape = mpf(units) * mpf(dispersion)
        term = (1 - share) ** shape
        fewer = mpf(0)
        for k in range(int(count)):
            fewer += term
            term *= (shape + k) / (k + 1) * share
        exact = float(1 - fewer), float(fewer)
        if dispersion < 1e4:
            assert float(betainc(count, shape, 0, share, regularized=True)) == pytest.approx(exact[0], rel=1e-12)
    natural, at = law.natural(mean), np.array([count])
    assert law.reaches(natural, units, at)[0] == pytest.approx(exact[0], rel=1e-10)
    assert law.stays(natural, units, at - 1.0)[0] == pytest.approx(exact[1], rel=1e-10)
    assert law.increases(natural, units, int(count)).sum() == pytest.approx(exact[1], rel=1e-10)


def test_without_dispersion_the_counts_are_poissons() -> None:
    region = straight_region(likelihood.poisson(0.5, 1.5), Thresholds(-1.3, 1.5), UNIT_COUNTS, Wall(6.0))
    schedule = schedule_of_looks(region, np.arange(1.0, 5.0))
    poisson, near = (CountedOutcome(law, schedule, 6, is_above=True) for law in (RateLaw(), OverdispersedLaw(1e12)))
    assert near.first_step_mean() == pytest.approx(poisson.first_step_mean(), rel=1e-10)
    for find in (median_unbiased, lambda one: lower_limit(one, 0.025), lambda one: upper_limit(one, 0.025)):
        assert find(near) == pytest.approx(find(poisson), abs=1e-10)
