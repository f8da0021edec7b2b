"""An installed wheel, away from the checkout, carries its migrations and can do the job."""

import os
import subprocess
import sys
import venv
from pathlib import Path

from tests.documents import TOP


def test_a_wheel_migrates_and_makes_keys_far_from_the_checkout(tmp_path: Path) -> None:
    """The wheel goes into an environment of its own that borrows only the dependencies of this one."""
    subprocess.run(
        [sys.executable, "-m", "hatchling", "build", "-t", "wheel", "-d", str(tmp_path)],
        cwd=TOP,
        check=True,
        capture_output=True,
    )
    (wheel,) = tmp_path.glob("*.whl")
    home = tmp_path / "elsewhere"
    venv.create(home, with_pip=False)
    python = home / "bin" / "python"
    packages = next(home.glob("lib/python*/site-packages"))
    subprocess.run(
        [python, "-c", f"import zipfile; zipfile.ZipFile({str(wheel)!r}).extractall({str(packages)!r})"], check=True
    )
    borrowed = [path for path in sys.path if path.endswith("site-packages")]
    (packages / "borrowed.pth").write_text("\n".join(borrowed) + "\n")
    environment = {key: value for key, value in os.environ.items() if key != "PYTHONPATH"}
    environment["SPRT_DATABASE_URL"] = f"sqlite:///{tmp_path / 'wheel.sqlite3'}"

    def run(*arguments: str) -> subprocess.CompletedProcess[str]:
        return subprocess.run(
            [python, "-m", "service", *arguments],
            cwd=home,
            env=environment,
            capture_output=True,
            text=True,
            check=False,
        )

    for folder, pattern in (("templates", "*.html"), ("templates", "*.typ"), ("static", "*.js"), ("static", "*.css")):
        assert list((packages / "service" / "pages" / folder).glob(pattern)), (folder, pattern)
    where = subprocess.run(
        [python, "-c", "import service; print(service.__file__)"],
        cwd=home,
        env=environment,
        capture_output=True,
        text=True,
        check=True,
    )
    assert where.stdout.startswith(str(home))
    migrated = run("migrate")
    assert migrated.returncode == 0, migrated.stderr
    made = run("keys", "create", "--role", "viewer", "--name", "x")
    assert made.returncode == 0, made.stderr
