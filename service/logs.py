"""
The log: one entry a line on standard error, plain or JSON, each with the id of the request that it belongs to.

What callers send may reach an entry, so control characters are escaped and the lines of a traceback indented: nobody
can write an entry of their own, or move the cursor of a terminal.
"""

import json
import logging
import re
from contextvars import ContextVar
from datetime import UTC, datetime

from service.settings import Settings

# The request that is being answered; a hyphen outside of any.
REQUEST_ID: ContextVar[str] = ContextVar("request_id", default="-")

# C0, DEL, C1, the separators that break lines, and those that turn the direction of writing.
_CONTROL = re.compile("[\x00-\x1f\x7f-\x9f\u2028\u2029\u200e\u200f\u202a-\u202e\u2066-\u2069]")


def shown(text: str) -> str:
    """Text on one line: control characters in escapes."""
    return _CONTROL.sub(lambda found: ascii(found[0])[1:-1], text)


class PlainFormatter(logging.Formatter):
    """Time, level, logger, request id and message; a traceback follows, indented."""

    def format(self, record: logging.LogRecord) -> str:
        """One entry."""
        head = f"{_moment(record)} {record.levelname} {record.name} {REQUEST_ID.get()} {shown(record.getMessage())}"
        return head + "".join(f"\n    {shown(line)}" for line in _traceback(self, record).split("\n") if line)


class JsonFormatter(logging.Formatter):
    """The same as one JSON object; fields that a record carries stand beside the message."""

    def format(self, record: logging.LogRecord) -> str:
        """One entry."""
        entry = {
            "time": _moment(record),
            "level": record.levelname,
            "logger": record.name,
            "request_id": REQUEST_ID.get(),
            "message": record.getMessage(),
            **getattr(record, "fields", {}),
        }
        traceback = _traceback(self, record)
        return json.dumps({**entry, "traceback": traceback} if traceback else entry)


FORMATTERS = {"plain": PlainFormatter, "json": JsonFormatter}


def set_up_log(settings: Settings) -> None:
    """Write the log of this process to standard error."""
    handler = logging.StreamHandler()
    handler.setFormatter(FORMATTERS[settings.log_format]())
    logging.basicConfig(level=settings.log_level, handlers=[handler])
    logging.getLogger("alembic").setLevel(logging.WARNING)  # it would speak at every look at the schema
    logging.getLogger("httpx").setLevel(logging.WARNING)  # it would write down where each notice goes


def _moment(record: logging.LogRecord) -> str:
    return datetime.fromtimestamp(record.created, UTC).strftime("%Y-%m-%dT%H:%M:%S.%fZ")


def _traceback(formatter: logging.Formatter, record: logging.LogRecord) -> str:
    return formatter.formatException(record.exc_info) if record.exc_info else ""
