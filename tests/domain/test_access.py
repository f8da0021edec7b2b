"""What a key may be."""

from datetime import UTC, datetime, timedelta

import pytest

from service.domain.access import check_new_key
from service.domain.errors import InvalidKey

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
