"""
JSON, decoded strictly: in UTF-8, bounded in depth and width, no key twice in one object.

Width is checked here, before any schema sees the document, because a schema makes a fault of every bad element.
Numbers that no double stands for get through on purpose, so that the schema can name where they stand.
"""

import json
import re
import sys
from contextlib import suppress
from dataclasses import dataclass
from typing import Any

from pydantic_core import from_json

from service.api.problems import RequestProblem, pointer_to
from service.domain.errors import Fault

LARGEST_DEPTH = 20
# No form has as many members; more would only be named one by one as unknown.
LARGEST_OBJECT = 200
# Databases refuse to read a number whose text is much longer, or whose exponent is much larger, than a double needs.
LONGEST_NUMBER = 400
LARGEST_EXPONENT = 400
LONG = 300
_MAY_BE_UNFIT = re.compile(rf"[0-9][eE]|(?<![0-9.])[0-9.]{{{LONG}}}")
# One list of numbers in an object of one member: nothing in it can be doubled, nested or escaped.
_PLAIN_NUMBERS = re.compile(
    r'[ \t\r\n]*\{[ \t\r\n]*"[a-z_]+"[ \t\r\n]*:[ \t\r\n]*\[[-0-9., \t\r\n]*\][ \t\r\n]*\}[ \t\r\n]*'
)

_SCALARS = {int, float, str, bool, type(None)}

Location = tuple[str | int, ...]


@dataclass(frozen=True)
class UnfitNumber:
    """A number that a double cannot stand for: it would become zero, lose digits or overflow."""

    text: str

    def __repr__(self) -> str:
        return f"{self.text}, which a double cannot hold"


# The framework validates "from attributes": an object of any class but the built-in ones would pass for a form without
# a single field. A number is no object.
UnfitNumber.__module__ = "builtins"


class _DoubledKey(dict[str, Any]):
    """An object in which a key stands twice."""

    def __init__(self, pairs: list[tuple[str, Any]], key: str) -> None:
        super().__init__(pairs)
        self.key = key


def decoded(body: bytes, longest_list: int) -> Any:  # noqa: ANN401 - JSON is anything
    """
    Decode JSON.

    Raises:
        RequestProblem: It is not JSON in UTF-8, nests too deep, gives a key twice, or is wider than any form.
    """
    try:
        text = body.decode("utf-8")
        document = _parsed(text)
        if "\\u" in text:
            json.dumps(document, ensure_ascii=False, default=repr).encode("utf-8")  # finds half of a surrogate pair
    except RecursionError:
        raise RequestProblem("malformed-body", f"The body nests deeper than {LARGEST_DEPTH} levels.") from None
    except UnicodeError:
        raise RequestProblem("malformed-body", "The body is not text in UTF-8.") from None
    except ValueError as error:
        raise RequestProblem("malformed-body", f"The body is not JSON: {error}.") from None
    _check_structure(document, (), longest_list)
    return document


def _parsed(text: str) -> Any:  # noqa: ANN401
    """A number is unfit only by an exponent or by a very long text; without either the decoders' own speed will do."""
    if _PLAIN_NUMBERS.fullmatch(text) and max(map(len, text.split(","))) < LONG:
        with suppress(ValueError):  # the other decoder says what is wrong
            return from_json(text)
    number = _number if _MAY_BE_UNFIT.search(text) else None
    return json.loads(text, object_pairs_hook=_object, parse_float=number)


def _number(text: str) -> float | UnfitNumber:
    """The nearest double, where there is one that says the same."""
    mantissa, _, exponent = text.lower().partition("e")
    if len(text) > LONGEST_NUMBER or abs(int(exponent or 0)) > LARGEST_EXPONENT:
        return UnfitNumber(text)
    number = float(text)
    is_written_as_zero = not mantissa.strip("-0.")
    return number if is_written_as_zero or abs(number) >= sys.float_info.min else UnfitNumber(text)


def _object(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    result = dict(pairs)
    if len(result) == len(pairs):
        return result
    seen: set[str] = set()
    doubled = next(key for key, _ in pairs if key in seen or seen.add(key))  # type: ignore[func-returns-value]
    return _DoubledKey(pairs, doubled)


def _check_structure(node: dict[str, Any] | list[Any] | Any, place: Location, longest_list: int) -> None:  # noqa: ANN401
    """Refuse doubled keys, deep nesting and wide lists and objects, naming the place."""
    if not isinstance(node, dict | list):
        return
    if len(place) >= LARGEST_DEPTH:
        raise RequestProblem("malformed-body", f"The body nests deeper than {LARGEST_DEPTH} levels.")
    if isinstance(node, _DoubledKey):
        fault = Fault(pointer_to((*place, node.key)), "stands more than once in its object")
        raise RequestProblem("malformed-body", "A key stands more than once in one object; see errors.", [fault])
    limit = LARGEST_OBJECT if isinstance(node, dict) else longest_list
    if len(node) > limit:
        fault = Fault(pointer_to(place), f"may hold at most {limit} elements; received {len(node)}")
        raise RequestProblem("invalid-body", "The body holds more than is taken at once; split it.", [fault])
    if set(map(type, node.values() if isinstance(node, dict) else node)) <= _SCALARS:
        return
    for name, child in node.items() if isinstance(node, dict) else enumerate(node):
        if isinstance(child, dict | list):
            _check_structure(child, (*place, name), longest_list)
