"""What the interface says of the stream's suppositions, family by family, and that nothing else moves."""

from typing import Any

import httpx
import numpy as np
import pytest
from statsmodels.datasets import nile, strikes

from tests.api.examples import PUMP, SEAL, SHAFT, WELD, Namer, with_test

Body = dict[str, Any]
G = np.random.default_rng(31)

STREAMS: dict[str, tuple[Body, Body, list[str]]] = {
    "bernoulli": (SEAL, {"values": [0, 0, 1, 0, 0] * 8}, ["runs", "halves"]),
    "poisson": (WELD, {"values": [1, 0, 2, 1, 0, 1] * 8}, ["runs", "autocorrelation", "centre", "dispersion"]),
    "exponential": (
        PUMP,
        {"values": G.exponential(900.0, 40).tolist()},
        ["runs", "autocorrelation", "centre", "shape"],
    ),
    "normal": (
        SHAFT,
        {"values": G.normal(10.2, 0.5, 40).tolist()},
        ["runs", "autocorrelation", "trend", "spread", "shape"],
    ),
}


def posted(client: httpx.Client, new_name: Namer, plan: Body, *bodies: Body) -> str:
    key = with_test(client, new_name, plan)
    for body in bodies:
        answer = client.post(f"/v1/tests/{key}/observations", json=body)
        assert answer.status_code == 201, answer.text
    return key


def asked(client: httpx.Client, key: str) -> Body:
    answer = client.get(f"/v1/tests/{key}/assumptions")
    assert answer.status_code == 200, answer.text
    return answer.json()  # type: ignore[no-any-return]


def by_name(found: Body) -> dict[str, Body]:
    return {check["name"]: check for check in found["checks"]}


@pytest.mark.parametrize("family", sorted(STREAMS))
def test_each_family_has_its_checks(admin: httpx.Client, new_name: Namer, family: str) -> None:
    plan, body, names = STREAMS[family]
    key = posted(admin, new_name, plan, body)
    before = admin.get(f"/v1/tests/{key}").json()
    found = asked(admin, key)
    assert (found["key"], found["family"], found["affects_decision"]) == (key, family, False)
    assert (found["observations"], found["first_sequence"]) == (len(body["values"]), 1)
    assert (found["decision"], found["overrun"]) == (before["decision"], before["overrun"])
    assert list(by_name(found)) == names
    for check in found["checks"]:
        assert 0.0 <= check["p_value"] <= check["adjusted_p_value"] <= 1.0, check
        assert check["sentence"]
    assert found["checks_made"] == len(names)
    assert found["smallest_adjusted_p_value"] == min(check["adjusted_p_value"] for check in found["checks"])
    assert found["notes"][0].startswith("These checks have no effect on the decision")
    assert admin.get(f"/v1/tests/{key}").json() == before


@pytest.mark.parametrize("family", sorted(STREAMS))
@pytest.mark.parametrize("count", [0, 1])
def test_with_nothing_or_one_observation_every_check_says_what_is_lacking(
    admin: httpx.Client, new_name: Namer, family: str, count: int
) -> None:
    plan, body, names = STREAMS[family]
    bodies = [{"values": body["values"][:1]}] if count else []
    found = asked(admin, posted(admin, new_name, plan, *bodies))
    assert found["observations"] == count
    assert [check["name"] for check in found["checks"]] == names
    assert found["checks_made"] == 0
    for check in found["checks"]:
        assert check["figure"] is check["p_value"] is check["adjusted_p_value"] is None
        assert check["sentence"].startswith("Not made: needs at least ")
    assert found["smallest_adjusted_p_value"] is None
    assert (found["first_sequence"], found["last_sequence"]) == ((1, 1) if count else (None, None))


@pytest.mark.parametrize(
    ("plan", "body", "made"),
    [
        (SEAL, {"values": [0] * 40}, []),
        (SEAL, {"values": [1] * 40}, []),
        (WELD, {"values": [0] * 40}, []),
        (WELD, {"values": [2] * 40}, ["centre", "dispersion"]),
        (SHAFT, {"values": [10.2] * 40}, ["spread"]),
        (PUMP, {"values": [700.0] * 40}, ["centre", "shape"]),
        (PUMP, {"observations": [{"time": 50.0, "failed": False}] * 40}, []),
    ],
)
def test_observations_that_are_all_alike(
    admin: httpx.Client, new_name: Namer, plan: Body, body: Body, made: list[str]
) -> None:
    found = asked(admin, posted(admin, new_name, plan, body))
    assert [name for name, check in by_name(found).items() if check["p_value"] is not None] == made
    assert all(check["sentence"].startswith("Not made: ") for check in found["checks"] if check["p_value"] is None)


