"""Streams that keep what a plan supposes, streams that do not, and streams that hardly say anything."""

import json
import math
from collections.abc import Callable
from datetime import UTC, datetime
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import binom

from service.domain import assumptions, gathering
from service.domain.assumptions import NO_EFFECT, Assumptions, assumptions_of, holm
from service.domain.checking import checked_content
from service.domain.checks import Check
from service.domain.families import FAMILIES, Family, Increments
from service.domain.observing import observe
from service.domain.procedure import procedure_of_document
from service.domain.state import State

NOW = datetime(2031, 5, 4, 9, 30, tzinfo=UTC)
RULES = {"alpha": 0.05, "beta": 0.1, "boundaries": "wald", "statistic": "simple"}
PLANS: dict[str, dict[str, Any]] = {
    "bernoulli": {"h0": 0.05, "h1": 0.2, **RULES},
    "poisson": {"h0": 1.0, "h1": 2.0, **RULES},
    "exponential": {"h0": 100.0, "h1": 50.0, **RULES},
    "normal": {"h0": 10.0, "h1": 10.5, "known": {"sigma": 0.5}, **RULES},
}
Document = dict[str, Any]
Draw = Callable[[np.random.Generator], Document]


def posted(family: str, *documents: Document, **change: Any) -> Assumptions:
    """What is said of a test with these submissions."""
    procedure = procedure_of_document(checked_content({"family": family, **PLANS[family], **change}))
    state, bodies = State(), []
    for document in documents:
        bodies.append((state.sequence + 1, json.dumps(document)))
        state = observe(procedure, state, document, NOW)
    return assumptions_of(procedure, state, bodies)


def checks_of(family: str, document: Document) -> dict[str, Check]:
    return {check.name: check for check in posted(family, document).checks}


def groups(values: Any, sizes: Any) -> Document:
    return {"observations": [{"value": int(d), "size": int(n)} for d, n in zip(values, sizes, strict=True)]}


def reports(values: Any, exposures: Any) -> Document:
    return {"observations": [{"value": int(c), "exposure": float(e)} for c, e in zip(values, exposures, strict=True)]}


def lives(times: Any, failed: Any) -> Document:
    return {"observations": [{"time": float(t), "failed": bool(f)} for t, f in zip(times, failed, strict=True)]}


def values(found: Any) -> Document:
    return {"values": found.tolist()}


def censored(generator: np.random.Generator, ages: Any) -> Document:
    """Units that are taken off test at moments of their own."""
    off = generator.exponential(100.0, len(ages))
    return lives(np.minimum(ages, off), ages <= off)


KEPT: dict[str, tuple[str, Draw]] = {
    "single units": ("bernoulli", lambda g: values((g.random(120) < 0.2).astype(int))),
    "groups": ("bernoulli", lambda g: groups(g.binomial(30, 0.1, 40), np.full(40, 30))),
    "uneven groups": ("bernoulli", lambda g: groups(g.binomial(n := g.integers(1, 60, 40), 0.1), n)),
    "counts": ("poisson", lambda g: values(g.poisson(1.5, 60))),
    "counts over exposures": ("poisson", lambda g: reports(g.poisson(e := g.lognormal(0.0, 1.0, 60)), e)),
    "lives": ("exponential", lambda g: values(g.exponential(100.0, 30))),
    "lives with suspensions": ("exponential", lambda g: censored(g, g.exponential(100.0, 60))),
    "measurements": ("normal", lambda g: values(g.normal(10.0, 0.5, 40))),
}


@pytest.mark.parametrize("kind", KEPT)
def test_where_all_suppositions_hold_p_values_are_as_rare_as_they_say(kind: str) -> None:
    """The bounds are passed once in 100,000 by p-values that are uniform; discrete ones are rarer."""
    family, draw = KEPT[kind]
    generator, streams, found = np.random.default_rng(11), 150, dict[str, list[float]]()
    plan = FAMILIES[family]
    for _ in range(streams):
        for check in plan.checks(
            plan.read(draw(generator), PLANS[family].get("known", {})), PLANS[family].get("known", {})
        ):
            if check.found is not None:
                found.setdefault(check.name, []).append(check.found.p_value)
    assert found
    for name, p_values in found.items():
        assert len(p_values) > streams / 2, name
        for level in (0.05, 0.2):
            most = binom.ppf(1.0 - 1e-5, len(p_values), level)
            assert sum(p <= level for p in p_values) <= most, (name, level)


