"""
Files of observations, read one line at a time: CSV with a header, or NDJSON.

Each observation keeps the number of its line, so that what the service refuses can be found in the file.
"""

import csv
import hashlib
import json
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from itertools import islice
from typing import Any

FIELDS = ("value", "time", "exposure", "size", "failed", "unit", "observed_at")
NUMBERS = ("value", "time", "exposure", "size")
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

    `idempotency_key` stands for everything in the file up to the end of this chunk: the same file cut the same way has
    the same keys, and two equal chunks of one file have different ones.
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
        except (ValueError, RecursionError) as error:
            raise BadLine(line, f"is not JSON: {error}") from None
        if isinstance(item, int | float) and not isinstance(item, bool):
            item = {"time": item, "failed": True} if bare == "time" else {"value": item}
        if not isinstance(item, dict):
            raise BadLine(line, "must be an object or a number")
        yield Numbered(line, item)


def chunked(rows: Iterable[Numbered], size: int, test: str) -> Iterator[Chunk]:
    """Cut into chunks of `size`, each with its idempotency key for this test."""
    chain = hashlib.sha256(f"{test}\n{size}\n".encode())
    iterator = iter(rows)
    while some := list(islice(iterator, size)):
        for row in some:
            chain.update(json.dumps(row.observation, sort_keys=True).encode() + b"\n")
        yield Chunk(some, f"load-{chain.hexdigest()}")


def _cell(line: int, name: str, cell: str) -> Any:  # noqa: ANN401 - a number, a truth or a text
    if name in NUMBERS:
        try:
            return int(cell) if cell.lstrip("+-").isdigit() else float(cell)
        except ValueError:
            raise BadLine(line, f"{name} must be a number; received {cell!r}") from None
    if name == "failed":
        if cell.lower() not in TRUTHS:
            raise BadLine(line, f"failed must be true or false; received {cell!r}")
        return TRUTHS[cell.lower()]
    return cell
