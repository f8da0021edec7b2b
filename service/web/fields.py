"""What a field may hold, wherever it comes from."""

import re
from datetime import UTC, datetime
from typing import Annotated

from pydantic import BeforeValidator, Field, StringConstraints

from service.domain.names import NAME_PATTERN

Number = Annotated[float, Field(strict=True, allow_inf_nan=False)]
# Whole numbers that a double holds exactly.
Whole = Annotated[int, Field(strict=True, ge=-(2**53), le=2**53)]
Name = Annotated[str, StringConstraints(strict=True, pattern=NAME_PATTERN)]
# Free text without control characters, which no log, table or page could show.
_SHOWN = r"^[^\x00-\x1f\x7f]+$"
Text = Annotated[str, StringConstraints(strict=True, min_length=1, max_length=200, pattern=_SHOWN)]
# Why somebody did something.
Reason = Annotated[
    str, StringConstraints(strict=True, strip_whitespace=True, min_length=1, max_length=1000, pattern=_SHOWN)
]
# What somebody looks for, perhaps nothing.
Sought = Annotated[str, StringConstraints(strict=True, max_length=301, pattern=r"^[^\x00-\x1f\x7f]*$")]
# A label's name, a colon and its value.
Label = Annotated[str, StringConstraints(strict=True, max_length=301, pattern=_SHOWN)]

# The whole of RFC 3339 and nothing else: parsers of dates take far more, and databases that read it later take less.
_MOMENT = re.compile(r"\d{4}-\d\d-\d\d[Tt ]\d\d:\d\d:\d\d(\.\d{1,9})?([Zz]|[+-]\d\d:\d\d)", re.ASCII)
FIRST_YEAR, LAST_YEAR = 1000, 9998


def _moment(given: object) -> datetime:
    """RFC 3339 text with its offset, of a year that every offset and database can carry; numbers are no moments."""
    if not isinstance(given, str) or not _MOMENT.fullmatch(given):
        raise ValueError("must be a date and time with its offset (RFC 3339)")
    try:
        moment = datetime.fromisoformat(given.upper())
    except ValueError:
        raise ValueError("must be a date and time that exists") from None
    if not FIRST_YEAR <= moment.year <= LAST_YEAR:
        raise ValueError(f"must lie in the years {FIRST_YEAR} to {LAST_YEAR}")
    return moment.astimezone(UTC)


Moment = Annotated[datetime, BeforeValidator(_moment, json_schema_input_type=str)]