G = np.random.default_rng(23)
STEPS = np.linspace(0.0, 1.0, 400)
BROKEN: dict[str, tuple[str, Document, str, str]] = {
    "bursts of failures": ("bernoulli", values(np.repeat((G.random(60) < 0.3).astype(int), 4)), "runs", "follows"),
    "regular failures": ("bernoulli", values(np.tile([0, 0, 1], 60)), "runs", "alternate"),
    "a rising proportion": ("bernoulli", values((G.random(400) < 0.5 * STEPS).astype(int)), "halves", "rises"),
    "overdispersed groups": (
        "bernoulli",
        groups(G.binomial(50, G.beta(0.5, 4.5, 40)), np.full(40, 50)),
        "dispersion",
        "varies as well",
    ),
    "groups of a quota": ("bernoulli", groups(np.full(40, 5), np.full(40, 50)), "dispersion", "more alike"),
    "groups that resemble their neighbours": (
        "bernoulli",
        groups(G.binomial(50, np.repeat([0.05, 0.3] * 10, 4)), G.integers(50, 60, 80)),
        "autocorrelation",
        "resembles",
    ),
    "gamma-mixed counts": ("poisson", values(G.poisson(G.gamma(0.5, 4.0, 80))), "dispersion", "varies as well"),
    "mixed counts over exposures": (
        "poisson",
        reports(G.poisson(G.gamma(0.5, 4.0, 80) * (e := G.lognormal(0.0, 1.0, 80))), e),
        "dispersion",
        "varies as well",
    ),
    "a falling rate": ("poisson", values(G.poisson(3.0 * (1.0 - STEPS))), "centre", "rarer"),
    "counts that alternate": ("poisson", values(G.poisson(np.tile([1.0, 8.0], 50))), "autocorrelation", "differs"),
    "wear-out": ("exponential", values(100.0 * G.weibull(3.0, 40)), "shape", "wear out"),
    "early failures": ("exponential", values(100.0 * G.weibull(0.4, 80)), "shape", "early in life"),
    "wear-out with suspensions": ("exponential", censored(G, 80.0 * G.weibull(4.0, 120)), "shape", "wear out"),
    "failures that become frequent": (
        "exponential",
        values(G.exponential(200.0 * (1.05 - STEPS))),
        "centre",
        "more frequent",
    ),
    "failures in bursts": (
        "exponential",
        values(G.exponential(np.repeat(np.tile([5.0, 500.0], 8), 10))),
        "runs",
        "follows",
    ),
    "drifting measurements": ("normal", values(G.normal(10.0 + STEPS, 0.5)), "trend", "rise"),
    "a sigma too small": ("normal", values(G.normal(10.0, 0.8, 60)), "spread", "risks are larger"),
    "a sigma too large": ("normal", values(G.normal(10.0, 0.2, 40)), "spread", "larger than needed"),
    "skewed measurements": ("normal", values(9.5 + G.exponential(0.5, 80)), "shape", "very unusual"),
    "measurements with a memory": (
        "normal",
        values(10.0 + 0.3 * np.convolve(G.normal(size=203), np.ones(4), "valid")),
        "autocorrelation",
        "resembles",
    ),
}


@pytest.mark.parametrize("fault", BROKEN)
def test_an_invented_stream_that_breaks_a_supposition_is_found(fault: str) -> None:
    family, document, name, words = BROKEN[fault]
    check = checks_of(family, document)[name]
    assert check.found is not None
    assert check.found.p_value < 0.001
    assert words in check.sentence
    assert "very unusual" in check.sentence


@pytest.mark.parametrize("name", sorted(FAMILIES))
def test_every_family_there_is_has_checks(name: str) -> None:
    """Without observations none can be made, and each says why."""
    family, nothing = FAMILIES[name], np.zeros(0)
    checks = family.checks(Increments(np.zeros(0, np.int64), nothing, nothing), dict.fromkeys(family.known, 1.0))
    assert checks
    assert all(check.found is None and check.sentence.startswith("Not made: ") for check in checks)
    assert len({check.name for check in checks}) == len(checks)


