"""The C core by itself: strict builds, same bits with and without function clones, failing allocations, checkers."""

import ctypes
import os
import shutil
import subprocess
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pytest
import targets
from targets import _build

from fellwalk import facts

ROOT = Path(__file__).resolve().parent.parent
SOURCES = sorted((ROOT / "csrc" / "src").glob("*.c"))
HARNESS = ROOT / "tests" / "core_harness.c"
WINDOWS = ROOT / "tests" / "window_harness.c"
INCLUDES = [f"-I{ROOT / 'csrc' / 'include'}", f"-I{ROOT / 'csrc' / 'src'}"]
FLOATS = ["-std=c11", "-ffp-contract=off", "-fno-math-errno", "-fno-trapping-math"]
STRICT = ["-Wall", "-Wextra", "-Wpedantic", "-Wconversion", "-Wshadow", "-Wstrict-prototypes", "-Werror"]
NO_MEMORY, CALLBACK_STOP, BAD_ARGUMENT = -6, -1, -5
ROOM = 600  # transitions that a run of settling may take at most

pytestmark = pytest.mark.skipif(not SOURCES, reason="the sources of the core are not beside the tests")


def compile_(*words, check=True):
    line = [*_build.compiler(), *map(str, words)]
    done = subprocess.run(line, capture_output=True, text=True, check=False)
    if check and done.returncode:
        pytest.fail(f"`{' '.join(line)}` failed:\n{done.stderr[-4000:]}")
    return done


class Case(ctypes.Structure):
    """harness_case of core_harness.c."""

    _fields_ = (
        ("d", ctypes.c_size_t),
        *((name, ctypes.c_void_p) for name in ("density", "density_context", "product", "product_context")),
        ("motion", ctypes.c_char_p),
        ("path", ctypes.c_char_p),
        *((name, ctypes.c_int) for name in ("scheme", "curvature", "turn", "rank")),
        ("bend", ctypes.c_double),
        ("doublings", ctypes.c_uint),
        ("halvings", ctypes.c_uint),
        *((name, ctypes.c_size_t) for name in ("steps", "settle", "keep")),
        ("seed", ctypes.c_uint64),
    )


class Library:
    """One build of the core with the harness."""

    def __init__(self, path):
        self.path = path
        self.c = ctypes.CDLL(str(path))
        self.c.harness_run.argtypes = [ctypes.POINTER(Case), *[ctypes.c_void_p] * 6, ctypes.c_size_t, ctypes.c_void_p]
        for name in ("harness_live", "harness_made", "harness_case_bytes"):
            if hasattr(self.c, name):
                getattr(self.c, name).restype = ctypes.c_size_t
        assert self.c.harness_case_bytes() == ctypes.sizeof(Case)

    def run(self, target, x, **named):
        """(status, draws, gradients, facts, state bytes) of a settled and continued chain."""
        case = Case(d=target.dimension, density=ctypes.cast(target._density, ctypes.c_void_p).value,
                    product=ctypes.cast(target._product, ctypes.c_void_p).value, density_context=target._context,
                    product_context=target._context, **named)
        rows, size = ctypes.c_size_t(ROOM if case.settle else case.keep), ctypes.c_size_t()
        x = np.ascontiguousarray(x, dtype=float)
        draws, gradients = np.full((2, rows.value, len(x)), np.nan)
        found, state = np.zeros(rows.value, facts.FACTS), np.zeros(1 << 20, np.uint8)
        outputs = (draws.ctypes.data, gradients.ctypes.data, found.ctypes.data, ctypes.byref(rows), state.ctypes.data)
        status = self.c.harness_run(ctypes.byref(case), x.ctypes.data, *outputs, state.size, ctypes.byref(size))
        n = rows.value
        return status, draws[:n], gradients[:n], found[:n], state[: size.value].tobytes()


def processor_levels():
    """Those of the x86-64 levels "v3" (AVX2) and "v4" (AVX-512) that this processor runs and this compiler knows."""
    cpu = Path("/proc/cpuinfo")
    flags = set(cpu.read_text(encoding="ascii", errors="replace").split()) if cpu.exists() else set()
    needs = {"v3": {"avx2", "fma", "bmi2"}, "v4": {"avx512f", "avx512bw", "avx512cd", "avx512dq", "avx512vl"}}
    return [level for level, need in needs.items() if need <= flags and not compile_(
        "-E", f"-march=x86-64-{level}", "-x", "c", os.devnull, check=False).returncode]


