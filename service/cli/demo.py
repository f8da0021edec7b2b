"""
A factory of its own: the Brackwater pump works, one morning.

Six questions of four families are asked at once; their results are invented with a fixed seed and posted one small
submission after another, as testers would. Four are decided; one lot waits for more units, and one lathe goes on.
"""

import itertools
import os
import random
import socket
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from service.cli.failing import fail

if TYPE_CHECKING:
    from rich.console import Console

    from service.cli.client import ServiceClient

SEED = 20_413
START_LIMIT_SECONDS = 30.0
# Between two results of what goes on while people look.
PACE_SECONDS = 4.0


@dataclass(frozen=True)
class Story:
    """
    One question of the factory: its plan, its subject, and where its results come from.

    Attributes:
        pause_after: Results after which it is left as it stands, for people to look at; None to go on to the decision.
    """

    plan: dict[str, Any]
    key: str
    subject: dict[str, str]
    labels: dict[str, str]
    question: str
    unit: str
    results: Iterator[list[dict[str, Any]]]
    pause_after: int | None = None


def demo(
    port: Annotated[int, typer.Option(min=0, max=65535, help="Port to listen on; 0 finds a free one.")] = 0,
    quick: Annotated[bool, typer.Option("--quick", help="No pauses, and stop after the decisions.")] = False,
) -> None:
    """Start the service on a temporary database, let an invented factory post its results, and watch it decide."""
    from rich.console import Console

    from service.cli.client import ServiceClient

    console = Console()
    with tempfile.TemporaryDirectory(prefix="sprt-demo-") as folder:
        database_url = f"sqlite:///{Path(folder) / 'demo.sqlite3'}"
        key = _make_key(database_url)
        port = port or _free_port()
        url = f"http://127.0.0.1:{port}"
        with _serving(port, database_url) as process:
            _wait(url, process)
            client = ServiceClient(url, key)
            lathe = _play(console, client, pause_seconds=0.0 if quick else 0.04)
            if not quick:
                _leave_up(console, client, (url, key), process, lathe)


def _play(console: "Console", client: "ServiceClient", pause_seconds: float) -> Story:
    """Register everything, then post in turn until all is decided but what stays open; the story that goes on."""
    console.print(
        "[bold]The Brackwater pump works, one morning.[/bold] Six questions, agreed risks, results as they come.\n"
    )
    running = _stories(random.Random(SEED))
    *_, lathe = running
    for story in running:
        client.post("/v1/plans", story.plan)
        registration = {"key": story.key, "plan": story.plan["name"], "subject": story.subject, "labels": story.labels}
        client.post("/v1/tests", registration)
        console.print(f"  [cyan]{story.key:<12}[/cyan] {story.question}")
    console.print()
    turns = itertools.count(1)
    while running:
        turn = next(turns)
        for story in list(running):
            body = {"observations": next(story.results)}
            state = client.post(f"/v1/tests/{story.key}/observations", body, idempotency_key=f"turn-{turn}")
            if state["decision"] != "continue":
                running.remove(story)
                _tell(console, story, state)
            elif turn == story.pause_after:
                running.remove(story)
                console.print(f"[bold]{'open':>9}[/bold]  {story.key}  after {turn} {story.unit}, still to be decided")
        time.sleep(pause_seconds)
    return lathe


def _tell(console: "Console", story: Story, state: dict[str, Any]) -> None:
    """The decision in plain words."""
    accepted = state["decision"] == "accept"
    colour, word = ("green", "accepted") if accepted else ("red", "rejected")
    family = story.plan["family"]
    used = f"{state['sample_number']} {story.unit}"
    seen = {
        "bernoulli": f"{state['total']} of them leaking",
        "poisson": f"{state['total']} voids in {state['exposure'] or 0:.1f} dm²",
        "exponential": f"{state['total']} failures in {state['exposure'] or 0:.0f} h",
        "normal": f"mean {state['total'] / state['sample_number']:.3f} mm",
    }[family]
    evidence = f"evidence {state['log_likelihood_ratio']:+.2f}"
    console.print(f"[bold {colour}]{word:>9}[/bold {colour}]  {story.key}  after {used}: {seen}, {evidence}")


