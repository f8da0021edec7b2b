"""Backups and moves, as processes, on real databases."""

import sqlite3
import threading
from pathlib import Path

import httpx
import pytest
from sqlalchemy import create_engine, text
from sqlalchemy.engine import URL

from service.storage import tables
from service.storage.copying import CopyDiffers, copy_all
from service.storage.engine import create_engine_for
from service.storage.migrate import upgrade
from tests.api.examples import SEAL, SHAFT
from tests.postgres import fresh_database
from tests.running import command, running


def filled(client: httpx.Client) -> None:
    """Two tests of which one decides, and a receiver that nobody reaches."""
    receiver = {"name": "bench", "address": "https://bench.invalid/"}
    client.post("/v1/receivers", json=receiver).raise_for_status()
    for name, content in (("seal", SEAL), ("shaft", SHAFT)):
        client.post("/v1/plans", json={"name": name, **content}).raise_for_status()
        registration = {
            "key": f"lot-{name}",
            "plan": name,
            "subject": {"kind": "lot", "name": "Los ½"},
            "labels": {"a": "b"},
        }
        client.post("/v1/tests", json=registration).raise_for_status()
    values = [{"value": 0.1 * i, "unit": f"u{i}", "observed_at": "2031-05-04T09:30:00+02:00"} for i in range(5)]
    client.post("/v1/tests/lot-shaft/observations", json={"observations": values}).raise_for_status()
    headers = {"Idempotency-Key": "tray"}
    client.post("/v1/tests/lot-seal/observations", json={"values": [0] * 30}, headers=headers).raise_for_status()


def test_a_backup_taken_under_load_restores(tmp_path: Path) -> None:
    """The copy is served in place of the original, and has whole submissions only."""
    with running(tmp_path) as service, service.client() as client:
        filled(client)
        client.post("/v1/plans", json={"name": "wide", **SHAFT, "alpha": 1e-9, "beta": 1e-9}).raise_for_status()
        client.post("/v1/tests", json={"key": "busy", "plan": "wide", "subject": {"kind": "lot", "name": "x"}})
        stop = threading.Event()

        def post() -> None:
            with service.client() as other:
                while not stop.is_set():
                    other.post("/v1/tests/busy/observations", json={"values": [10.25] * 7})

        poster = threading.Thread(target=post)
        poster.start()
        done = command("backup", str(tmp_path / "copy.sqlite3"), database_url=service.database_url)
        stop.set()
        poster.join()
        assert done.returncode == 0, done.stderr
        before = client.get("/v1/tests/lot-seal").json()
        again = command("backup", str(tmp_path / "copy.sqlite3"), database_url=service.database_url)
        assert again.returncode == 1
        assert "not overwritten" in again.stderr
    with sqlite3.connect(tmp_path / "copy.sqlite3") as copied:
        (sequence,) = copied.execute("SELECT sequence FROM tests WHERE key = 'busy'").fetchone()
        logged = copied.execute("SELECT max(last_sequence) FROM submissions WHERE test = 'busy'").fetchone()[0]
        assert sequence == (logged or 0)
        assert sequence % 7 == 0
    copied.close()
    restored = tmp_path / "restored"
    restored.mkdir()
    (tmp_path / "copy.sqlite3").rename(restored / "tests.sqlite3")
    with running(restored, key_names="new-{}") as service, service.client() as client:
        assert client.get("/v1/tests/lot-seal").json() == before


def test_a_move_to_postgresql_and_back_loses_no_row(server: URL, tmp_path: Path) -> None:
    with running(tmp_path) as service, service.client() as client:
        filled(client)
        states = {key: client.get(f"/v1/tests/{key}").json() for key in ("lot-seal", "lot-shaft")}
        log = client.get("/v1/tests/lot-shaft/observations").json()
    with fresh_database(server) as url:
        moved = command("copy", service.database_url, url, database_url="unused://")
        assert moved.returncode == 0, moved.stderr
        assert "submissions: 2 rows" in moved.stderr
        assert "receivers: 1 rows" in moved.stderr
        assert "notices: 2 rows" in moved.stderr
        assert "the same" in moved.stderr
        again = command("copy", service.database_url, url, database_url="unused://")
        assert again.returncode == 1
        assert "copy to a new database" in again.stderr
        folder = tmp_path / "there"
        folder.mkdir()
        with running(folder, database_url=url, key_names="there-{}") as there, there.client() as client:
            assert {key: client.get(f"/v1/tests/{key}").json() for key in states} == states
            assert client.get("/v1/tests/lot-shaft/observations").json() == log
            headers = {"Authorization": f"Bearer {service.keys['administrator']}", "Idempotency-Key": "tray"}
            repeated = client.post("/v1/tests/lot-seal/observations", json={"values": [0] * 30}, headers=headers)
            assert repeated.headers["Idempotent-Replayed"] == "true"
        back = command("copy", url, f"sqlite:///{tmp_path / 'back.sqlite3'}", database_url="unused://")
        assert back.returncode == 0, back.stderr


def test_a_row_that_arrives_changed_undoes_the_copy(tmp_path: Path) -> None:
    source, target = (create_engine_for(f"sqlite:///{tmp_path / name}") for name in ("a.sqlite3", "b.sqlite3"))
    for engine in (source, target):
        upgrade(engine)
    with source.begin() as connection:
        connection.execute(text("INSERT INTO plans VALUES ('p', '{}', 'f', '2031-05-04T09:30:00.000000Z', 'me')"))
    with target.begin() as connection:
        connection.execute(text("CREATE TRIGGER t AFTER INSERT ON plans BEGIN UPDATE plans SET fingerprint = 'g'; END"))
    with pytest.raises(CopyDiffers):
        copy_all(source, target, lambda *_: None)
    with target.connect() as connection:
        assert connection.execute(text("SELECT count(*) FROM plans")).scalar() == 0
    source.dispose()
    target.dispose()


def test_every_table_is_copied() -> None:
    assert len(tables.metadata.sorted_tables) == 11


def test_several_processes_serve_one_postgresql_database(server: URL, tmp_path: Path) -> None:
    refused = command("serve", "--workers", "2", database_url=f"sqlite:///{tmp_path / 'one.sqlite3'}")
    assert refused.returncode == 1
    assert "SQLite lets one process write" in refused.stderr
    with fresh_database(server) as url:
        with running(tmp_path, database_url=url, arguments=("--workers", "2")) as service, service.client() as client:
            filled(client)
            admin = create_engine(server.set(drivername="postgresql+psycopg"))
            with admin.connect() as connection:
                query = text("SELECT count(DISTINCT pid) FROM pg_stat_activity WHERE datname = :name")
                assert connection.execute(query, {"name": url.rpartition("/")[2]}).scalar() >= 2  # type: ignore[operator]
            admin.dispose()
        assert service.process.returncode is not None