@pytest.fixture(scope="module")
def builds(tmp_path_factory):
    """Shared libraries: "clones" as it ships; without function clones "plain", and for whole processor levels
    "v3" and "v4" where this processor has them; "scalar" without vector types, as compilers other than GCC and clang
    build it; "counted" allocations."""
    folder = tmp_path_factory.mktemp("core")
    shared = ["-shared", "-fPIC", "-fvisibility=hidden", *INCLUDES, *FLOATS]
    options = {
        "clones": ["-O3", *STRICT],
        "plain": ["-O3", "-DFW_NO_CLONES", *STRICT],
        "scalar": ["-O2", "-DFW_NO_CLONES", "-DFW_NO_VECTORS", *STRICT],
        **{level: ["-O3", "-DFW_NO_CLONES", f"-march=x86-64-{level}"] for level in processor_levels()},
        "counted": ["-O0", "-DFW_NO_CLONES", "-DHARNESS_ALLOCATIONS"],
    }

    def build(name):
        out = folder / f"{name}.so"
        if name == "counted":
            # Only the core's own calls are renamed.
            renamed = folder / "renamed"
            renamed.mkdir()
            names = ["-Dcalloc=harness_calloc", "-Dfree=harness_free"]
            objects = [renamed / f"{source.stem}.o" for source in SOURCES]
            for source, to in zip(SOURCES, objects, strict=True):
                compile_("-c", "-fPIC", "-fvisibility=hidden", *INCLUDES, *FLOATS, "-O0", "-DFW_NO_CLONES", *names,
                         source, "-o", to)
            compile_(*shared, *options[name], HARNESS, *objects, "-o", out, "-lm")
        else:
            compile_(*shared, *options[name], HARNESS, *SOURCES, "-o", out, "-lm")
        return Library(out)

    with ThreadPoolExecutor(2) as pool:
        return dict(zip(options, pool.map(build, options), strict=True))


def clones_expected():
    wanted = {"__GNUC__": 12, "__GLIBC__": 2, "__x86_64__": 1}
    done = compile_("-dM", "-E", "-x", "c", "-include", "stdlib.h", os.devnull)
    lines = (line.split(maxsplit=2) for line in done.stdout.splitlines())
    defined = dict(words[1:] for words in lines if len(words) == 3)
    return "__clang__" not in defined and all(int(defined.get(name, 0)) >= least for name, least in wanted.items())


def test_the_builds_that_are_compared_differ(builds):
    """Else the comparison of their bits would be vacuous."""
    code = {name: library.path.read_bytes() for name, library in builds.items()}
    assert b"arch_x86_64_v3" not in code["plain"]
    if clones_expected():
        assert b"fw_dot.arch_x86_64_v3" in code["clones"]


MOTIONS = {
    "leapfrog": {"motion": b"leapfrog"},
    "isokinetic": {"motion": b"isokinetic"},
    "surrogate": {"motion": b"lagrangian", "bend": 0.7},
    "semi-explicit product": {"motion": b"lagrangian", "bend": 0.7, "scheme": 1, "curvature": 2},
    "split difference": {"motion": b"lagrangian", "bend": 0.7, "curvature": 1, "halvings": 2},
}
PATHS = {
    "jittered": {"path": b"jittered", "rank": 0},
    "no-u-turn": {"path": b"no-u-turn", "rank": 3},
    "no-u-turn, metric": {"path": b"no-u-turn", "turn": 1, "rank": 0},
}


def spread_start(d, seed):
    return np.random.default_rng([seed, d]).standard_normal(d)


@pytest.mark.parametrize("path", PATHS)
@pytest.mark.parametrize("motion", MOTIONS)
@pytest.mark.parametrize("d", [1, 3, 8, 13, 64, 250, 1003])
def test_the_same_bytes_with_and_without_clones(builds, d, motion, path):
    """Draws, gradients, facts and exported states of settling, keeping and going on from an exported state."""
    d = max(d, 2) if motion == "isokinetic" else d
    for target in (targets.log_spaced_normal(d, 1e-4, 1e4), targets.student(d, 5.0, 0.3)):
        named = {"steps": 6, "doublings": 5, "settle": 40, "keep": 12, "seed": 19, **MOTIONS[motion], **PATHS[path]}
        results = {name: build.run(target, spread_start(d, 3), **named) for name, build in builds.items()}
        status, draws, gradients, found, state = results["clones"]
        assert status == 0
        assert len(draws) >= named["settle"] + named["keep"]
        assert np.isfinite(draws).all()
        assert len(np.unique(draws[:, 0])) > 10, "the chain hardly moved"
        assert np.array_equal(gradients[-1], target.value_gradient(draws[-1])[1])
        walked = (found["failure"] == 0) & (found["step_size"] > 0)  # a climb that stands on the mode needs no gradient
        assert found["gradients"][walked].min() > 0
        for name, other in results.items():
            assert other[0] == 0
            for a, b in zip((draws, gradients, found), other[1:4], strict=True):
                assert a.tobytes() == b.tobytes(), f"{name} differs"
            assert state == other[4]


