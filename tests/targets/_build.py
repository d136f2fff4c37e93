"""Compiles the C files of this directory into one shared library, once, and hands out its functions as callables."""

import ctypes
import hashlib
import os
import shlex
import shutil
import subprocess
import sysconfig
import tempfile
from functools import cache
from pathlib import Path

import numpy as np
from scipy import LowLevelCallable

HERE = Path(__file__).resolve().parent
FLAGS = ["-std=c11", "-O3", "-g0", "-ffp-contract=off", "-fno-math-errno", "-fno-trapping-math", "-shared", "-fPIC"]
DENSITY_SIGNATURE = "int (size_t, const double *, double *, double *, void *)"
PRODUCT_SIGNATURE = "int (size_t, const double *, const double *, double *, void *)"
# A capsule keeps only the pointer to its name, so the names live as long as the process.
_NAMES = {text: ctypes.c_char_p(text.encode()) for text in (DENSITY_SIGNATURE, PRODUCT_SIGNATURE)}

_new_capsule = ctypes.pythonapi.PyCapsule_New
_new_capsule.restype = ctypes.py_object
_new_capsule.argtypes = [ctypes.c_void_p, ctypes.c_char_p, ctypes.c_void_p]
_set_context = ctypes.pythonapi.PyCapsule_SetContext
_set_context.restype = ctypes.c_int
_set_context.argtypes = [ctypes.py_object, ctypes.c_void_p]


def compiler() -> list[str]:
    """The C compiler as a command: the variable CC, Python's own, or cc, gcc, clang; RuntimeError if there is none."""
    for candidate in (os.environ.get("CC"), sysconfig.get_config_var("CC"), "cc", "gcc", "clang"):
        words = shlex.split(candidate or "")
        if words and shutil.which(words[0]):
            return words
    raise RuntimeError("The test densities are written in C and no C compiler was found: install one or set CC.")


def _cache_directory(key: str) -> Path:
    owner = os.getuid() if hasattr(os, "getuid") else "user"
    directory = Path(tempfile.gettempdir()) / f"fellwalk-test-targets-{owner}-{key}"
    directory.mkdir(mode=0o700, exist_ok=True)
    # Someone else's directory of that name could hold any code, and its code would be loaded into the tests.
    if hasattr(os, "getuid") and directory.stat().st_uid != owner:
        raise RuntimeError(f"{directory} belongs to another user: remove it or set TMPDIR.")
    return directory


@cache
def library() -> ctypes.CDLL:
    """The compiled library, built again only when a source, the compiler or a flag has changed."""
    command = compiler()
    sources = sorted(HERE.glob("*.c"))
    text = b"\0".join(path.read_bytes() for path in [*sources, *sorted(HERE.glob("*.h"))])
    key = hashlib.sha256(text + " ".join([*command, *FLAGS]).encode()).hexdigest()[:20]
    directory = _cache_directory(key)
    built = directory / "targets.so"
    if not built.exists():
        # Two sessions may build at the same time: each writes its own file and the renaming is atomic.
        handle, unfinished = tempfile.mkstemp(suffix=".so", dir=directory)
        os.close(handle)
        line = [*command, *FLAGS, "-o", unfinished, *map(str, sources), "-lm"]
        done = subprocess.run(line, capture_output=True, text=True, check=False)
        if done.returncode:
            Path(unfinished).unlink()
            raise RuntimeError(f"The test densities did not compile with `{shlex.join(line)}`:\n{done.stderr}")
        Path(unfinished).replace(built)
    return ctypes.CDLL(str(built))


def function(name: str):
    """The C function `name` for calls through ctypes: (d, pointer, pointer, pointer, context) -> int."""
    found = getattr(library(), name)
    found.restype = ctypes.c_int
    found.argtypes = [ctypes.c_size_t, *[ctypes.c_void_p] * 4]
    return found


def callable_with_context(name: str, signature: str, context: np.ndarray | None) -> LowLevelCallable:
    """The C function `name` as a LowLevelCallable whose `signature` is exactly the given text.

    The context pointer sits in the capsule, and the callable's `user_data` keeps the array alive.
    """
    address = ctypes.cast(getattr(library(), name), ctypes.c_void_p)
    capsule = _new_capsule(address, _NAMES[signature], None)
    if context is None:
        return LowLevelCallable(capsule)
    pointer = context.ctypes.data_as(ctypes.c_void_p)
    if _set_context(capsule, pointer):
        raise RuntimeError(f"The context of {name} could not be set.")
    return LowLevelCallable(capsule, user_data=pointer)
