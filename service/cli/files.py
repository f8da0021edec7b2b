"""
Files of observations, read one line at a time: CSV with a header, or NDJSON.

Each observation keeps the number of its line, so that what the service refuses can be found in the file.
"""

import csv
import hashlib
import json
import math
import re
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from itertools import islice
from typing import Any

NUMBERS = ("value", "time", "from", "exposure", "size", "a", "b")
FIELDS = (*NUMBERS, "arm", "failed", "unit", "observed_at")
# Python reads more as a number than a file should hold: 1_0, nan, digits of other scripts.
NUMBER = re.compile(r"[+-]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][+-]?[0-9]+)?")
WHOLE = re.compile(r"[+-]?[0-9]+")
TRUTHS = {"true": True, "1": True, "false": False, "0": False}


class BadLine(Exception):
    """A line that is no observation."""

    def __init__(self, line: int, reason: str) -> None:
        super().__init__(f"line {line}: {reason}")


@dataclass(frozen=True)
class Numbered:
    """An observation and the line of the file that it stands on."""

    line: int
    observation: dict[str, Any]


@dataclass(frozen=True)
class Chunk:
    """
    What is posted at once.

    `idempotency_key` stands for the place in the source where this chunk begins: its name and all that comes before.
    So a chunk loaded again is answered as before; one that has changed or grown since is refused, not counted twice.
    """

    rows: list[Numbered]
    idempotency_key: str

    @property
    def body(self) -> dict[str, Any]:
        """The submission."""
        return {"observations": [row.observation for row in self.rows]}


def read_csv(lines: Iterable[str]) -> Iterator[Numbered]:
    """
    Observations of a CSV file; an empty cell is a field left out.

    Raises:
        BadLine: The header names no known field, or a cell is not what its field takes.
    """
    table = csv.reader(lines, strict=True)
    header = [name.strip() for name in next(table, [])]
    unknown = [name for name in header if name not in FIELDS]
    if unknown or not header or len(set(header)) < len(header):
        raise BadLine(
            1, f"the header must name fields among {', '.join(FIELDS)}; received {', '.join(header) or 'nothing'}"
        )
    try:
        for cells in table:
            line = table.line_num
            if not any(cell.strip() for cell in cells):
                continue
            if len(cells) != len(header):
                raise BadLine(line, f"has {len(cells)} cells, the header {len(header)}")
            named = zip(header, (cell.strip() for cell in cells), strict=True)
            yield Numbered(line, {name: _cell(line, name, cell) for name, cell in named if cell})
    except csv.Error as error:
        raise BadLine(table.line_num, str(error)) from None


def read_ndjson(lines: Iterable[str], bare: str) -> Iterator[Numbered]:
    """
    Observations of a file with one JSON value a line: an object, or a bare number that is the field `bare`.

    A bare time is a time to failure.

    Raises:
        BadLine: A line is neither.
    """
    for line, text in enumerate(lines, start=1):
        if not text.strip():
            continue
        try:
            item = json.loads(text)
            # Finds what no body may hold: NaN, infinities, half of a surrogate pair.
            json.dumps(item, ensure_ascii=False, allow_nan=False).encode()
        except (ValueError, RecursionError) as error:
            raise BadLine(line, f"is not JSON: {error}") from None
        if isinstance(item, int | float) and not isinstance(item, bool):
            item = {"time": item, "failed": True} if bare == "time" else {"value": item}
        if not isinstance(item, dict):
            raise BadLine(line, "must be an object or a number")
        yield Numbered(line, item)


def chunked(rows: Iterable[Numbered], size: int, source: str, skip: int = 0) -> Iterator[Chunk]:
    """Cut into chunks of `size`, each with its idempotency key, after the first `skip` rows."""
    before = hashlib.sha256(source.encode() + b"\n")
    iterator = iter(rows)
    for row in islice(iterator, skip):
        before.update(_line(row))
    while some := list(islice(iterator, size)):
        yield Chunk(some, f"load-{before.hexdigest()}")
        for row in some:
            before.update(_line(row))


def _line(row: Numbered) -> bytes:
    return json.dumps(row.observation, sort_keys=True).encode() + b"\n"


def _cell(line: int, name: str, cell: str) -> Any:  # noqa: ANN401 - a number, a truth or a text
    if name in NUMBERS:
        number = float(cell) if NUMBER.fullmatch(cell) else math.nan
        if not math.isfinite(number):
            raise BadLine(line, f"{name} must be a number; received {cell!r}")
        return int(cell) if WHOLE.fullmatch(cell) else number
    if name == "failed":
        if cell.lower() not in TRUTHS:
            raise BadLine(line, f"failed must be true or false; received {cell!r}")
        return TRUTHS[cell.lower()]
    return cell
