"""Load a file of observations into a test."""

import io
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from enum import StrEnum
from pathlib import Path
from typing import IO, TYPE_CHECKING, Annotated, Any

import typer

from service.cli.failing import fail

if TYPE_CHECKING:
    from service.cli.client import Refused, ServiceClient
    from service.cli.files import Chunk


class Format(StrEnum):
    """How a file is written."""

    CSV = "csv"
    NDJSON = "ndjson"


@dataclass(frozen=True)
class Source:
    """The lines to read, the bytes there are (None where that is not known), and how many have been read."""

    lines: IO[str]
    size: int | None
    position: Callable[[], int]


SUFFIXES = {".csv": Format.CSV, ".ndjson": Format.NDJSON, ".jsonl": Format.NDJSON}


def load(
    file: Annotated[str, typer.Argument(help="CSV with a header, or NDJSON; - reads standard input.")],
    test: Annotated[str, typer.Option(help="Key of the test.")],
    key: Annotated[str, typer.Option(envvar="SPRT_KEY", help="Access key of a collector or wider.")],
    url: Annotated[str, typer.Option(envvar="SPRT_URL", help="Address of the service.")] = "http://127.0.0.1:8000",
    chunk: Annotated[int, typer.Option(min=1, help="Observations posted at once.")] = 500,
    file_format: Annotated[Format | None, typer.Option("--format", help="Where the suffix does not say.")] = None,
    skip: Annotated[int, typer.Option(min=0, help="Leave out so many rows at the beginning.")] = 0,
    source: Annotated[str | None, typer.Option(help="What the rows are known by; the file's name if left out.")] = None,
    go_on: Annotated[bool, typer.Option("--go-on", help="Load everything, past the decision as overrun.")] = False,
) -> None:
    """
    Post a file of observations, chunk by chunk, and stop when the decision is reached.

    An interrupted load can be run again with the same file and chunk size: nothing counts twice. A file that has
    grown since is refused where it differs from what was loaded; load what is new with --skip. Another file of the
    same name needs a --source of its own.
    """
    from service.cli.client import Refused, ServiceClient, Unreachable
    from service.cli.files import BadLine, chunked, read_csv, read_ndjson

    client = ServiceClient(url, key)
    try:
        bare = _bare_field(client, test)
        with _opened(file) as opened:
            is_csv = _format(file, file_format) is Format.CSV
            rows = read_csv(opened.lines) if is_csv else read_ndjson(opened.lines, bare)
            chunks = chunked(rows, chunk, source or Path(file).name, skip)
            _post_all(client, test, chunks, opened, go_on=go_on)
    except (BadLine, Unreachable) as error:
        raise fail(f"{file}: {error}") from None
    except Refused as refusal:
        raise fail(f"{file}: {refusal}") from None
    except UnicodeDecodeError as error:
        raise fail(f"{file}: is not text in UTF-8: {error}") from None


def _post_all(client: "ServiceClient", test: str, chunks: "Iterator[Chunk]", source: Source, *, go_on: bool) -> None:
    """Post each chunk; tell what came out."""
    from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn, TimeRemainingColumn

    from service.cli.client import Refused

    columns = (TextColumn("{task.fields[posted]} posted"), BarColumn(), TimeElapsedColumn(), TimeRemainingColumn())
    state: dict[str, Any] = client.get(f"/v1/tests/{test}")
    was_decided = state["decision"] != "continue"
    posted = known = 0
    with Progress(*columns, console=_error_console()) as progress:
        task = progress.add_task("load", total=source.size, posted=0)
        for piece in chunks:
            try:
                state = client.post(f"/v1/tests/{test}/observations", piece.body, piece.idempotency_key)
            except Refused as refusal:
                raise fail(_with_lines(refusal, piece)) from None
            if client.was_replay:
                known += len(piece.rows)
                # What was answered then may not hold any more: a correction can put a decision off.
                state = client.get(f"/v1/tests/{test}") if state["decision"] != "continue" else state
            else:
                posted += len(piece.rows)
            progress.update(task, completed=source.position(), posted=posted)
            if state["decision"] != "continue" and not go_on:
                break
    typer.echo(_summary(state, posted, was_decided=was_decided, stopped=not go_on))
    if known:
        typer.echo(f"{known} more were recorded by an earlier load and did not count again.")


def _summary(state: dict[str, Any], posted: int, *, was_decided: bool, stopped: bool) -> str:
    if state["decision"] == "continue":
        evidence = state["log_likelihood_ratio"]
        units = f"{state['sample_number']} units so far"
        return f"{state['key']}: continue sampling; {units}, evidence {evidence:.4g}. Posted {posted}."
    decided = state["decided"]
    at = f"{decided['sample_number']} units" + (f", exposure {decided['exposure']:g}" if decided["exposure"] else "")
    tail = f" Stopped after posting {posted}." if stopped else f" Posted {posted}; overrun {state['overrun']}."
    before = " (before this load)" if was_decided else ""
    return f"{state['key']}: {state['decision']}, decided at {at}{before}.{tail}"


def _with_lines(refusal: "Refused", piece: "Chunk") -> str:
    """The refusal with the lines of the file that it is about."""
    if refusal.is_of_reused_key:
        return (
            f"{refusal}\n  lines {piece.rows[0].line} to {piece.rows[-1].line}: were loaded before with other content. "
            "Has the file changed or grown, or is it cut into other chunks? Load what is new with --skip; "
            "give another file of the same name a --source of its own."
        )
    lines = [str(refusal)]
    for pointer, detail in refusal.faults:
        parts = pointer.split("/")
        is_row = len(parts) > 2 and parts[1] == "observations" and parts[2].isdigit()  # noqa: PLR2004
        where = f"line {piece.rows[int(parts[2])].line}, {'/'.join(parts[3:])}" if is_row else pointer
        lines.append(f"  {where}: {detail}")
    return "\n".join(lines)


def _bare_field(client: "ServiceClient", test: str) -> str:
    """What a bare number is in the family of the test."""
    plan = client.get(f"/v1/tests/{test}")["plan"]
    return "time" if client.get(f"/v1/plans/{plan}")["family"] == "exponential" else "value"


def _format(file: str, given: Format | None) -> Format:
    found = given or SUFFIXES.get(Path(file).suffix.lower())
    if found is None:
        raise fail(f"{file}: say --format csv or --format ndjson")
    return found


@contextmanager
def _opened(file: str) -> Iterator[Source]:
    if file == "-":
        # As strict as a file: what is not UTF-8 must not get in by another way.
        sys.stdin.reconfigure(encoding="utf-8-sig", errors="strict")  # type: ignore[union-attr]
        yield Source(sys.stdin, None, lambda: 0)
        return
    try:
        with Path(file).open("rb") as binary, io.TextIOWrapper(binary, encoding="utf-8-sig", newline="") as lines:
            yield Source(lines, Path(file).stat().st_size, binary.tell)
    except OSError as error:
        raise fail(f"{file}: {error.strerror}") from None


def _error_console() -> Any:  # noqa: ANN401 - rich is imported late
    from rich.console import Console

    return Console(stderr=True)
