"""JSON that is sound, and JSON that no form could be."""

import json
import sys
from typing import Any

import pytest
from hypothesis import example, given
from hypothesis import strategies as st
from pydantic import ValidationError

from service.api.decoding import UnfitNumber, decoded
from service.api.problems import RequestProblem
from service.api.schemas.observations import ObservationsForm


@pytest.mark.parametrize(
    ("body", "pointer"),
    [
        (b'{"values": ["", "", "", ""]}', "/values"),
        (b'{"values": [{}, {}, {}, {}]}', "/values"),
        (b'{"observations": [{"value": [0, 0, 0, 0]}]}', "/observations/0/value"),
        (b'{"known": {' + b",".join(b'"k%d": 0' % i for i in range(500)) + b"}}", "/known"),
    ],
)
def test_what_is_wider_than_any_form_is_refused_before_a_schema_sees_it(body: bytes, pointer: str) -> None:
    with pytest.raises(RequestProblem) as refused:
        decoded(body, longest_list=3)
    assert refused.value.name == "invalid-body"
    assert [fault.pointer for fault in refused.value.faults] == [pointer]


@pytest.mark.parametrize(
    ("field", "bad"), [("values", ""), ("values", {}), ("observations", ""), ("observations", {"x": 1})]
)
def test_a_schema_names_one_bad_element_of_a_list_and_stops(field: str, bad: Any) -> None:
    with pytest.raises(ValidationError) as refused:
        ObservationsForm.model_validate({field: [bad] * 1000})
    assert refused.value.error_count() == 1


@pytest.mark.parametrize(
    "number",
    ["1e-400", "-1e-400", "5e-324", "2e-308", "0." + "0" * 330 + "1", "1e400", "0e-99999", "1." + "0" * 500],
)
def test_a_number_that_a_double_cannot_hold_is_named(number: str) -> None:
    document = decoded(b'{"values": [0.0, %s]}' % number.encode(), longest_list=3)
    with pytest.raises(ValidationError) as refused:
        ObservationsForm.model_validate(document)
    (error,) = refused.value.errors()
    assert error["loc"] == ("values", 1)


@pytest.mark.parametrize("number", ["0", "0.0", "-0.0", "0e5", "0.000", "1e-300", "2.2250738585072014e-308", "1E+5"])
def test_zeros_and_plain_numbers_stay_what_they_are(number: str) -> None:
    assert decoded(number.encode(), longest_list=3) == float(number)


def outcome(text: str) -> Any:
    """What the decoder makes of a text, or that it refuses it."""
    try:
        return decoded(text.encode(), longest_list=10)
    except RequestProblem as refusal:
        return refusal.name


@given(st.lists(st.one_of(st.floats(allow_nan=False, allow_infinity=False), st.integers()), max_size=8))
def test_plain_lists_of_numbers_are_read_to_the_bit(numbers: list[float]) -> None:
    text = json.dumps({"values": numbers})
    found = outcome(text)["values"]
    assert list(map(repr, found)) == list(map(repr, json.loads(text, parse_float=found_or)["values"]))


def found_or(text: str) -> Any:
    """The nearest double, unless the service calls the number unfit."""
    number = float(text)
    return number if number == 0.0 or abs(number) >= sys.float_info.min else UnfitNumber(text)


@given(st.text(alphabet="0159.,-+[]{}: eE\t\n\u00a0", max_size=12))
@example("1,,2").via("two commas")
@example("01").via("a leading zero")
@example("1.").via("no fraction")
@example("-").via("a sign alone")
@example("1 2").via("no comma")
@example("[1]").via("a nested list")
def test_both_decoders_refuse_the_same(inside: str) -> None:
    """A member more takes a body off the fast way; what it says of the list must not depend on it."""
    fast, slow = outcome(f'{{"values":[{inside}]}}'), outcome(f'{{"values":[{inside}],"x":0}}')
    assert repr(fast) == repr({"values": slow["values"]} if isinstance(slow, dict) and "values" in slow else slow)
