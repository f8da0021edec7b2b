"""The tail of the noncentral t against integrals with 20 digits and closed forms."""

import math

import pytest
from mpmath import mp, mpf, ncdf, quad, workdps

from service.sequential.noncentral import upper_tail


def slow(freedom: int, noncentrality: float, place: float) -> float:
    """The mean of the normal tail over the root of a chi-square, by adaptive quadrature."""
    n, m, c = mpf(freedom), mpf(noncentrality), mpf(place)

    def integrand(x: mpf) -> mpf:
        return x ** (n - 1) * mp.exp(-x * x / 2) * ncdf(m - c * x)

    peak = (m * c + mp.sqrt((m * c) ** 2 + 4 * (1 + c * c) * (n - 1))) / (2 * (1 + c * c))
    width = 1 / mp.sqrt(1 + c * c)
    points = {peak + k * width for k in (-9, -6, -4, -2, 0, 2, 4, 6, 9)} | {mp.sqrt(n) + k for k in (-5, -2, 2, 5, 9)}
    # With one degree of freedom the integrand may fall from zero on.
    points |= {mpf(k) / (1 + abs(m * c)) for k in (1, 3, 10, 30, 90)}
    furthest = max(mp.sqrt(n), peak) + 14
    ends = sorted({mpf(0), furthest} | {x for x in points if 0 < x < furthest})
    # Quadrature stops at an absolute error, so the integrand is brought to the size of one.
    scale = max(integrand(x) for x in ends)
    total = quad(lambda x: integrand(x) / scale, ends)
    return float(scale * total / (2 ** (n / 2 - 1) * mp.gamma(n / 2)))


@pytest.mark.parametrize(
    ("freedom", "noncentrality", "place"),
    [
        (1, 0.0, 100.0),
        (1, -30.0, 50.0),
        (2, 3.0, -0.5),
        (3, 0.0, 1e5),
        (1, -2.0, 3e4),
        (2, -30.0, 50.0),
        (9, 1.0, 1.7),
        (9, -25.0, 8.0),
        (30, -4.0, 0.3),
        (99, -28.335198689515, -0.786474),
        (99, -24.721127562834, 0.251196),
    ],
)
def test_the_tail_keeps_its_digits(freedom: int, noncentrality: float, place: float) -> None:
    with workdps(20):
        exact = slow(freedom, noncentrality, place)
    assert upper_tail(freedom, noncentrality, place) == pytest.approx(exact, rel=1e-12, abs=0.0)


def test_with_one_degree_of_freedom_it_is_cauchys() -> None:
    for place in (-3.0, 0.0, 0.7, 20.0):
        assert upper_tail(1, 0.0, place) == pytest.approx(0.5 - math.atan(place) / math.pi, rel=1e-14)
    assert upper_tail(1, 0.0, 1e8) == pytest.approx(1e-8 / math.pi, rel=1e-12, abs=0.0)


def test_far_out_the_chi_square_alone_decides() -> None:
    """With a noncentrality of 1e8 the normal part is a drop in it: P(|x| <= 1)."""
    assert upper_tail(1, 1e8, 1e8) == pytest.approx(math.erf(math.sqrt(0.5)), rel=1e-10)


def test_both_tails_make_one() -> None:
    for freedom, noncentrality, place in ((1, 0.3, 0.2), (12, -2.0, -0.4), (500, 7.0, 0.3)):
        both = upper_tail(freedom, noncentrality, place) + upper_tail(freedom, -noncentrality, -place)
        assert both == pytest.approx(1.0, abs=1e-13)
