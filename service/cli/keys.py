"""Access keys: make, list, revoke."""

from datetime import datetime, timedelta
from typing import TYPE_CHECKING, Annotated, cast

import typer

from service.cli.failing import clear_failures, fail
from service.domain.access import AccessKey, Limits, Role, limits_of
from service.domain.sequential_test import Subject, SubjectKind

if TYPE_CHECKING:
    from sqlalchemy import Engine

    from service.ingest.commands import IssuedKey

app = typer.Typer(help="Access keys: make, list, revoke.", no_args_is_help=True)


@app.command()
def create(
    role: Annotated[Role, typer.Option(help="What the key may do; each role may do all that the ones before it may.")],
    name: Annotated[str, typer.Option(help="Who or what carries it; it stands in the records.")],
    expires_in_days: Annotated[float | None, typer.Option(min=0.0, help="Ends by itself after so many days.")] = None,
    subject: Annotated[
        list[str], typer.Option(metavar="KIND:NAME", help="Only for tests of this subject; may be given again.")
    ] = [],  # noqa: B006 - typer's way
    label: Annotated[
        list[str], typer.Option(metavar="NAME=VALUE", help="Only for tests with this label; may be given again.")
    ] = [],  # noqa: B006
) -> None:
    """Make a key and print it, and nothing else, on standard output. It is shown this once."""
    from service.ingest.commands import CreateKey
    from service.ingest.road import perform_now, utc_now

    try:
        expires_at = None if expires_in_days is None else utc_now() + timedelta(days=expires_in_days)
    except (OverflowError, ValueError):
        raise fail(f"--expires-in-days: no calendar reaches so far; received {expires_in_days}") from None
    with clear_failures():
        issued = cast("IssuedKey", perform_now(_engine(), CreateKey(name, role, expires_at, _limits(subject, label))))
    typer.echo(issued.secret)


@app.command("list")
def list_keys() -> None:
    """Every key that was ever made; never a secret."""
    from rich.console import Console
    from rich.markup import escape
    from rich.table import Table

    from service.ingest.road import utc_now
    from service.logs import shown
    from service.storage.reader import Reader

    with clear_failures():
        keys = Reader(_existing()).keys()
    table = Table("name", "role", "created", "expires", "state", "only for")
    for key in keys:
        row = (key.name, key.role, _minute(key.created_at), _minute(key.expires_at), _state(key, utc_now()))
        table.add_row(*row, escape(shown(_shown_limits(key.limits))))
    Console().print(table)


@app.command()
def revoke(name: Annotated[str, typer.Argument(help="Name of the key.")]) -> None:
    """End a key at once; the record of it stays."""
    from service.ingest.commands import RevokeKey
    from service.ingest.road import perform_now

    with clear_failures():
        perform_now(_existing(), RevokeKey(name))
    typer.echo(f"The key {name!r} is revoked.", err=True)


def _engine() -> "Engine":
    """The database, set up if it is a brand-new SQLite file."""
    from service.cli.serve import prepared_engine
    from service.settings import read_settings

    return prepared_engine(read_settings().database_url)


def _existing() -> "Engine":
    """The database, which must be there."""
    from service.cli.serve import existing_engine
    from service.settings import read_settings

    return existing_engine(read_settings().database_url)


def _limits(subjects: list[str], labels: list[str]) -> Limits:
    """What the options say."""
    return limits_of([_subject(text) for text in subjects], [_label(text) for text in labels])


def _subject(text: str) -> Subject:
    kind, colon, name = text.partition(":")
    if not colon or not name or kind not in set(SubjectKind):
        kinds = " or ".join(SubjectKind)
        raise fail(f"--subject must be KIND:NAME, where the kind is {kinds}; received {text!r}")
    return Subject(SubjectKind(kind), name)


def _label(text: str) -> tuple[str, str]:
    name, equals, value = text.partition("=")
    if not (name and equals and value):
        raise fail(f"--label must be NAME=VALUE; received {text!r}")
    return name, value


def _shown_limits(limits: Limits) -> str:
    subjects = [f"{subject.kind}:{subject.name}" for subject in limits.subjects]
    return ", ".join(subjects + [f"{name}={value}" for name, values in limits.labels.items() for value in values])


def _minute(moment: datetime | None) -> str:
    return moment.strftime("%Y-%m-%d %H:%M UTC") if moment else ""


def _state(key: AccessKey, now: datetime) -> str:
    if key.revoked_at is not None:
        return f"revoked {_minute(key.revoked_at)}"
    return "valid" if key.is_valid(now) else "expired"
