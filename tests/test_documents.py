"""The documents are complete, and their examples are run."""

import json
import os
import shutil
import subprocess
import time
import tomllib
from pathlib import Path
from typing import Any

import pytest
import yaml
from typer.main import get_command

from service.cli import app as command_line
from service.domain.notices import signature_of
from service.domain.receivers import secret_of
from service.settings import Settings
from tests.documents import DEVELOPERS, README, TOP, blocks
from tests.running import command, running

# These differ from run to run; the README shows those of one run.
PASSING = {"created_at", "registered_at", "updated_at", "at", "id", "secret"}


def stable(document: Any) -> Any:
    if isinstance(document, dict):
        return {key: "…" if key in PASSING else stable(value) for key, value in document.items()}
    if isinstance(document, float):
        return float(f"{document:.10g}")  # roots may differ in their last digits from machine to machine
    return [stable(item) for item in document] if isinstance(document, list) else document


def test_the_requests_have_the_answers_that_the_readme_shows(tmp_path: Path) -> None:
    """Run as they stand, with curl, against a new service; only its address and the moments differ."""
    assert shutil.which("curl"), "curl is needed to run the README's requests"
    requests = [block for block in blocks(README, "sh") if block.startswith("curl")]
    shown = [json.loads(block) for block in blocks(README, "json")]
    assert len(requests) == len(shown) == 5
    with running(tmp_path, key_names="me") as service:
        made = command(
            *("keys", "create", "--role", "administrator", "--name", "plant-it"), database_url=service.database_url
        )
        keys = {"SPRT_KEY": service.keys["engineer"], "SPRT_ADMIN_KEY": made.stdout.strip()}
        for request, answer in zip(requests, shown, strict=True):
            done = subprocess.run(
                ["bash", "-c", request.replace("localhost:8000", service.url)],
                env={**os.environ, **keys},
                capture_output=True,
                text=True,
                check=True,
            )
            assert stable(json.loads(done.stdout)) == stable(answer)


def test_the_readme_shows_how_to_verify_a_notice() -> None:
    """Its own lines are run; `tests/notices` signs and verifies apart from each other."""
    (lines,) = blocks(README, "python")
    shown: dict[str, Any] = {}
    exec(lines, shown)
    secret, body, now = secret_of(b"x" * 32), '{"é": 1}', int(time.time())
    signature = signature_of(secret, "n1", now, body)
    headers = {"webhook-id": "n1", "webhook-timestamp": str(now), "webhook-signature": f"v1,other {signature}"}
    is_genuine = shown["is_genuine"]
    assert is_genuine(secret, headers, body.encode())
    assert not is_genuine(secret_of(b"y" * 32), headers, body.encode())
    assert not is_genuine(secret, headers, body.encode() + b" ")
    for name, other in (("webhook-id", "n2"), ("webhook-timestamp", str(now + 1)), ("webhook-signature", "v1,")):
        assert not is_genuine(secret, {**headers, name: other}, body.encode()), name
    old = {**headers, "webhook-timestamp": "1614265330"}
    old["webhook-signature"] = signature_of(secret, "n1", 1614265330, body)
    assert not is_genuine(secret, old, body.encode())


def test_the_design_that_the_readme_shows_is_what_the_command_prints(tmp_path: Path) -> None:
    asked = next(block for block in blocks(README, "sh") if "sprt-monitor design" in block)
    shown = README.split("What the candidates really promise")[1].split("```")[0].splitlines()
    arguments = asked.replace("\\\n", " ").split()[1:]
    done = command(*arguments, database_url=f"sqlite:///{tmp_path / 'none.sqlite3'}", COLUMNS="80")
    printed = [line.rstrip() for line in done.stdout.splitlines()]
    assert all(line in printed for line in shown if line), done.stdout
    assert "Suggested truncation: 201 units" in done.stdout


def test_every_setting_is_in_the_readme_with_its_default() -> None:
    for name, field in Settings.model_fields.items():
        row = next(line for line in README.splitlines() if f"`SPRT_{name.upper()}`" in line)
        assert str(field.default) in row


def test_every_command_is_in_the_readme() -> None:
    commands = get_command(command_line).commands  # type: ignore[attr-defined]
    assert {"serve", "demo", "migrate", "keys", "load"} <= commands.keys()
    for name in commands:
        assert f"sprt-monitor {name}" in README, name


@pytest.mark.parametrize("role", ["viewer", "collector", "engineer", "administrator"])
def test_every_role_is_in_the_readme(role: str) -> None:
    assert f"`{role}`" in README


def test_the_map_names_every_folder() -> None:
    folders = [path.name for path in (TOP / "service").iterdir() if path.is_dir() and path.name != "__pycache__"]
    for name in folders:
        assert f"`service/{name}`" in DEVELOPERS, name


def test_the_top_level_holds_only_what_it_may() -> None:
    tracked = subprocess.run(["git", "ls-files"], cwd=TOP, capture_output=True, text=True, check=True).stdout
    names = {line.split("/")[0] for line in tracked.splitlines()}
    allowed = {
        "README.md",
        "DEVELOPERS.md",
        "pyproject.toml",
        "service",
        "migrations",
        "tests",
        "docker-compose.yml",
    }
    assert {name for name in names if not name.startswith(".")} <= allowed


def test_the_compose_file_runs_the_service_beside_postgresql() -> None:
    compose = yaml.safe_load((TOP / "docker-compose.yml").read_text(encoding="utf-8"))
    services = compose["services"]
    assert services["database"]["image"].startswith("postgres:")
    for name in ("service", "migrate"):
        assert services[name]["environment"]["SPRT_DATABASE_URL"].startswith("postgresql://")
        dockerfile = Path(services[name]["build"]["context"]) / services[name]["build"]["dockerfile"]
        assert (TOP / dockerfile).is_file()
    copied = [
        source
        for line in (TOP / "service" / "Dockerfile").read_text(encoding="utf-8").splitlines()
        if line.startswith("COPY")
        for source in line.split()[1:-1]
    ]
    assert all((TOP / source).exists() for source in copied)


def test_every_dependency_has_its_reason() -> None:
    text = (TOP / "pyproject.toml").read_text(encoding="utf-8")
    project = tomllib.loads(text)["project"]
    for requirement in [*project["dependencies"], *project["optional-dependencies"]["test"]]:
        line = next(line for line in text.splitlines() if line.strip().startswith(f'"{requirement}"'))
        assert "# " in line, requirement
