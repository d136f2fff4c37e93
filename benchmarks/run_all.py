"""All benchmarks, one after the other.

    python benchmarks/run_all.py [--quick] [NAME ...]

NAME: only these, such as speed or threads. Each prints as it goes; what went wrong stands last.
"""

import argparse
import subprocess
import sys
import time
from pathlib import Path

HERE = Path(__file__).resolve().parent
SPEED = ("speed", "against_numpy", "threads", "memory", "storage", "step_time", "driver_time", "bounded_parameters")


def others() -> list[str]:
    """Benchmarks that are not about speed: every other file here that runs by itself and needs no argument."""
    found = sorted(file for file in HERE.glob("*.py") if "if __name__" in file.read_text(encoding="utf-8"))
    return [file.stem for file in found if file.stem not in (*SPEED, "run_all", "compare")]


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true", help="rough answers, and of speed only")
    parser.add_argument("names", nargs="*", metavar="NAME")
    options = parser.parse_args()
    known = [*SPEED, *others()]
    names = options.names or (SPEED if options.quick else known)
    wrong = []
    for name in names:
        file = HERE / f"{name}.py"
        if name not in known:
            parser.error(f"there is no benchmark {name!r}; there are {', '.join(known)}")
        print(f"\n==== {name}\n", flush=True)
        begun = time.monotonic()
        quick = ["--quick"] if options.quick and '"--quick"' in file.read_text(encoding="utf-8") else []
        if subprocess.run([sys.executable, str(file), *quick], check=False).returncode:
            wrong.append(name)
        print(f"\n({time.monotonic() - begun:.0f} s)", flush=True)
    print(f"\nFailed: {', '.join(wrong)}." if wrong else "\nAll ran to the end.")
    return len(wrong)


if __name__ == "__main__":
    sys.exit(main())
