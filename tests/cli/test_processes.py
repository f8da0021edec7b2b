"""The command line as a user runs it: a process with its output and exit code."""

import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import httpx
import pytest
from scipy.stats import binom
from sqlalchemy import create_engine, text

from tests.api.examples import PUMP, SEAL, SHAFT, Namer, with_test
from tests.running import Running, command, free_port

Loader = Callable[..., subprocess.CompletedProcess[str]]


@pytest.fixture
def load(service: Running) -> Loader:
    def run(*arguments: str, stdin: str | None = None) -> subprocess.CompletedProcess[str]:
        return subprocess.run(
            [sys.executable, "-m", "service", "load", *arguments],
            env={**os.environ, "SPRT_URL": service.url, "SPRT_KEY": service.keys["collector"]},
            capture_output=True,
            text=True,
            input=stdin,
            timeout=60,
            check=False,
        )

    return run


def test_a_file_is_loaded_until_the_decision(
    load: Loader, admin: httpx.Client, new_name: Namer, tmp_path: Path
) -> None:
    key = with_test(admin, new_name, SEAL)
    file = tmp_path / "seals.csv"
    file.write_text("value,unit\n" + "".join(f"0,u{i}\n" for i in range(100)))
    done = load(str(file), "--test", key, "--chunk", "10")
    assert done.returncode == 0, done.stderr
    assert f"{key}: accept, decided at 24 units. Stopped after posting 30." in done.stdout
    state = admin.get(f"/v1/tests/{key}").json()
    assert (state["decision"], state["overrun"]) == ("accept", 6)
    again = load(str(file), "--test", key, "--chunk", "10")
    assert "(before this load)" in again.stdout
    assert admin.get(f"/v1/tests/{key}").json() == state
    everything = load(str(file), "--test", key, "--chunk", "10", "--go-on")
    assert "overrun 76" in everything.stdout
    assert admin.get(f"/v1/tests/{key}").json()["overrun"] == 76


def test_a_load_goes_on_after_a_correction_that_put_the_decision_off(
    load: Loader, admin: httpx.Client, new_name: Namer, tmp_path: Path
) -> None:
    key = with_test(admin, new_name, SEAL)
    file = tmp_path / "again.csv"
    file.write_text("value\n" + "0\n" * 50)
    assert "Stopped after posting 24." in load(str(file), "--test", key, "--chunk", "12").stdout
    body = {"sequence": 5, "action": "void", "reason": "dropped"}
    admin.post(f"/v1/tests/{key}/corrections", json=body).raise_for_status()
    again = load(str(file), "--test", key, "--chunk", "12")
    assert "Stopped after posting 12." in again.stdout, again.stdout + again.stderr
    state = admin.get(f"/v1/tests/{key}").json()
    assert (state["decision"], state["sample_number"], state["overrun"]) == ("accept", 24, 11)


def test_a_bad_line_is_named_and_its_chunk_not_stored(
    load: Loader, admin: httpx.Client, new_name: Namer, tmp_path: Path
) -> None:
    key = with_test(admin, new_name, SHAFT)
    file = tmp_path / "shafts.ndjson"
    file.write_text("10.1\n10.2\n10.3\n1e300\n")
    done = load(str(file), "--test", key, "--chunk", "2")
    assert done.returncode == 1
    assert "line 4, value: must be a number, at most 1e100 in magnitude; received 1e+300" in done.stderr
    assert admin.get(f"/v1/tests/{key}").json()["sample_number"] == 2
    file.write_text("10.1\n10.2\n10.3\n10.4\n")
    assert load(str(file), "--test", key, "--chunk", "2").returncode == 0
    assert admin.get(f"/v1/tests/{key}").json()["sample_number"] == 4


