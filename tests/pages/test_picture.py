"""The picture of a test against the figures that the page says beside it."""

from datetime import UTC, datetime

import pytest

from service.domain.checking import checked_content
from service.domain.gathering import alone
from service.domain.observing import observe
from service.domain.path import path_of
from service.domain.plan import Plan, fingerprint_of
from service.domain.procedure import procedure_of
from service.domain.sequential_test import SequentialTest, Status, Subject, SubjectKind
from service.domain.state import State
from service.pages.views.picture import View, picture_of

NOW = datetime(2031, 5, 4, 9, 0, tzinfo=UTC)


@pytest.mark.parametrize("known", [{}, {"mean": 0.0}])
def test_a_spread_is_drawn_over_its_measurements_though_the_first_may_bring_no_freedom(
    known: dict[str, float],
) -> None:
    content = {"family": "normal_variance", "h0": 1.0, "h1": 2.0, "alpha": 0.05, "beta": 0.1, "known": known}
    document = checked_content(content)
    plan = Plan("spread", document, fingerprint_of(document), NOW, "me")
    procedure, body = procedure_of(plan), {"values": [0.3, -0.4, 1.1]}
    state = observe(procedure, State(), body, NOW)
    subject = Subject(SubjectKind.LOT, "1")
    test = SequentialTest("lot-1", "spread", subject, {}, Status.OPEN, 2, NOW, "me", NOW, state)
    path = path_of(procedure, [alone(body)], 100)
    picture = picture_of(test, plan, path, View.COUNT)
    assert [x for x, _ in picture.walk] == [0.0, 1.0, 2.0, 3.0]
    nearest = min(reach.end[0] for reach in picture.reaches)
    assert nearest == 4.0
