"""Builds tests/consumer, a user's program in Cython and C, against some installed fellwalk, and runs its comparison."""

import json
import os
import shutil
import subprocess
from pathlib import Path

from targets import _build

CONSUMER = Path(__file__).resolve().parent / "consumer"


def run(words, folder, **environment):
    """Standard output; the test fails with what the program said."""
    kept = {key: value for key, value in os.environ.items() if key != "PYTHONPATH"}
    done = subprocess.run(list(map(str, words)), cwd=folder, env={**kept, **environment}, capture_output=True,
                          text=True, check=False, timeout=280)
    assert done.returncode == 0, f"{' '.join(map(str, words))}:\n{done.stdout[-3000:]}\n{done.stderr[-6000:]}"
    return done.stdout


def built_and_compared(python, folder, **environment):
    """Builds the consumer with the interpreter `python` in a copy below `folder`; what its compare.py printed."""
    copy = folder / "consumer"
    shutil.copytree(CONSUMER, copy, ignore=shutil.ignore_patterns("build", "*.so", "*.pyd", "__pycache__", "walker*.c"))
    run([python, "setup.py", "-q", "build_ext", "--inplace"], copy, **environment)
    return json.loads(run([python, "compare.py"], copy, **environment).splitlines()[-1])


def plain_program(folder, *words):
    """The plain C program, compiled with `words` (where the header and the core are) added; its path."""
    out = folder / "plain"
    strict = ["-std=c11", "-Wall", "-Wextra", "-Wpedantic", "-Wconversion", "-Wshadow", "-Werror", "-ffp-contract=off"]
    run([*_build.compiler(), *strict, CONSUMER / "plain.c", CONSUMER / "ridge.c", *words, "-lm", "-o", out], folder)
    return out