def test_an_interrupted_load_goes_on_without_counting_twice(
    load: Loader, service: Running, admin: httpx.Client, new_name: Namer, tmp_path: Path
) -> None:
    key = with_test(admin, new_name, {**SHAFT, "boundaries": "given", "thresholds": {"accept": -1e6, "reject": 1e6}})
    file = tmp_path / "shafts.csv"
    file.write_text("value\n" + "".join(f"{10 + (i % 7) / 100}\n" for i in range(3000)))
    process = subprocess.Popen(
        [sys.executable, "-m", "service", "load", str(file), "--test", key, "--chunk", "5"],
        env={**os.environ, "SPRT_URL": service.url, "SPRT_KEY": service.keys["collector"]},
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
    )
    while admin.get(f"/v1/tests/{key}").json()["sample_number"] < 50:
        assert process.poll() is None
    process.send_signal(signal.SIGKILL)
    process.wait()
    time.sleep(0.2)
    partial = admin.get(f"/v1/tests/{key}").json()["sample_number"]
    assert 50 <= partial < 3000
    done = load(str(file), "--test", key, "--chunk", "5")
    assert done.returncode == 0, done.stderr
    state = admin.get(f"/v1/tests/{key}").json()
    assert state["sample_number"] == 3000
    assert state["total"] == pytest.approx(sum(10 + (i % 7) / 100 for i in range(3000)), rel=1e-13)


def test_a_file_that_has_grown_is_refused_and_its_rest_loaded(
    load: Loader, admin: httpx.Client, new_name: Namer, tmp_path: Path
) -> None:
    key = with_test(admin, new_name, {**SHAFT, "boundaries": "given", "thresholds": {"accept": -1e6, "reject": 1e6}})
    file = tmp_path / "shafts.csv"
    rows = [f"{10 + (i % 7) / 100}\n" for i in range(90)]
    file.write_text("value\n" + "".join(rows[:75]))
    assert "Posted 75." in load(str(file), "--test", key, "--chunk", "50").stdout
    file.write_text("value\n" + "".join(rows))
    refused = load(str(file), "--test", key, "--chunk", "50")
    assert refused.returncode == 1
    assert "lines 52 to 91: were loaded before with other content" in refused.stderr
    assert "--skip" in refused.stderr
    for _ in range(2):
        assert load(str(file), "--test", key, "--chunk", "50", "--skip", "75").returncode == 0
    assert admin.get(f"/v1/tests/{key}").json()["sample_number"] == 90
    other = load(str(file), "--test", key, "--chunk", "50", "--source", "the next day")
    assert other.returncode == 0, other.stderr
    assert admin.get(f"/v1/tests/{key}").json()["sample_number"] == 180


def test_times_come_through_standard_input(load: Loader, admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, PUMP)
    done = load("-", "--test", key, "--format", "ndjson", stdin='12.5\n{"time": 40, "failed": false}\n')
    assert "continue sampling; 2 units so far" in done.stdout, done.stderr
    state = admin.get(f"/v1/tests/{key}").json()
    assert (state["total"], state["exposure"]) == (1, 52.5)


def test_load_says_clearly_what_is_wrong(load: Loader, admin: httpx.Client, new_name: Namer, tmp_path: Path) -> None:
    assert "There is no test 'nowhere'" in load("-", "--test", "nowhere", "--format", "csv", stdin="").stderr
    key = with_test(admin, new_name, SEAL)
    assert "No such file" in load(str(tmp_path / "none.csv"), "--test", key).stderr
    (tmp_path / "x.txt").write_text("0")
    assert "--format" in load(str(tmp_path / "x.txt"), "--test", key).stderr
    for content in ("value\nnan\n", "value\n1_0\n"):
        (tmp_path / "bad.csv").write_text(content)
        assert "bad.csv: line 2: value must be a number" in load(str(tmp_path / "bad.csv"), "--test", key).stderr
    (tmp_path / "bad.ndjson").write_text('{"value": 0, "unit": "\\ud800"}\n')
    assert "bad.ndjson: line 1: is not JSON" in load(str(tmp_path / "bad.ndjson"), "--test", key).stderr
    assert "A valid access key is required" in load("-", "--test", key, "--key", "wrong", stdin="").stderr


