"""The table in csrc/src/kernels.h, of what a step moves, is what the steps do: every kernel call is counted."""

import ctypes
import functools
import re
import subprocess
from pathlib import Path

import pytest
from targets import _build

ROOT = Path(__file__).resolve().parent.parent
SOURCES = sorted((ROOT / "csrc" / "src").glob("*.c"))
HEADER = ROOT / "csrc" / "src" / "kernels.h"
STEPS, D = 40, 11

pytestmark = pytest.mark.skipif(not SOURCES, reason="the sources of the core are not beside the tests")

# Arrays that a kernel reads, and arrays that it writes, as its declaration says and its one loop does. A kernel that a
# step calls and that is not here counts as a million.
MOVES = {
    "fw_kick_drift_gradient": (4, 2), "fw_kick_gradient": (3, 1), "fw_kick_drift": (4, 2), "fw_whiten": (3, 1),
    "fw_kick": (2, 1), "fw_kick2_drift": (5, 2), "fw_whiten_spread": (2, 2), "fw_whiten_product": (3, 1),
    "fw_kick2_spread": (4, 2), "fw_product_dot": (3, 0), "fw_scale_by": (2, 1), "fw_product_sums": (5, 0),
    "fw_kick2": (3, 1), "fw_whiten_square": (2, 1), "fw_kick2_drift_coarsest": (5, 2),
    "fw_probe": (3, 1), "fw_whiten_difference": (3, 1),
    "fw_difference_dot": (4, 0), "fw_difference_sums": (5, 0), "fw_blend": (2, 1), "fw_link_gradient": (4, 2),
    "fw_link": (4, 2), "fw_dot": (2, 0), "fw_axpy": (2, 1), "fw_drift": (3, 1), "fw_gram2": (2, 0),
    "fw_whitened_sums": (3, 0), "fw_kicked_sums": (3, 0), "fw_kick_twice_drift": (4, 2),
}  # fmt: skip

MOTIONS = {
    "leapfrog": (b"leapfrog", 0, 0),
    "isokinetic": (b"isokinetic", 0, 0),
    "surrogate, either scheme": (b"lagrangian", 0, 0),
    "surrogate, the other": (b"lagrangian", 1, 0),
    "product, split": (b"lagrangian", 0, 2),
    "product, semi-explicit": (b"lagrangian", 1, 2),
    "difference, split": (b"lagrangian", 0, 1),
    "difference, semi-explicit": (b"lagrangian", 1, 1),
}


# Those whose steps in a row have a line of their own; for the others it is that of single steps.
ROWS = {
    "leapfrog": "leapfrog, in a row",
    "surrogate, either scheme": "surrogate, in a row",
    "surrogate, the other": "surrogate, in a row",
}


def sizes(*numbers):
    return map(ctypes.c_size_t, numbers)


def declared():
    """Names of all kernels, but for those that are inline."""
    text = re.sub(r"/\*.*?\*/", "", HEADER.read_text(encoding="utf-8"), flags=re.S)
    return re.findall(r"^(?:void|double|int) (fw_\w+)\(", text, flags=re.M)


def table():
    """{motion: (moved, least)} of the comment in kernels.h."""
    rows = re.findall(r"^ \*   (\S.*?)  +.*?(\d+) +(\d+)$", HEADER.read_text(encoding="utf-8"), flags=re.M)
    return {name: (int(moved), int(least)) for name, moved, least in rows}


@pytest.fixture(scope="module")
def library(tmp_path_factory):
    folder = tmp_path_factory.mktemp("counts")
    lines = [f'#include "{HEADER}"', "extern long moved;", "static inline void add(long n) { moved += n; }"]
    for name in declared():
        lines.append(f"#define {name}(...) (add({sum(MOVES.get(name, (1_000_000,)))}), {name}(__VA_ARGS__))")
    counting = folder / "counting.h"
    counting.write_text("\n".join(lines), encoding="utf-8")
    flags = ["-std=c11", "-O1", "-fPIC", "-DFW_NO_CLONES", f"-I{ROOT / 'csrc/include'}", f"-I{ROOT / 'csrc/src'}"]
    objects = []
    for source in [*SOURCES, ROOT / "tests" / "speed_counts.c"]:
        own = [] if source.stem in ("kernels", "speed_counts") else ["-include", str(counting)]
        objects.append(str(folder / f"{source.stem}.o"))
        subprocess.run([*_build.compiler(), *flags, *own, "-c", str(source), "-o", objects[-1]], check=True)
    out = folder / "counts.so"
    subprocess.run([*_build.compiler(), "-shared", "-o", str(out), *objects, "-lm"], check=True)
    loaded = ctypes.CDLL(str(out))
    loaded.counted.restype = loaded.counted_path.restype = ctypes.c_long
    return loaded


def test_the_kernels_counted_are_kernels():
    assert set(MOVES) <= set(declared())
    assert len(declared()) > 30


@pytest.mark.parametrize("name", MOTIONS)
def test_a_step_moves_what_the_table_says(library, name):
    motion, scheme, curvature = MOTIONS[name]
    steps = 3 if name == "isokinetic" else STEPS  # before it turns against the gradient, where it reads more
    moved = library.counted(motion, scheme, curvature, *sizes(D, steps, 1, 0, 0))
    said, least = table()[name if name in table() else "surrogate, either scheme"]
    assert moved == steps * said
    assert least <= said <= least + 1


@pytest.mark.parametrize("name", MOTIONS)
def test_a_step_in_a_row_moves_what_the_table_says(library, name):
    motion, scheme, curvature = MOTIONS[name]
    steps = 3 if name == "isokinetic" else STEPS
    said = table()[ROWS.get(name, name)][0]
    assert library.counted(motion, scheme, curvature, *sizes(D, 1, 1 + steps, 1, 0)) == steps * said


@pytest.mark.parametrize("learned", [1, 2, 4])
def test_learned_directions_move_what_the_sentence_says(library, learned):
    said = r"leapfrog step moves (\d+) \+ (\d+) k, in a row (\d+) \+ (\d+) k"
    single, more, row, more_in_row = map(int, re.search(said, HEADER.read_text(encoding="utf-8")).groups())
    counted = functools.partial(library.counted, b"leapfrog", 0, 0)
    assert counted(*sizes(D, STEPS, 1, 0, learned)) == STEPS * (single + more * learned)
    assert counted(*sizes(D, 1, 1 + STEPS, 1, learned)) == STEPS * (row + more_in_row * learned)
    surrogate = functools.partial(library.counted, b"lagrangian", 0, 0)
    assert surrogate(*sizes(D, STEPS, 1, 0, learned)) == surrogate(*sizes(D, 1, 1 + STEPS, 1, learned))


@pytest.mark.parametrize("name", ["leapfrog", "surrogate, either scheme"])
def test_jittered_paths_are_rows(library, name):
    short, long = (library.counted_path(MOTIONS[name][0], *sizes(D, most)) for most in (4, 12))
    assert short > 0
    assert long - short == 4 * table()[ROWS[name]][0]


def test_the_table_has_every_motion():
    assert set(table()) == set(MOTIONS) - {"surrogate, the other"} | set(ROWS.values())
