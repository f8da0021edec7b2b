"""Plans given row by row: what a table must obey, and the region it stands for."""

import math
from collections.abc import Mapping, Sequence
from typing import Any

from service.domain.errors import Fault
from service.domain.families import Family
from service.domain.families.base import TableKind
from service.sequential.decision import Decision
from service.sequential.region import Region, Wall
from service.sequential.tables import TimeTable, UnitTable

MOST_ROWS = 2_000
LARGEST_SAMPLE_NUMBER = 20_000
LARGEST_FAILURES = 2_000

Row = Mapping[str, Any]
Rows = Sequence[Row]

FIELDS = {
    TableKind.UNITS: ("sample_number", "accept", "reject"),
    TableKind.TIMES: ("failures", "reject_at", "accept_at"),
}


def faults_of_table(family: Family, rows: Rows, *, is_upward: bool) -> list[Fault]:
    """What is wrong with a table; `is_upward` where large totals speak against H0."""
    if family.table is None:
        return [Fault("/table", f"means nothing for {family.name}")]
    faults = _faults_of_form(family.table, rows)
    if faults:
        return faults
    if family.table is TableKind.UNITS:
        return _faults_of_units(rows, is_upward=is_upward)
    if not is_upward:
        return [Fault("/h1", "must lie below h0 where a table gives failures and times")]
    return _faults_of_times(rows)


def region_of_table(family: Family, rows: Rows, *, is_upward: bool) -> Region:
    """The region of a table without faults."""
    if family.table is TableKind.TIMES:
        return _time_table(rows)
    lower, upper = ("accept", "reject") if is_upward else ("reject", "accept")
    return UnitTable(
        tuple(row["sample_number"] for row in rows),
        tuple(_number(row, lower, -math.inf) for row in rows),
        tuple(_number(row, upper, math.inf) for row in rows),
        Decision(lower),
        Decision(upper),
    )


def _time_table(rows: Rows) -> TimeTable:
    cap, end = rows[-1]["failures"], max(_number(row, "accept_at", 0.0) for row in rows)
    accept_at, reject_at = [math.inf] * cap, [-math.inf] * (cap + 1)
    for row in rows:
        if row.get("reject_at") is not None:
            reject_at[row["failures"]] = row["reject_at"]
        # With at most so many failures: totals without a row of their own accept with the next that has one. What
        # accepts only at the end is left to the wall.
        if row.get("accept_at") is not None and row["accept_at"] < end:
            for total in range(row["failures"], -1, -1):
                accept_at[total] = min(accept_at[total], row["accept_at"])
    for total in range(1, cap + 1):
        reject_at[total] = max(reject_at[total], reject_at[total - 1])
    return TimeTable(tuple(accept_at), tuple(reject_at), Wall(end, cap))


def _faults_of_form(kind: TableKind, rows: Rows) -> list[Fault]:
    """Each row has the fields of its kind and says something; the first column ascends."""
    counted, first, second = FIELDS[kind]
    if not 1 <= len(rows) <= MOST_ROWS:
        return [Fault("/table", f"must have from 1 to {MOST_ROWS} rows; received {len(rows)}")]
    faults, before = [], 0 if kind is TableKind.UNITS else -1
    most = LARGEST_SAMPLE_NUMBER if kind is TableKind.UNITS else LARGEST_FAILURES
    for i, row in enumerate(rows):
        strange = sorted(row.keys() - {counted, first, second})
        faults += [Fault(f"/table/{i}/{name}", f"means nothing in a table of {counted}") for name in strange]
        place = row.get(counted)
        if place is None:
            faults.append(Fault(f"/table/{i}/{counted}", "is required in every row"))
        elif not before < place <= most:
            rule = f"must be above that of the row before, {before}, and at most {most}"
            faults.append(Fault(f"/table/{i}/{counted}", f"{rule}; received {place}"))
        else:
            before = place
        if row.get(first) is None and row.get(second) is None:
            faults.append(Fault(f"/table/{i}", f"must have {first}, {second} or both"))
    return faults


def _faults_of_units(rows: Rows, *, is_upward: bool) -> list[Fault]:
    lower, upper = ("accept", "reject") if is_upward else ("reject", "accept")
    faults = []
    for i, row in enumerate(rows):
        for name in (lower, upper):
            number = row.get(name)
            if number is not None and not (0 <= number <= row["sample_number"] and number == math.floor(number)):
                rule = f"must be a whole number from 0 to the sample number, {row['sample_number']}"
                faults.append(Fault(f"/table/{i}/{name}", f"{rule}; received {number:g}"))
        if _number(row, lower, -math.inf) >= _number(row, upper, math.inf):
            rule = f"must lie above the number that decides the other way, {row[lower]:g}"
            faults.append(Fault(f"/table/{i}/{upper}", f"{rule}; received {row[upper]:g}"))
    faults += _faults_of_falling(rows, (lower, upper))
    last = rows[-1]
    if not faults and _number(last, upper, math.inf) != _number(last, lower, -math.inf) + 1.0:
        rule = f"the last row must leave nothing undecided: {upper} one above {lower}"
        faults.append(Fault(f"/table/{len(rows) - 1}", rule))
    return faults


def _faults_of_times(rows: Rows) -> list[Fault]:
    faults = []
    for i, row in enumerate(rows):
        for name in ("reject_at", "accept_at"):
            if row.get(name) is not None and not 0.0 < row[name] <= 1e100:  # noqa: PLR2004
                faults.append(Fault(f"/table/{i}/{name}", f"must be above 0, at most 1e100; received {row[name]!r}"))
        if _number(row, "reject_at", -math.inf) >= _number(row, "accept_at", math.inf):
            rule = f"must come after reject_at, {row['reject_at']!r}"
            faults.append(Fault(f"/table/{i}/accept_at", f"{rule}; received {row['accept_at']!r}"))
        if row["failures"] == 0 and row.get("reject_at") is not None:
            faults.append(Fault(f"/table/{i}/reject_at", "must be null where there is no failure"))
    faults += _faults_of_falling(rows, ("reject_at", "accept_at"))
    return faults or _faults_of_closing(rows)


def _faults_of_closing(rows: Rows) -> list[Fault]:
    """One failure more than the last that accepts must reject until the time at which that accepts."""
    last, accepting = rows[-1], [row for row in rows if row.get("accept_at") is not None]
    if not accepting:
        return [Fault("/table", "must accept somewhere: no row has accept_at")]
    most, end = accepting[-1]["failures"], accepting[-1]["accept_at"]
    if last["failures"] == most + 1 and _number(last, "reject_at", 0.0) >= end:
        return []
    rule = f"the table must close: its last row rejects failure {most + 1} at or before {end!r}"
    return [Fault(f"/table/{len(rows) - 1}", rule)]


def _faults_of_falling(rows: Rows, names: tuple[str, str]) -> list[Fault]:
    """Numbers and times do not fall from row to row."""
    faults = []
    for name in names:
        before = -math.inf
        for i, row in enumerate(rows):
            if row.get(name) is None:
                continue
            if row[name] < before:
                faults.append(Fault(f"/table/{i}/{name}", f"must not fall below {before:g}; received {row[name]:g}"))
            before = row[name]
    return faults


def _number(row: Row, name: str, otherwise: float) -> float:
    """The entry of a row, or what stands for none."""
    value = row.get(name)
    return otherwise if value is None else float(value)