def test_a_new_file_sets_itself_up_and_serves(tmp_path: Path) -> None:
    port = free_port()
    process = subprocess.Popen(
        [sys.executable, "-m", "service", "serve", "--port", str(port)],
        env={**os.environ, "SPRT_DATABASE_URL": f"sqlite:///{tmp_path / 'new.sqlite3'}"},
        stderr=subprocess.PIPE,
        text=True,
    )
    try:
        deadline = time.monotonic() + 20
        while time.monotonic() < deadline:
            try:
                assert httpx.get(f"http://127.0.0.1:{port}/readyz").status_code == 200
                break
            except httpx.TransportError:
                time.sleep(0.05)
    finally:
        process.send_signal(signal.SIGTERM)
        _, error = process.communicate(timeout=20)
    assert f"http://127.0.0.1:{port}" in error
    assert "alembic" not in error
    assert process.returncode in {0, -signal.SIGTERM}


def test_serve_refuses_a_schema_that_it_does_not_know(tmp_path: Path) -> None:
    url = f"sqlite:///{tmp_path / 'other.sqlite3'}"
    assert "from nothing to" in command("migrate", database_url=url).stderr
    assert "up to date" in command("migrate", database_url=url).stderr
    engine = create_engine(url)
    with engine.begin() as connection:
        connection.execute(text("UPDATE alembic_version SET version_num = '9999'"))
    for arguments in (("serve",), ("migrate",), ("keys", "list")):
        refused = command(*arguments, database_url=url)
        assert refused.returncode == 1
        assert "9999, which this version does not know" in refused.stderr
        assert "Traceback" not in refused.stderr
    with engine.begin() as connection:
        connection.execute(text("DELETE FROM alembic_version"))
    older = command("serve", database_url=url)
    assert older.returncode == 1
    assert "sprt-monitor migrate" in older.stderr
    engine.dispose()


def test_keys_create_prints_the_key_and_nothing_else(tmp_path: Path) -> None:
    url = f"sqlite:///{tmp_path / 'keys.sqlite3'}"
    made = command("keys", "create", "--role", "viewer", "--name", "wall-board", database_url=url)
    assert made.returncode == 0, made.stderr
    assert len(made.stdout.strip()) >= 43
    assert made.stdout.count("\n") == 1
    taken = command("keys", "create", "--role", "viewer", "--name", "wall-board", database_url=url)
    assert (taken.returncode, taken.stdout) == (1, "")
    assert "already named 'wall-board'" in taken.stderr
    assert command("keys", "create", "--role", "king", "--name", "x", database_url=url).returncode == 2
    assert command("keys", "create", "--role", "viewer", "--name", "a b", database_url=url).returncode == 1
    for days in ("0", "1e12"):
        late = command("keys", "create", "--role", "viewer", "--name", "x", "--expires-in-days", days, database_url=url)
        assert (late.returncode, late.stdout, late.stderr.count("\n")) == (1, "", 1), late.stderr
    assert command("keys", "revoke", "nobody", database_url=url).returncode == 1


def test_a_bad_database_address_is_one_clear_line(tmp_path: Path) -> None:
    for url in ("nonsense", f"sqlite:///{tmp_path}/no/such/folder/x.sqlite3"):
        done = command("migrate", database_url=url)
        assert done.returncode == 1
        assert "Traceback" not in done.stderr


def test_the_demo_decides_four_leaves_two_open_and_cleans_up() -> None:
    done = command("demo", "--quick", database_url="sqlite:///never-used.sqlite3")
    assert done.returncode == 0, done.stderr
    assert done.stdout.count("accepted") >= 1
    assert done.stdout.count("rejected") >= 1
    assert done.stdout.count("accepted") + done.stdout.count("rejected") == 4
    assert done.stdout.count("still to be decided") == 2
    assert not Path("never-used.sqlite3").exists()


