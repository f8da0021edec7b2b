"""A real service on a real socket: the program started as a process, on a database of its own."""

import contextlib
import os
import random
import socket
import subprocess
import sys
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

import httpx

from service.domain.access import Role
from service.ingest.commands import CreateKey, IssuedKey
from service.ingest.road import perform_now
from service.storage.engine import create_engine_for
from service.storage.migrate import upgrade

START_LIMIT_SECONDS = 60.0

PORTS = (12_000, 32_000)


@dataclass(frozen=True)
class Running:
    """Where the service listens, its database, and a key for each role."""

    url: str
    database_url: str
    keys: Mapping[str, str]
    process: subprocess.Popen[bytes]

    def client(self, role: str | None = "administrator") -> httpx.Client:
        """A client that carries the key of a role, or none."""
        headers = {"Authorization": f"Bearer {self.keys[role]}"} if role else {}
        return httpx.Client(base_url=self.url, headers=headers, timeout=30.0)


def free_port() -> int:
    """
    A loopback port that nothing listens on just now.

    Chosen at random, because others who run tests on the machine choose too before what they started listens; outside
    of the range from which connections are given theirs.
    """
    while True:
        port = random.SystemRandom().randrange(*PORTS)
        with socket.socket() as probe, contextlib.suppress(OSError):
            probe.bind(("127.0.0.1", port))
            return port


def command(*arguments: str, database_url: str, **extra: str) -> subprocess.CompletedProcess[str]:
    """Run the command line to its end and return what it printed."""
    return subprocess.run(
        [sys.executable, "-m", "service", *arguments],
        env={**os.environ, "SPRT_DATABASE_URL": database_url, **extra},
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )


def prepared(database_url: str, names: Mapping[Role, str]) -> dict[str, str]:
    """Bring a database up to date and make a key for each role; the secrets."""
    engine = create_engine_for(database_url)
    upgrade(engine)
    keys = {}
    for role, name in names.items():
        issued = perform_now(engine, CreateKey(name, role))
        assert isinstance(issued, IssuedKey)
        keys[role.value] = issued.secret
    engine.dispose()
    return keys


@contextmanager
def running(
    folder: Path,
    *,
    key_names: str = "the-{}",
    database_url: str | None = None,
    arguments: tuple[str, ...] = (),
    log: Path | None = None,
    **settings: str,
) -> Iterator[Running]:
    """
    Start the service on a new SQLite file in `folder`, or on an empty database; stop it at the end.

    Its log goes to the file `log`, if one is given.
    """
    database_url = database_url or f"sqlite:///{folder / 'tests.sqlite3'}"
    roles = tuple(Role) if "{}" in key_names else (Role.ENGINEER,)
    keys = prepared(database_url, {role: key_names.format(role) for role in roles})
    port = free_port()
    with (log or Path(os.devnull)).open("ab") as written:
        process = subprocess.Popen(
            [sys.executable, "-m", "service", "serve", "--port", str(port), *arguments],
            env={**os.environ, "SPRT_DATABASE_URL": database_url, **settings},
            stdout=subprocess.DEVNULL,
            stderr=written,
        )
    try:
        url = f"http://127.0.0.1:{port}"
        wait_until_ready(url, process)
        yield Running(url, database_url, keys, process)
    finally:
        process.terminate()
        process.wait(20)


def wait_until_ready(url: str, process: "subprocess.Popen[bytes]") -> None:
    """Ask until the service takes results."""
    deadline = time.monotonic() + START_LIMIT_SECONDS
    while time.monotonic() < deadline:
        assert process.poll() is None, "the service ended at once"
        try:
            if httpx.get(f"{url}/readyz").status_code == httpx.codes.OK:
                return
        except httpx.TransportError:
            time.sleep(0.05)
    raise AssertionError("the service was not ready in time")
