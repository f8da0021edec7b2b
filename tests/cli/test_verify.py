"""The audit as a process, beside a running service."""

import threading
from pathlib import Path

import pytest
from sqlalchemy import text

from service.storage.engine import create_engine_for
from tests.cli.test_copying import filled
from tests.running import command, running


def test_the_records_are_verified_while_results_come_in_and_a_difference_ends_with_1(tmp_path: Path) -> None:
    with running(tmp_path) as service, service.client() as client:
        filled(client)
        stop, posted = threading.Event(), threading.Event()

        def post() -> None:
            with service.client() as other:
                while not stop.is_set():
                    other.post("/v1/tests/lot-shaft/observations", json={"values": [10.25] * 7})
                    posted.set()

        poster = threading.Thread(target=post)
        poster.start()
        assert posted.wait(20)
        done = command("verify", database_url=service.database_url)
        stop.set()
        poster.join()
        assert done.returncode == 0, done.stderr
        assert "2 tests: " in done.stdout
        assert "are as they were recorded in /" in done.stdout
        engine = create_engine_for(service.database_url)
        with engine.begin() as connection:
            connection.execute(text("UPDATE tests SET total = 99 WHERE key = 'lot-seal'"))
        engine.dispose()
        for arguments in ((), ("--test", "lot-seal")):
            wrong = command("verify", *arguments, database_url=service.database_url)
            assert wrong.returncode == 1
            assert wrong.stdout == ""
            assert "test lot-seal: its state is not what the log gives" in wrong.stderr
        assert command("verify", "--test", "lot-shaft", database_url=service.database_url).returncode == 0


@pytest.mark.parametrize("arguments", [("verify",), ("keys", "list"), ("keys", "revoke", "me")])
def test_where_there_is_no_database_nothing_is_found_sound_and_none_is_made(
    tmp_path: Path, arguments: tuple[str, ...]
) -> None:
    file = tmp_path / "elsewhere.sqlite3"
    done = command(*arguments, database_url=f"sqlite:///{file}")
    assert done.returncode == 1
    assert f"There is no database at {file}" in done.stderr
    assert not file.exists()