def test_candidates_are_designed_without_a_service(tmp_path: Path) -> None:
    """Twice the same plan, once by its standard: the printed figures are those of the interface."""
    url = f"sqlite:///{tmp_path / 'none.sqlite3'}"
    done = command("design", "--standard", "MIL-HDBK-781A/III-D", "--scale", "100", database_url=url)
    assert done.returncode == 0, done.stderr
    assert "0.128345" in done.stdout
    assert "1023.53" in done.stdout
    assert "Probability of acceptance against the true parameter" in done.stdout
    assert not (tmp_path / "none.sqlite3").exists()


def test_two_arms_are_designed_with_what_they_need_to_know(tmp_path: Path) -> None:
    """With twice the exposure, ratios of 1 and 1/2 are chances of 2/3 and 1/2 that an event is in b."""
    asked = [
        "--family",
        "poisson_ratio",
        "--h0",
        "1",
        "--h1",
        "0.5",
        "--known",
        "exposure_ratio=2",
        "--alpha",
        "0.05",
        "--beta",
        "0.1",
    ]
    done = command("design", *asked, database_url=f"sqlite:///{tmp_path / 'none.sqlite3'}")
    assert "Smallest fixed sample with the same risks: 79 units, accept at least 46." in done.stdout, done.stderr
    assert binom.cdf(45, 79, 2 / 3) <= 0.05
    assert binom.sf(45, 79, 1 / 2) <= 0.10
    assert all(binom.cdf(k - 1, 78, 2 / 3) > 0.05 or binom.sf(k - 1, 78, 1 / 2) > 0.10 for k in range(79))


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["--h0", "0.1", "--h1", "0.1", "--alpha", "0.1", "--beta", "0.1"], "--h1: must differ from h0"),
        (["--h0", "0.1", "--h1", "0.2", "--alpha", "0.1"], "--beta: is required"),
        (["--standard", "MIL-HDBK-781A/III-D"], "--scale: is required"),
        (["--h0", "0.1", "--h1", "0.2", "--alpha", "0.1", "--beta", "0.1", "--truncation", "x"], "--truncation"),
        (["--family", "normal", "--h0", "0.1", "--h1", "0.2", "--alpha", "0.1", "--beta", "0.1"], "--sigma"),
        (
            ["--family", "poisson_ratio", "--h0", "1", "--h1", "2", "--alpha", "0.1", "--beta", "0.1"],
            "--known exposure",
        ),
        (["--family", "score", "--alpha", "0.1", "--beta", "0.1", "--boundaries", "strict"], "no exact figures"),
        (["--h0", "0.1", "--known", "share"], "name=number"),
        (["--h0", "1e-6", "--h1", "1.1e-6", "--alpha", "0.1", "--beta", "0.1"], "would need more than"),
    ],
)
def test_a_design_that_cannot_be_right_is_refused_in_a_line(tmp_path: Path, arguments: list[str], said: str) -> None:
    done = command("design", *arguments, database_url=f"sqlite:///{tmp_path / 'none.sqlite3'}")
    assert done.returncode == 1
    assert said in done.stderr
    assert "Traceback" not in done.stderr


def test_a_design_may_need_to_know_more(tmp_path: Path) -> None:
    """Weibull of shape 2, half the life: mean lives 1 and 1/4 in failures that H0 expects, exactly 1.17109 of them."""
    url = f"sqlite:///{tmp_path / 'none.sqlite3'}"
    question = ["--family", "weibull", "--h0", "1000", "--h1", "500", "--alpha", "0.1", "--beta", "0.1"]
    done = command("design", *question, "--known", "shape=2", database_url=url)
    assert done.returncode == 0, done.stderr
    assert "1.17109" in done.stdout


def test_a_bad_setting_is_named_in_a_line(tmp_path: Path) -> None:
    done = command("serve", database_url=f"sqlite:///{tmp_path / 'none.sqlite3'}", SPRT_MAX_BATCH="many")
    assert done.returncode == 1
    assert "SPRT_MAX_BATCH" in done.stderr
    assert "Traceback" not in done.stderr
