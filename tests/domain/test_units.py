"""A unit may be counted once."""

import pytest

from service.domain.errors import RepeatedUnits
from service.domain.units import new_units


def observations(*units: str | None) -> dict[str, object]:
    return {"observations": [{"value": 0} if unit is None else {"value": 0, "unit": unit} for unit in units]}


def test_new_units_come_with_their_sequences() -> None:
    assert new_units(observations("a", None, " b "), 11, lambda _: {}) == {"a": 11, "b": 13}
    assert new_units({"values": [0, 0]}, 11, lambda _: {}) == {}


def test_blanks_around_a_serial_number_do_not_make_it_another() -> None:
    with pytest.raises(RepeatedUnits) as refused:
        new_units(observations("A1", None, "A1 "), 1, lambda _: {})
    assert [fault.pointer for fault in refused.value.faults] == ["/observations/0/unit", "/observations/2/unit"]


def test_a_unit_that_the_test_has_is_named_with_its_observation() -> None:
    with pytest.raises(RepeatedUnits) as refused:
        new_units(observations("a", " b"), 5, lambda units: {unit: 2 for unit in units if unit == "b"})
    assert [fault.detail for fault in refused.value.faults] == ["unit 'b' was reported as observation 2"]