def _stories(source: random.Random) -> list[Story]:
    """Four questions; every stream of results is endless, the decision ends it."""
    risks = {"alpha": 0.05, "beta": 0.10}
    return [
        Story(
            plan={"name": "gland-leak", "family": "bernoulli", "h0": 0.02, "h1": 0.10, **risks},
            key="glands-0713",
            subject={"kind": "lot", "name": "Gland seals 0713"},
            labels={"cell": "sealing"},
            question="Gland seals 0713: 2 % leaking is good, 10 % bad.",
            unit="seals",
            results=_one_by_one({"value": int(source.random() < 0.012)} for _ in _for_ever()),  # noqa: PLR2004
        ),
        Story(
            plan={"name": "casting-voids", "family": "poisson", "h0": 0.4, "h1": 1.2, **risks},
            key="housings-88",
            subject={"kind": "lot", "name": "Housings, melt 88"},
            labels={"cell": "foundry"},
            question="Housings of melt 88: 0.4 voids per dm² is good, 1.2 bad.",
            unit="housings",
            results=_one_by_one(_void_count(source) for _ in _for_ever()),
        ),
        Story(
            plan={"name": "motor-life", "family": "exponential", "h0": 900.0, "h1": 300.0, **risks},
            key="motor-mk4",
            subject={"kind": "experiment", "name": "Motor Mk 4, endurance bench"},
            labels={"cell": "bench 2"},
            question="Motor Mk 4: does it live 900 h on average, or 300 h?",
            unit="reports",
            results=_one_by_one(_bench_report(source) for _ in _for_ever()),
        ),
        Story(
            plan={
                "name": "shaft-length",
                "family": "normal",
                "h0": 240.0,
                "h1": 240.15,
                "known": {"sigma": 0.2},
                **risks,
            },
            key="lathe-5",
            subject={"kind": "experiment", "name": "Lathe 5 after the tool change"},
            labels={"cell": "turning"},
            question="Lathe 5: still at 240.00 mm, or drifted to 240.15 mm?",
            unit="shafts",
            results=_one_by_one({"value": round(source.gauss(240.13, 0.2), 3)} for _ in _for_ever()),
        ),
        Story(
            plan={"name": "bearing-noise", "family": "bernoulli", "h0": 0.01, "h1": 0.08, **risks},
            key="bearings-12",
            subject={"kind": "lot", "name": "Bearings 12"},
            labels={"cell": "assembly"},
            question="Bearings 12: 1 % noisy is good, 8 % bad.",
            unit="bearings",
            results=_one_by_one({"value": 0} for _ in _for_ever()),
            pause_after=11,
        ),
        Story(
            plan={
                "name": "shaft-roundness",
                "family": "normal",
                "h0": 2.0,
                "h1": 2.4,
                "known": {"sigma": 1.6},
                **risks,
            },
            key="lathe-6",
            subject={"kind": "experiment", "name": "Lathe 6, roundness in µm"},
            labels={"cell": "turning"},
            question="Lathe 6: still at 2.0 µm out of round, or worn to 2.4 µm?",
            unit="shafts",
            results=_one_by_one({"value": round(source.gauss(2.2, 1.6), 2)} for _ in _for_ever()),
            pause_after=30,
        ),
    ]


def _void_count(source: random.Random) -> dict[str, Any]:
    """One housing: its inspected area, and voids at a rate of 1.1 per square decimetre."""
    area = round(source.uniform(0.8, 1.6), 2)
    count, reach = 0, source.expovariate(1.1)
    while reach < area:
        count += 1
        reach += source.expovariate(1.1)
    return {"value": count, "exposure": area}


def _bench_report(source: random.Random) -> dict[str, Any]:
    """One report of the bench: 24 h without a failure, or the hours until one."""
    hours = source.expovariate(1 / 1100)
    shift = 24.0
    return {"time": round(min(hours, shift), 2), "failed": hours < shift}


def _one_by_one(results: Iterator[dict[str, Any]]) -> Iterator[list[dict[str, Any]]]:
    for result in results:
        yield [result]


def _for_ever() -> Iterator[None]:
    while True:
        yield None


def _make_key(database_url: str) -> str:
    """An engineer's key on the new database."""
    made = subprocess.run(
        [sys.executable, "-m", "service", "keys", "create", "--role", "engineer", "--name", "demo"],
        env={**os.environ, "SPRT_DATABASE_URL": database_url},
        capture_output=True,
        text=True,
        check=False,
    )
    if made.returncode != 0:
        raise fail(f"The demo could not make a key: {made.stderr.strip()}")
    return made.stdout.strip()


def _free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


@contextmanager
def _serving(port: int, database_url: str) -> Iterator["subprocess.Popen[bytes]"]:
    process = subprocess.Popen(
        [sys.executable, "-m", "service", "serve", "--port", str(port)],
        env={**os.environ, "SPRT_DATABASE_URL": database_url},
        stderr=subprocess.DEVNULL,
    )
    try:
        yield process
    finally:
        process.terminate()
        process.wait()


def _wait(url: str, process: "subprocess.Popen[bytes]") -> None:
    """Until the service is ready."""
    import httpx

    deadline = time.monotonic() + START_LIMIT_SECONDS
    while time.monotonic() < deadline and process.poll() is None:
        try:
            if httpx.get(f"{url}/readyz", trust_env=False).status_code == httpx.codes.OK:
                return
        except httpx.TransportError:
            time.sleep(0.05)
    raise fail("The service did not start; is the port free?")


def _leave_up(
    console: "Console", client: "ServiceClient", door: tuple[str, str], process: "subprocess.Popen[bytes]", lathe: Story
) -> None:
    """Until Ctrl-C; the lathe goes on, so that there is something to watch. The door is an address and a key."""
    url, key = door
    console.print(
        "\nThe service stays up until Ctrl-C. Look at it in a browser and sign in with this engineer's key:\n"
    )
    console.print(f"  {url}/", soft_wrap=True, highlight=False)
    console.print(f"  {key}", soft_wrap=True, highlight=False)
    console.print("\nBearings 12 is not decided: may it be accepted, and how many more does it take? Lathe 6 goes on.")
    console.print("\nOr ask it as a program would:\n")
    header = f'-H "Authorization: Bearer {key}"'
    for path in ("/v1/tests/bearings-12", "/v1/tests/glands-0713/path?points=20", "/v1/summary"):
        console.print(f"  curl -s {header} '{url}{path}'", soft_wrap=True, highlight=False)
    console.print(f"\nThe whole interface is described at {url}/openapi.json", highlight=False)
    try:
        _go_on(client, process, lathe)
        process.wait()
    except KeyboardInterrupt:
        console.print("\nStopped; the temporary database is gone.")


def _go_on(client: "ServiceClient", process: "subprocess.Popen[bytes]", story: Story) -> None:
    """One more result every few seconds, until the decision or the end of the service."""
    while process.poll() is None:
        state = client.post(f"/v1/tests/{story.key}/observations", {"observations": next(story.results)})
        if state["decision"] != "continue":
            return
        time.sleep(PACE_SECONDS)
