"""A real service on a real socket: the program started as a process, on a database of its own."""

import os
import socket
import subprocess
import sys
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

import httpx

START_LIMIT_SECONDS = 20.0


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
    """A loopback port that nothing listens on just now."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


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


@contextmanager
def running(
    folder: Path, *, key_names: str = "the-{}", database_url: str | None = None, **settings: str
) -> Iterator[Running]:
    """Start the service on a new SQLite file in `folder`, or on an empty database; stop it at the end."""
    database_url = database_url or f"sqlite:///{folder / 'tests.sqlite3'}"
    migrated = command("migrate", database_url=database_url)
    assert migrated.returncode == 0, migrated.stderr
    keys = {}
    roles = ("viewer", "collector", "engineer", "administrator") if "{}" in key_names else ("engineer",)
    for role in roles:
        name = key_names.format(role)
        made = command("keys", "create", "--role", role, "--name", name, database_url=database_url)
        assert made.returncode == 0, made.stderr
        keys[role] = made.stdout.strip()
    port = free_port()
    process = subprocess.Popen(
        [sys.executable, "-m", "service", "serve", "--port", str(port)],
        env={**os.environ, "SPRT_DATABASE_URL": database_url, **settings},
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
    )
    try:
        url = f"http://127.0.0.1:{port}"
        _wait_until_ready(url, process)
        yield Running(url, database_url, keys, process)
    finally:
        process.terminate()
        process.wait(20)


def _wait_until_ready(url: str, process: "subprocess.Popen[bytes]") -> None:
    deadline = time.monotonic() + START_LIMIT_SECONDS
    while time.monotonic() < deadline:
        assert process.poll() is None, "the service ended at once"
        try:
            if httpx.get(f"{url}/readyz").status_code == httpx.codes.OK:
                return
        except httpx.TransportError:
            time.sleep(0.05)
    raise AssertionError("the service was not ready in time")