def test_groups_and_exposures_and_suspensions(admin: httpx.Client, new_name: Namer) -> None:
    groups = [{"value": d, "size": 25} for d in (0, 9, 0, 1, 8, 0, 0, 10, 1, 0, 7, 0)]
    dispersion = by_name(asked(admin, posted(admin, new_name, SEAL, {"observations": groups})))["dispersion"]
    # By hand: 36 of 300, so p = .12; sum of (d - 3)**2 is 188, over 25 * .12 * .88 and 11 * 300/299.
    assert dispersion["figure"] == pytest.approx(188 / 2.64 / (11 * 300 / 299), rel=1e-9)
    assert dispersion["p_value"] < 1e-6

    exposures = [2.0, 1.0, 4.0, 1.0, 6.0, 2.0] * 2
    counts = [{"value": c, "exposure": e} for c, e in zip([4, 1, 9, 2, 12, 3] * 2, exposures, strict=True)]
    checks = by_name(asked(admin, posted(admin, new_name, WELD, {"observations": counts})))
    assert checks["runs"]["p_value"] is None
    # By hand: 62 counts over exposure 32.
    squares = sum((r["value"] - 62 * r["exposure"] / 32) ** 2 / (62 * r["exposure"] / 32) for r in counts)
    assert checks["dispersion"]["figure"] == pytest.approx(squares / 11, rel=1e-9)
    assert checks["dispersion"]["p_value"] < 0.01
    assert "more alike than chance" in checks["dispersion"]["sentence"]

    times = [30.0, 40.0, 50.0, 60.0, 70.0, 80.0]
    body = {"observations": [{"time": t, "failed": t != times[2]} for t in times]}
    shape = by_name(asked(admin, posted(admin, new_name, PUMP, body)))["shape"]
    # By hand: total time on test at ages 30, 40, 60, 70, 80 is 180, 230, 300, 320, 330.
    assert shape["figure"] == pytest.approx((180 + 230 + 300 + 320) / 4 / 330, rel=1e-12)
    assert shape["sentence"].endswith("The suspensions make this approximate.")


def test_the_fall_of_the_nile_speaks_against_its_plan(admin: httpx.Client, new_name: Namer) -> None:
    """Yearly flows 1871-1970: a step in 1899, so that a steady mean and independence are both out of the question."""
    flows = [float(v) for v in nile.load_pandas().data["volume"]]
    plan = {"family": "normal", "h0": 1100.0, "h1": 850.0, "alpha": 0.01, "beta": 0.01, "known": {"sigma": 130.0}}
    found = asked(admin, posted(admin, new_name, plan, {"values": flows}))
    checks = by_name(found)
    assert checks["trend"]["p_value"] < 1e-4
    assert checks["autocorrelation"]["p_value"] < 1e-4
    assert "fall" in checks["trend"]["sentence"]
    pairs = [np.sign(b - a) for i, a in enumerate(flows) for b in flows[i + 1 :]]
    assert np.sign(checks["trend"]["figure"]) == np.sign(sum(pairs))
    assert found["decision"] == "accept"
    assert found["overrun"] > 0
    assert any("after the decision are looked at as well" in note for note in found["notes"])


def test_the_order_of_the_strikes_is_that_of_their_file(admin: httpx.Client, new_name: Namer) -> None:
    """62 durations, grouped by year in the file; Gini's figure by all pairs."""
    times = [float(v) for v in strikes.load_pandas().data["duration"]]
    plan = {"family": "exponential", "h0": 40.0, "h1": 20.0, "alpha": 0.05, "beta": 0.05}
    shape = by_name(asked(admin, posted(admin, new_name, plan, {"values": times})))["shape"]
    gini = sum(abs(a - b) for a in times for b in times) / (2 * 62 * 61 * np.mean(times))
    assert shape["figure"] == pytest.approx(1.0 - gini, rel=1e-10)


def test_the_answer_is_not_sent_again_while_nothing_was_posted(admin: httpx.Client, new_name: Namer) -> None:
    key = posted(admin, new_name, SEAL, {"values": [0, 1, 0]})
    first = admin.get(f"/v1/tests/{key}/assumptions")
    tag = {"If-None-Match": first.headers["ETag"]}
    assert admin.get(f"/v1/tests/{key}/assumptions", headers=tag).status_code == 304
    admin.post(f"/v1/tests/{key}/observations", json={"values": [0]})
    again = admin.get(f"/v1/tests/{key}/assumptions", headers=tag)
    assert (again.status_code, again.json()["observations"]) == (200, 4)


def test_an_unknown_test_is_404(admin: httpx.Client) -> None:
    for key in ("nowhere", "a%00b", "x" * 101):
        answer = admin.get(f"/v1/tests/{key}/assumptions")
        assert answer.status_code == 404
        assert answer.headers["Content-Type"] == "application/problem+json"
    assert admin.get("/v1/tests/nowhere/assumptions", headers={"If-None-Match": "*"}).status_code == 404


def test_several_submissions_are_one_stream(admin: httpx.Client, new_name: Namer) -> None:
    stream = G.normal(10.2, 0.5, (3, 1500))
    key = posted(admin, new_name, SHAFT, *({"values": piece.tolist()} for piece in stream))
    found = asked(admin, key)
    assert found["observations"] == 4500
    assert by_name(found)["spread"]["figure"] == pytest.approx(np.std(stream, ddof=1) / 0.5, rel=1e-12)
