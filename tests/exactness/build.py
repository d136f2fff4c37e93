"""Compiles csrc, whole or with one line changed, together with the C loops of this directory, and calls them."""

import ctypes
import subprocess
import tempfile
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import cache
from pathlib import Path

import numpy as np
from targets import _build

HERE = Path(__file__).resolve().parent
CSRC = HERE.parents[1] / "csrc"
# Two or three coordinates gain nothing from wide registers, whose copies of the kernels (with the same bits) cost time.
FLAGS = [flag for flag in _build.FLAGS if flag != "-shared"] + ["-fvisibility=hidden", "-DFW_NO_CLONES"]


class Plan(ctypes.Structure):
    """`plan` of harness.h."""

    _fields_ = (
        ("motion", ctypes.c_char_p),
        ("path", ctypes.c_char_p),
        ("scheme", ctypes.c_int32),
        ("curvature", ctypes.c_int32),
        ("turn", ctypes.c_int32),
        ("steps", ctypes.c_uint32),
        ("doublings", ctypes.c_uint32),
        ("halvings", ctypes.c_uint32),
        ("rank", ctypes.c_uint32),
        ("beta", ctypes.c_double),
        ("step_size", ctypes.c_double),
        ("halving_bound", ctypes.c_double),
        ("scale", ctypes.c_void_p),
        ("directions", ctypes.c_void_p),
        ("lam", ctypes.c_void_p),
    )


class Totals(ctypes.Structure):
    """`totals` of harness.h."""

    _fields_ = (
        *[(name, ctypes.c_double) for name in ("acceptance", "steps", "gradients", "products", "failures", "moved")],
        ("settings_moved", ctypes.c_int32),
        ("status", ctypes.c_int32),
    )


@dataclass(frozen=True)
class Mutation:
    """In the core's source `file`, `old` (which must occur exactly once) becomes `new`."""

    file: str
    old: str
    new: str


def _command(arguments: list[str]) -> None:
    done = subprocess.run([*_build.compiler(), *arguments], capture_output=True, text=True, check=False)
    assert done.returncode == 0, f"`{' '.join(arguments)}` failed:\n{done.stderr}"


def _object(source: Path, into: Path, csrc: Path) -> Path:
    out = into / f"{source.stem}.o"
    _command([*FLAGS, "-c", f"-I{csrc / 'include'}", f"-I{csrc / 'src'}", f"-I{HERE}", "-o", str(out), str(source)])
    return out


@cache
def _folder() -> tempfile.TemporaryDirectory:
    return tempfile.TemporaryDirectory(prefix="fellwalk-exactness-", ignore_cleanup_errors=True)


@cache
def _objects() -> dict[str, Path]:
    """Objects of the unchanged core and of the loops, by source name."""
    into = Path(_folder().name) / "unchanged"
    into.mkdir()
    sources = [*sorted((CSRC / "src").glob("*.c")), *sorted(HERE.glob("*.c"))]
    with ThreadPoolExecutor(2) as pool:
        return dict(zip([s.name for s in sources], pool.map(lambda s: _object(s, into, CSRC), sources), strict=True))


def mutated_text(text: str, mutation: Mutation) -> str:
    """The text with the mutation made; AssertionError unless the old text occurs exactly once."""
    count = text.count(mutation.old)
    assert count == 1, f"{mutation.file} has {count} places to plant this error in, not 1: {mutation.old!r}"
    return text.replace(mutation.old, mutation.new)


@cache
def harness(mutation: Mutation | None = None) -> ctypes.CDLL:
    """The loops linked with the core; with a mutation, made in a copy of csrc."""
    objects = dict(_objects())
    name = "unchanged" if mutation is None else f"mutant{abs(hash(mutation)):x}"
    into = Path(_folder().name) / name
    if mutation is not None:
        # A copy of the whole tree: the changed file must see its own headers beside it.
        into.mkdir()
        for part in ("include", "src"):
            (into / part).mkdir()
            for path in (CSRC / part).iterdir():
                if path.suffix in (".c", ".h"):
                    (into / part / path.name).write_text(path.read_text())
        source = into / "src" / mutation.file
        source.write_text(mutated_text(source.read_text(), mutation))
        objects[mutation.file] = _object(source, into, into)
    library = into / "harness.so"
    _command(["-shared", "-o", str(library), *map(str, objects.values()), "-lm"])
    found = ctypes.CDLL(str(library))
    found.run_from_starts.restype = None
    found.run_from_starts.argtypes = [
        ctypes.POINTER(Plan),
        ctypes.c_size_t,
        *[ctypes.c_void_p] * 3,
        *[ctypes.c_size_t] * 2,
        ctypes.c_uint64,
        ctypes.c_void_p,
        ctypes.POINTER(Totals),
    ]
    return found


def address(name: str) -> int:
    """Where the compiled test density (or product) `name` is."""
    return ctypes.cast(_build.function(name), ctypes.c_void_p).value


def pointer(array: np.ndarray) -> int:
    """The address of a C-contiguous float64 array, which must outlive its use."""
    assert array.dtype == np.float64
    assert array.flags.c_contiguous
    return array.ctypes.data