@pytest.mark.parametrize("family", sorted(PLANS))
def test_an_empty_stream_has_no_checks_made_and_says_why(family: str) -> None:
    found = posted(family)
    assert (found.observations, found.first_sequence, found.made, found.smallest_adjusted) == (0, None, 0, None)
    assert found.summary == "No check could be made yet."
    assert found.notes == (NO_EFFECT,)
    assert len(found.checks) >= 2
    assert all(check.sentence.startswith("Not made: needs at least ") for check in found.checks)


def test_what_cannot_vary_is_said_in_words() -> None:
    failing = checks_of("bernoulli", {"values": [1] * 30})
    assert failing["halves"].sentence == "Not made: all units are nonconforming, so that nothing can drift."
    assert failing["runs"].sentence == "Not made: all values are the same, so that their order says nothing."
    assert not any(c.found for c in checks_of("poisson", {"values": [0] * 30}).values())
    same = checks_of("normal", {"values": [10.1] * 30})
    assert [name for name, check in same.items() if check.found] == ["spread"]
    uneven = checks_of("poisson", reports([1, 2] * 20, [1.0, 2.0] * 20))
    assert (
        uneven["runs"].sentence == "Not made: needs observations of one size or exposure; the autocorrelation does not."
    )
    few = checks_of("exponential", lives([5.0, 7.0, 9.0], [False, True, False]))
    assert few["shape"].sentence == "Not made: needs at least 5 failures, and there are 1."


def test_single_units_are_not_checked_twice_for_the_same() -> None:
    assert list(checks_of("bernoulli", {"values": [0, 1] * 20})) == ["runs", "halves"]
    grouped = checks_of("bernoulli", groups([1, 2] * 20, [10] * 40))
    assert list(grouped) == ["runs", "autocorrelation", "halves", "dispersion"]


def test_holms_p_values_by_hand() -> None:
    """Four p-values: 4 times the smallest, 3 times the next and so on, never falling and at most 1."""
    assert holm([0.01, 0.04, 0.03, 0.005]) == pytest.approx([0.03, 0.06, 0.06, 0.02])
    assert holm([0.9, 0.8]) == [1.0, 1.0]
    assert holm([]) == []


def test_the_summary_counts_what_was_made_and_found() -> None:
    drifting = posted("normal", BROKEN["drifting measurements"][1])
    p_values = [check.found.p_value for check in drifting.checks if check.found]
    assert drifting.made == len(p_values) == 5
    assert drifting.smallest_adjusted == pytest.approx(5 * min(p_values), rel=1e-12)
    below = sum(p < 0.05 for p in p_values)
    assert drifting.summary.startswith(f"5 checks made, {below} with a p-value below 0.05.")
    assert "one p-value in twenty is below 0.05 by chance" in drifting.summary


def test_counted_observations_and_overrun_are_looked_at_together() -> None:
    found = posted("bernoulli", {"values": [1, 0, 0, 0, 0] * 2 + [0] * 30 + [1, 0, 0]})
    assert (found.observations, found.first_sequence, found.last_sequence) == (43, 1, 43)
    # By hand: two nonconforming, and as many conforming as bring the evidence down to ln(.1/.95).
    conforming = math.ceil((2.0 * math.log(4.0) - math.log(0.1 / 0.95)) / math.log(0.95 / 0.8))
    assert found.overrun == 43 - (2 + conforming) == 11
    assert any(f"The {found.overrun} observations after the decision" in note for note in found.notes)
    assert any("Sampling stopped because of what was observed" in note for note in found.notes)
    (halves,) = (check for check in found.checks if check.name == "halves")
    assert halves.sentence.endswith("so this p-value is approximate.")
    running = posted("bernoulli", {"values": [0] * 3})
    assert any("Each look at a running test" in note for note in running.notes)


