"""How long `import fellwalk` takes, beside NumPy, and after it the parts that are imported when first asked for.

Each row is the smallest of several fresh interpreters, by -X importtime: the cumulative time of the named module,
without the start of the interpreter. Run: python benchmarks/import_time.py [--quick]
"""

import re
import subprocess
import sys

ROWS = [
    ("numpy", "import numpy", ["numpy", "numpy.random"]),
    ("fellwalk", "import fellwalk", ["fellwalk"]),
    ("fellwalk, NumPy already there", "import numpy, numpy.random, fellwalk", ["fellwalk"]),
    ("fellwalk.run (whole runs)", "import fellwalk, fellwalk.run", ["fellwalk.run"]),
    ("fellwalk.judge (SciPy)", "import fellwalk, fellwalk.judge", ["fellwalk.judge"]),
    ("fellwalk.audit", "import fellwalk, fellwalk.audit", ["fellwalk.audit"]),
]


def milliseconds(program: str, names: list[str]) -> float:
    """The cumulative import time of the named modules in one fresh interpreter."""
    command = [sys.executable, "-X", "importtime", "-c", program]
    done = subprocess.run(command, capture_output=True, text=True, check=True)
    found = dict.fromkeys(names, 0.0)
    for line in done.stderr.splitlines():
        match = re.match(r"import time:\s*\d+ \|\s*(\d+) \|\s*(\S+)$", line)
        if match and match[2] in found:
            found[match[2]] = float(match[1]) / 1000
    return max(found.values())


def main() -> None:
    repeats = 3 if "--quick" in sys.argv else 15
    least = {label: float("inf") for label, _, _ in ROWS}
    for _ in range(repeats):  # by turns, so that another program's work falls on all rows alike
        for label, program, names in ROWS:
            least[label] = min(least[label], milliseconds(program, names))
    print(f"{'module':<32}  ms (smallest of {repeats})")
    for label, time in least.items():
        print(f"{label:<32}  {time:6.0f}")


if __name__ == "__main__":
    main()
