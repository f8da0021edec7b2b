"""How often a key may ask: the buckets, and the answer of the service."""

from hypothesis import given
from hypothesis import strategies as st

from service.web.rates import Rates
from tests.running import Running


def test_a_burst_passes_and_then_the_rate_counts() -> None:
    rates = Rates(rate=2.0, burst=3)
    assert [rates.seconds_to_wait("a", 0.0) for _ in range(4)] == [0, 0, 0, 1]
    assert rates.seconds_to_wait("b", 0.0) == 0
    assert [rates.seconds_to_wait("a", 0.5), rates.seconds_to_wait("a", 0.5)] == [0, 1]
    assert [rates.seconds_to_wait("a", 1000.0) for _ in range(4)] == [0, 0, 0, 1]
    assert Rates(rate=0.1, burst=1).seconds_to_wait("a", 0.0) == 0


def test_who_waits_as_long_as_told_passes() -> None:
    rates = Rates(rate=0.07, burst=1)
    assert rates.seconds_to_wait("a", 5.0) == 0
    wait = rates.seconds_to_wait("a", 5.0)
    assert wait == 15  # 1/0.07 is 14.3
    assert rates.seconds_to_wait("a", 5.0 + wait) == 0


def test_no_rate_is_no_limit() -> None:
    rates = Rates(rate=0.0, burst=1)
    assert {rates.seconds_to_wait("a", 0.0) for _ in range(1000)} == {0}


@given(
    st.floats(0.1, 100.0),
    st.integers(1, 50),
    st.lists(st.floats(0.0, 1.0), min_size=1, max_size=200),
)
def test_no_more_pass_than_the_burst_and_the_rate_allow(rate: float, burst: int, pauses: list[float]) -> None:
    rates, now, passed = Rates(rate, burst), 0.0, 0
    for pause in pauses:
        now += pause
        passed += rates.seconds_to_wait("a", now) == 0
        assert passed <= burst + rate * now + 1e-6


def test_a_key_that_asks_too_often_is_told_when_to_come_back_and_disturbs_no_other(guarded: Running) -> None:
    with (
        guarded.client("viewer") as viewer,
        guarded.client("collector") as collector,
    ):
        assert {viewer.get("/v1/summary").status_code for _ in range(30)} == {200}
        refused = viewer.get("/v1/tests/x", headers={"If-None-Match": "*"})
        assert refused.status_code == 429
        assert 1 <= int(refused.headers["Retry-After"]) <= 5
        assert refused.json()["type"] == "urn:sprt-monitor:problem:too-many-requests"
        assert collector.get("/v1/summary").status_code == 200
        assert viewer.get("/healthz").status_code == 200