def test_only_the_latest_are_looked_at_where_there_are_too_many(monkeypatch: pytest.MonkeyPatch) -> None:
    stream = np.tile([10.0, 10.4, 10.1, 10.6, 10.2, 10.2], 15)
    pieces = [values(piece) for piece in np.split(stream, [7, 31, 62])]
    monkeypatch.setattr(assumptions, "MOST_OBSERVATIONS", 50)
    late = posted("normal", *pieces)
    assert (late.observations, late.first_sequence, late.last_sequence) == (50, 41, 90)
    assert "Observations 41 to 90 of 90 are looked at, for there are more than 50." in late.notes
    decided = posted("normal", *pieces, values(np.full(200, 11.0)))
    assert (decided.first_sequence, decided.last_sequence, decided.overrun) == (43, 92, 0)
    early = posted("normal", values(np.full(200, 11.0)))
    assert (early.first_sequence, early.last_sequence) == (1, 50)
    # By hand: each measurement of 11.0 brings (0.5/0.25) * 0.75 = 1.5 nats, and ln(.9/.05) = 2.89 rejects.
    assert early.overrun == 48
    monkeypatch.undo()
    alone = posted("normal", values(stream[40:]))
    assert [check.found for check in late.checks] == [check.found for check in alone.checks]


def test_how_the_stream_was_split_does_not_matter(monkeypatch: pytest.MonkeyPatch) -> None:
    """Submissions of both forms, put together or not."""
    stream = np.random.default_rng(5).exponential(100.0, 60)
    whole = posted("exponential", values(stream))
    parts = [values(stream[:1]), values(stream[1:20]), lives(stream[20:41], [True] * 21), values(stream[41:])]
    assert posted("exponential", *parts).checks == whole.checks
    singles = [values(stream[i : i + 1]) for i in range(60)]
    assert posted("exponential", *singles).checks == whole.checks
    monkeypatch.setattr(gathering, "MOST_CHARACTERS", 150)
    assert posted("exponential", *singles).checks == whole.checks


def numbers(largest: float, smallest: float = 0.0) -> st.SearchStrategy[float]:
    return st.floats(smallest, largest, allow_nan=False)


@st.composite
def streams(draw: st.DrawFn) -> tuple[str, Document]:
    """Anything a family takes, of any magnitude."""
    family = draw(st.sampled_from(sorted(PLANS)))
    count = draw(st.integers(1, 60))

    def many(one: st.SearchStrategy[Any]) -> list[Any]:
        return draw(st.lists(one, min_size=count, max_size=count))

    if family == "normal":
        return family, {"values": many(st.one_of(numbers(1e100, -1e100), st.sampled_from([0.0, 1.0, 1e-300])))}
    if family == "poisson":
        exposures = many(st.one_of(numbers(1e100, 1e-300), st.sampled_from([1.0, 2.0])))
        return family, reports(many(st.integers(0, 10**9) | st.integers(0, 3)), exposures)
    if family == "exponential":
        return family, lives(many(st.one_of(numbers(1e100), st.sampled_from([0.0, 1.0, 1e-300]))), many(st.booleans()))
    sizes = many(st.integers(1, 10**9) | st.integers(1, 3))
    return family, groups([draw(st.integers(0, size)) for size in sizes], sizes)


@settings(max_examples=100, deadline=None)
@given(streams(), st.sampled_from([1e-100, 0.5, 1e100]))
def test_every_stream_that_is_taken_has_finite_figures(stream: tuple[str, Document], sigma: float) -> None:
    name, document = stream
    family: Family = FAMILIES[name]
    for check in family.checks(family.read(document, {"sigma": sigma}), {"sigma": sigma}):
        assert check.sentence.endswith(".")
        if check.found is not None:
            assert math.isfinite(check.found.figure), check
            assert 0.0 <= check.found.p_value <= 1.0, check


def test_a_family_without_checks_of_its_own_has_those_of_order() -> None:
    """The default takes what each observation adds to the total."""
    family = FAMILIES["normal"]
    seen = family.read({"values": list(range(30))}, {})
    assert [check.name for check in Family.checks(family, seen, {})] == ["runs", "autocorrelation", "trend"]
    assert all(check.found and check.found.p_value < 1e-6 for check in Family.checks(family, seen, {}))