# ---- allocation -----------------------------------------------------------------------------------------------------


SMALL = {"steps": 4, "doublings": 4, "settle": 30, "keep": 8, "seed": 5}


@pytest.mark.parametrize("path", PATHS)
@pytest.mark.parametrize("motion", MOTIONS)
def test_every_allocation_may_fail_and_nothing_leaks(builds, motion, path):
    library, target = builds["counted"], targets.student(5, 5.0)
    named = {**SMALL, **MOTIONS[motion], **PATHS[path]}

    def run(n):
        library.c.harness_fail(ctypes.c_size_t(n))
        return library.run(target, spread_start(5, 8), **named)[0]

    assert run(0) == 0
    made = library.c.harness_made()
    assert made == 4, "two chains of two blocks each; a chain allocates nothing once it is made"
    assert library.c.harness_live() == 0
    for n in range(1, made + 1):
        assert run(n) == NO_MEMORY
        assert library.c.harness_live() == 0
    assert run(made + 1) == 0
    assert library.c.harness_live() == 0


def test_a_workspace_beyond_all_memory_is_refused(builds):
    target = targets.standard_normal(4)
    target.dimension = 2**50
    case = {**SMALL, "settle": 0, "keep": 0, **MOTIONS["surrogate"], **PATHS["no-u-turn"]}
    assert builds["counted"].run(target, np.zeros(1), **case)[0] == NO_MEMORY
    target.dimension = 2**62
    assert builds["counted"].run(target, np.zeros(1), **case)[0] == BAD_ARGUMENT
    assert builds["counted"].c.harness_live() == 0


@pytest.mark.parametrize("when", ["start", "later"])
def test_a_caller_who_stops_leaves_nothing_behind(builds, when):
    """The compiled callback returns a negative code at once, or after a while."""
    stop = ctypes.CFUNCTYPE(ctypes.c_int, ctypes.c_size_t, *[ctypes.c_void_p] * 4)
    target, calls = targets.standard_normal(3), []

    @stop
    def density(*words):
        calls.append(words)
        return -7 if when == "start" or len(calls) > 50 else inner(*words)

    inner, target._density = target._density, density
    builds["counted"].c.harness_fail(ctypes.c_size_t(0))
    status = builds["counted"].run(target, np.ones(3), **SMALL, **MOTIONS["leapfrog"], **PATHS["jittered"])[0]
    assert status == CALLBACK_STOP
    assert len(calls) == (1 if when == "start" else 51)
    assert builds["counted"].c.harness_live() == 0


# ---- what the objects hold ------------------------------------------------------------------------------------------


@pytest.mark.skipif(shutil.which("nm") is None, reason="nm is not installed")
def test_the_core_needs_little_of_libc_and_has_no_state_of_its_own(tmp_path):
    """No printing, no exit, no longjmp, no clock; no writable global, no thread-local."""
    libc = "calloc free memcpy memmove memset memcmp strcmp"
    libm = (
        "log log1p log2 exp expm1 exp2 sqrt hypot cbrt pow fmin fmax ldexp scalbn nextafter floor round sincos sin cos "
        "atan atan2 sinh cosh tanh asinh acosh atanh"
    )
    allowed = {*libc.split(), *libm.split()}
    whole = tmp_path / "core.o"
    objects = []
    for source in SOURCES:
        to = tmp_path / f"{source.stem}.o"
        compile_("-c", "-fno-pic", "-O0", "-DFW_NO_CLONES", *INCLUDES, *FLOATS, *STRICT, source, "-o", to)
        objects.append(to)
    compile_("-r", "-nostdlib", "-no-pie", *objects, "-o", whole)
    listed = subprocess.run(["nm", str(whole)], capture_output=True, text=True, check=True).stdout
    symbols = [line.split()[-2:] for line in listed.splitlines() if line]
    needed = {name for kind, name in symbols if kind == "U"} - {"_GLOBAL_OFFSET_TABLE_", "__stack_chk_fail"}
    assert needed <= allowed, f"the core calls {sorted(needed - allowed)}"
    writable = [name for kind, name in symbols if kind in "bBcCdDsS"]
    assert not writable, f"the core keeps state in {writable}"
    exported = {name for kind, name in symbols if kind == "T"}
    assert all(name.startswith("fw_") for name in exported)


