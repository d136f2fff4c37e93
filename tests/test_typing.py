"""mypy --strict on a program that uses the whole public interface: nothing to object to there, and every mistake seen
in another. What the program is told comes from py.typed, the annotations and _core.pyi, as it does for a user."""

import os
import re
import subprocess
import sys
from pathlib import Path

import pytest

import fellwalk as fw

pytest.importorskip("mypy")

PROGRAMS = Path(__file__).resolve().parent / "typed"


@pytest.fixture(scope="module")
def objections(tmp_path_factory):
    """{file name: {line: words}} of one run of mypy over both programs."""
    folder = tmp_path_factory.mktemp("mypy")
    home = Path(fw.__file__).resolve().parents[1]
    environment = {**os.environ, "MYPYPATH": "" if home.name in ("site-packages", "dist-packages") else str(home)}
    words = [sys.executable, "-m", "mypy", "--strict", "--config-file=", "--follow-imports=silent", "--no-pretty",
             "--no-error-summary", f"--cache-dir={folder}", "everything.py", "mistakes.py"]
    done = subprocess.run(words, cwd=PROGRAMS, env=environment, capture_output=True, text=True, timeout=280)
    assert done.returncode in (0, 1), done.stdout + done.stderr
    found = {"everything.py": {}, "mistakes.py": {}}
    for line in done.stdout.splitlines():
        match = re.match(r"(\w+\.py):(\d+): error: (.*)", line)
        if match:
            found[match[1]].setdefault(int(match[2]), []).append(match[3])
    return found


def test_a_program_that_uses_everything_is_fully_typed(objections):
    assert objections["everything.py"] == {}


def test_everything_public_is_used():
    """So that a name that joins the public interface joins the program too."""
    text = (PROGRAMS / "everything.py").read_text(encoding="utf-8")
    used = set(re.findall(r"\bfw\.(\w+)", text))
    assert set(fw.__all__) - used == set()


def test_mistakes_are_seen(objections):
    lines = (PROGRAMS / "mistakes.py").read_text(encoding="utf-8").splitlines()
    marked = {number for number, line in enumerate(lines, 1) if "# mistake" in line}
    assert len(marked) == 17
    assert set(objections["mistakes.py"]) == marked
