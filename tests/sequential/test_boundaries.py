"""The two thresholds."""

from hypothesis import given
from hypothesis import strategies as st
from mpmath import log, mpf
from pytest import approx  # noqa: PT013 - reads as the formula does

from service.sequential import boundaries

risks = st.floats(1e-12, 0.49)


@given(risks, risks)
def test_walds_thresholds_agree_with_sixty_digits(alpha: float, beta: float) -> None:
    found = boundaries.wald(alpha, beta)
    a, b = mpf(alpha), mpf(beta)
    assert found.reject == approx(float(log((1 - b) / a)), rel=1e-13)
    assert found.accept == approx(float(log(b / (1 - a))), rel=1e-13)


@given(risks, risks)
def test_strict_thresholds_lie_outside_walds(alpha: float, beta: float) -> None:
    loose, tight = boundaries.wald(alpha, beta), boundaries.strict(alpha, beta)
    assert tight.accept < loose.accept < 0 < loose.reject < tight.reject
    assert tight.reject == approx(float(log(1 / mpf(alpha))), rel=1e-14)
    assert tight.accept == approx(float(log(mpf(beta))), rel=1e-14)
