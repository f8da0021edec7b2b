"""Fixed samples against published plans and brute force."""

import math

import pytest
from mpmath import binomial as choose
from mpmath import mpf

from service.sequential import fixed_sample


@pytest.mark.parametrize(
    ("p0", "p1", "alpha", "beta", "n", "c"),
    [
        # Single sampling plans beside the sequential ones of NIST, Montgomery and Wald (computed independently).
        (0.01, 0.10, 0.05, 0.10, 52, 2),
        (0.01, 0.06, 0.05, 0.10, 110, 3),
        (0.1, 0.3, 0.02, 0.03, 60, 11),
        # A'Hern (2001), alpha = .05, reject at c + 1 or more (quoted from memory, recomputed).
        (0.05, 0.20, 0.05, 0.2, 27, 3),
        (0.1, 0.3, 0.05, 0.2, 25, 5),
        (0.1, 0.3, 0.05, 0.1, 33, 6),
        (0.3, 0.5, 0.05, 0.1, 53, 21),
        # GOST R 27.403-2009, Table A.1 (IEC 61123 family).
        (0.0005, 0.0010, 0.10, 0.10, 20125, 14),
        (0.0010, 0.00175, 0.10, 0.10, 16102, 21),
        (0.0010, 0.0020, 0.05, 0.05, 15703, 22),
    ],
)
def test_published_binomial_plans(p0: float, p1: float, alpha: float, beta: float, n: int, c: int) -> None:
    found = fixed_sample.binomial(p0, p1, alpha, beta)
    assert found is not None
    assert (found.size, found.limit) == (n, c)
    assert found.lower_risk <= alpha
    assert found.upper_risk <= beta


def test_no_smaller_binomial_plan_keeps_both_risks() -> None:
    def accepts(c: int, n: int, p: float) -> mpf:
        return sum(choose(n, k) * mpf(p) ** k * (1 - mpf(p)) ** (n - k) for k in range(c + 1))

    for n in range(1, 52):
        for c in range(n):
            assert not (1 - accepts(c, n, 0.01) <= 0.05 and accepts(c, n, 0.10) <= 0.10)


@pytest.mark.parametrize(
    ("d", "alpha", "beta", "duration", "failures"),
    [(2.0, 0.096, 0.106, 18.8, 14), (3.0, 0.094, 0.099, 9.3, 6), (3.0, 0.307, 0.333, 1.1, 1)],
)
def test_fixed_duration_plans(d: float, alpha: float, beta: float, duration: float, failures: int) -> None:
    """MIL-HDBK-781A plans XII-D, XV-D and XXI-D (quoted from memory, recomputed); risks printed to .1 %."""
    found = fixed_sample.poisson(1 / d, 1.0, alpha + 5e-4, beta + 5e-4)
    assert found is not None
    assert found.limit + 1 == failures
    assert found.size <= duration + 0.05


@pytest.mark.parametrize(
    ("power", "n"), [(0.5, 271), (0.6, 361), (0.7, 471), (0.8, 619), (0.9, 857), (0.95, 1083), (0.99, 1578)]
)
def test_natrellas_sizes(power: float, n: int) -> None:
    """Natrella, NBS Handbook 91, one-sided alpha = .05, shift .1 sigma (quoted from memory)."""
    found = fixed_sample.normal(0.0, 0.1, 1.0, 0.05, 1 - power)
    assert found.size == n
    assert found.upper_risk <= 1 - power
    assert found.limit == pytest.approx(1.6448536269514722 * math.sqrt(n))
