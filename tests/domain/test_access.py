"""What a key may be."""

from datetime import UTC, datetime, timedelta

import pytest

from service.domain.access import UNLIMITED, Limits, Role, check_new_key, limits_of
from service.domain.errors import InvalidKey
from service.domain.sequential_test import Subject, SubjectKind

NOW = datetime(2031, 5, 4, 9, 30, tzinfo=UTC)


def test_a_key_may_end_later_or_never() -> None:
    check_new_key("line-2", None, NOW)
    check_new_key("line-2", NOW + timedelta(microseconds=1), NOW)


def test_a_key_is_not_born_dead() -> None:
    with pytest.raises(InvalidKey, match="must lie in the future") as refused:
        check_new_key("line-2", NOW, NOW)
    assert [fault.pointer for fault in refused.value.faults] == ["/expires_at"]


@pytest.mark.parametrize("name", ["", "a b", "-a", "a\n", "ä", "x" * 101])
def test_a_key_has_a_name_that_is_one(name: str) -> None:
    with pytest.raises(InvalidKey) as refused:
        check_new_key(name, None, NOW)
    assert [fault.pointer for fault in refused.value.faults] == ["/name"]


def test_limits_ask_for_one_of_the_subjects_and_one_value_of_each_label() -> None:
    lot, experiment = Subject(SubjectKind.LOT, "7"), Subject(SubjectKind.EXPERIMENT, "7")
    limits = limits_of([lot, lot], [("line", "3"), ("shift", "a"), ("line", "4"), ("line", "3")])
    assert limits == Limits((lot,), {"line": ("3", "4"), "shift": ("a",)})
    assert limits.allow(lot, {"line": "4", "shift": "a", "more": "x"})
    assert not limits.allow(experiment, {"line": "4", "shift": "a"})
    assert not limits.allow(lot, {"line": "5", "shift": "a"})
    assert not limits.allow(lot, {"line": "3"})
    assert UNLIMITED.allow(experiment, {})
    assert not UNLIMITED.is_limited


def test_an_administrator_has_no_limits() -> None:
    limits = limits_of([], [("line", "3")])
    check_new_key("line-2", None, NOW, Role.ENGINEER, limits)
    with pytest.raises(InvalidKey) as refused:
        check_new_key("line-2", None, NOW, Role.ADMINISTRATOR, limits)
    assert [fault.pointer for fault in refused.value.faults] == ["/role"]
    with pytest.raises(InvalidKey) as refused:
        check_new_key("line-2", None, NOW, Role.VIEWER, limits_of([], [("a b", "3")]))
    assert [fault.pointer for fault in refused.value.faults] == ["/labels"]
