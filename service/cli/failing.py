"""How a command ends when it cannot do what was asked: one clear line on standard error, and exit code 1."""

from collections.abc import Iterator
from contextlib import contextmanager

import typer


def fail(message: str) -> typer.Exit:
    """Say why on standard error; raise what this returns."""
    typer.echo(message, err=True)
    return typer.Exit(1)


@contextmanager
def clear_failures() -> Iterator[None]:
    """Turn refusals of the domain, the schema and the database into one line."""
    from sqlalchemy.exc import ArgumentError, DBAPIError

    from service.domain.errors import DomainError
    from service.settings import BadSettings
    from service.storage.migrate import SchemaMismatch

    try:
        yield
    except (DomainError, SchemaMismatch, BadSettings) as refusal:
        raise fail(str(refusal)) from None
    except ArgumentError as error:
        raise fail(f"SPRT_DATABASE_URL: {error}") from None
    except DBAPIError as error:
        raise fail(f"The database refused: {error.orig}") from None