def test_random_numbers_without_wide_integers(tmp_path):
    """The way of compilers without 128-bit integers gives the numbers of NumPy's PCG64DXSM too."""
    source = tmp_path / "numbers.c"
    source.write_text(
        '#include <stdio.h>\n#include <stdlib.h>\n#include "stream.h"\n'
        "int main(int n, char **w)\n{\n"
        "    uint64_t a[4];\n    if (n != 5) return 1;\n"
        "    for (int i = 0; i < 4; ++i) a[i] = strtoull(w[i + 1], NULL, 10);\n"
        "    fw_stream s = {a[0], a[1], a[2], a[3], 0, 0};\n"
        '    for (int i = 0; i < 2000; ++i) printf("%llu\\n", (unsigned long long)fw_stream_next(&s));\n'
        "    return 0;\n}\n", encoding="ascii")
    state = np.random.PCG64DXSM(2385).state["state"]
    words = [str(state[key] >> shift & (2**64 - 1)) for key in ("state", "inc") for shift in (0, 64)]
    expected = np.random.PCG64DXSM(2385).random_raw(2000).tolist()
    for name, flags in {"wide": [], "narrow": ["-U__SIZEOF_INT128__"]}.items():
        out = tmp_path / name
        compile_("-O2", *FLOATS, *STRICT, *INCLUDES, *flags, source, "-o", out)
        said = subprocess.run([str(out), *words], capture_output=True, text=True, check=True).stdout
        assert [int(line) for line in said.split()] == expected


@pytest.mark.skipif(shutil.which("g++") is None, reason="g++ is not installed")
@pytest.mark.parametrize("standard", ["c++11", "c++20"])
def test_the_header_is_good_cplusplus(tmp_path, standard):
    source = tmp_path / "use.cpp"
    source.write_text('#include "fellwalk.h"\nint main() { return fw_sentence(FW_OK) == nullptr; }\n')
    done = subprocess.run(["g++", "-fsyntax-only", f"-std={standard}", "-Wall", "-Wextra", "-Wpedantic", "-Werror",
                           *INCLUDES[:1], str(source)], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr


# ---- memory and arithmetic checkers ---------------------------------------------------------------------------------


def program(folder, *flags):
    out = folder / "chains"
    done = compile_("-g", "-O1", *FLOATS, *INCLUDES, "-DFW_NO_CLONES", "-DHARNESS_MAIN", *flags, *SOURCES, HARNESS,
                    WINDOWS, *sorted((ROOT / "tests" / "targets").glob("*.c")), "-o", out, "-lm", check=False)
    return out, done


def ran(words, **environment):
    done = subprocess.run(list(map(str, words)), capture_output=True, text=True, check=False, timeout=250,
                          env={**os.environ, **environment})
    assert done.returncode == 0, done.stdout[-1000:] + done.stderr[-4000:]
    assert done.stdout == "192 chains\n66 windows\n"
    return done


def test_address_and_undefined_behaviour_sanitizers_find_nothing(tmp_path):
    """Chains of every motion, scheme, curvature and path, with and without halving, inside and at an edge; windows of
    as many coordinates as the search for directions treats each in its own way."""
    flags = ["-fsanitize=address,undefined", "-fno-sanitize-recover=all"]
    probe = tmp_path / "probe.c"
    probe.write_text("int main(void) { return 0; }\n")
    # The library of the sanitizers is a package of its own on some systems, and not every kernel lets it run.
    linked = compile_(*flags, probe, "-o", tmp_path / "probe", check=False).returncode == 0
    if not linked or subprocess.run([str(tmp_path / "probe")], capture_output=True, check=False).returncode:
        pytest.skip("this compiler or system does not run programs with -fsanitize=address,undefined")
    out, done = program(tmp_path, *flags)
    assert done.returncode == 0, done.stderr
    assert ran([out]).stderr == ""


@pytest.mark.skipif(shutil.which("valgrind") is None, reason="valgrind is not installed")
def test_valgrind_finds_no_unset_memory_and_no_leak(tmp_path):
    """Unlike the sanitizers it sees branches on numbers that were never written."""
    out, done = program(tmp_path)
    assert done.returncode == 0, done.stderr
    ran(["valgrind", "-q", "--error-exitcode=9", "--leak-check=full", "--errors-for-leak-kinds=all", out])
