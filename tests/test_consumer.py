"""fellwalk from C and Cython: the consumer against the fellwalk that runs here, a plain C program against the core
alone, and core.pxd against its frozen copy and against the header. The consumer of an installed wheel is in
test_packaging.py.
"""

import os
import re
import shutil
import sys
from pathlib import Path

import consumers
import pytest
from consumers import CONSUMER
from targets import _build

import fellwalk as fw

ROOT = Path(__file__).resolve().parents[1]
SOURCES = sorted((ROOT / "csrc" / "src").glob("*.c"))
CORE_FLAGS = ["-g", "-O1", "-DFW_NO_CLONES", f"-I{ROOT / 'csrc' / 'include'}", f"-I{ROOT / 'csrc' / 'src'}"]

needs_sources = pytest.mark.skipif(not SOURCES, reason="the sources of the core are not beside the tests")


def test_a_consumer_of_the_fellwalk_that_runs_here(tmp_path):
    """Against an editable checkout where fellwalk is one (as .ci/run has it in its second pass), else as installed."""
    package = Path(fw.__file__).resolve().parent
    found = consumers.built_and_compared(sys.executable, tmp_path, PYTHONPATH=os.environ.get("PYTHONPATH", ""))
    assert Path(found["fellwalk"]).parent == package
    editable = package == ROOT / "python" / "fellwalk"
    assert Path(found["include"]) == (ROOT / "csrc" / "include" if editable else package / "include")
    assert Path(found["library"]) == package / "lib"


# ---- plain C --------------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def own(tmp_path_factory):
    """The plain program with the core compiled from its sources, without function clones."""
    return consumers.plain_program(tmp_path_factory.mktemp("own"), *SOURCES, *CORE_FLAGS)


@needs_sources
def test_a_plain_c_program_samples_with_the_core_alone(own, tmp_path):
    """It judges its means itself. The same bits from the sources as from the library shipped."""
    shipped = consumers.plain_program(tmp_path, f"-I{fw.get_include()}", f"-L{fw.get_library()}", "-lfellwalk")
    said = consumers.run([own], tmp_path)
    assert len(said.splitlines()) == 9
    assert consumers.run([shipped], tmp_path) == said


@needs_sources
@pytest.mark.skipif(shutil.which("valgrind") is None, reason="valgrind is not installed, so memory is not checked")
def test_valgrind_finds_nothing_in_the_plain_c_program(own, tmp_path):
    watched = ["valgrind", "-q", "--error-exitcode=9", "--leak-check=full", "--errors-for-leak-kinds=all", own]
    assert consumers.run(watched, tmp_path) == consumers.run([own], tmp_path)


# ---- frozen signatures ----------------------------------------------------------------------------------------------


def declarations(text):
    """{name: declaration} of a .pxd: functions and function types, members of structs and of enums in their order."""
    text = re.sub(r"#.*", "", text)
    text = re.sub(r",\s*\n\s*", ", ", text)
    found, kind, unnamed = {}, None, 0
    for line in text.splitlines():
        words = " ".join(line.split())
        depth = len(line) - len(line.lstrip())
        if not words or words.startswith(("from ", "cdef extern", "pass")):
            continue
        if words.endswith(":"):
            kind = re.sub(r"^ctypedef ", "", words[:-1])
            if kind == "enum":
                unnamed += 1
                kind = f"enum {unnamed}"
            found[kind] = []
        elif depth > 4:
            found[kind].append(words)
        else:
            name = re.search(r"\(\*(\w+)\)|(\w+)\(", words)
            found[name[1] or name[2]] = words
    return found


def here():
    return declarations((Path(fw.__file__).parent / "core.pxd").read_text(encoding="utf-8"))


def frozen():
    return declarations((CONSUMER / "frozen.pxd").read_text(encoding="utf-8"))


def test_the_reader_of_declarations_reads_them():
    found = here()
    assert found["fw_chain_free"] == "void fw_chain_free(fw_chain *chain)"
    assert found["fw_density"].startswith("ctypedef int (*fw_density)(size_t d, const double *x,")
    assert "const double *lambda_" in found["fw_chain_set_base"]
    assert found["struct fw_random"][0].startswith("void (*normals)")
    assert found["enum fw_turn"] == ["FW_TURN_BASE", "FW_TURN_METRIC"]
    assert len(found) > 45


def test_what_was_frozen_stands_as_it_was():
    """Programs are written against these: nothing goes, nothing changes. New functions and types may come, and new
    members of structs and enums at their ends."""
    found = here()
    for name, stored in frozen().items():
        assert name in found, f"{name} is gone from core.pxd, where it was promised to stay"
        if isinstance(stored, list):
            assert found[name][: len(stored)] == stored, f"{name} has lost members or changed their order"
        else:
            assert found[name] == stored, f"{name} is not as it was promised to stay"


def test_what_is_new_is_frozen_too():
    new = {name: text for name, text in here().items() if frozen().get(name) != text}
    assert not new, f"add to tests/consumer/frozen.pxd, and they are promised from then on: {new}"


def as_c(found):
    """A C file in which each declaration of core.pxd meets the header's: the compiler objects where they differ."""
    lines = ['#include "fellwalk.h"', "#define SAME(a, b) _Static_assert(__builtin_types_compatible_p(a, b), #b)"]
    for name, text in found.items():
        if isinstance(text, list):
            kind, _, title = name.partition(" ")
            if kind == "enum":
                lines += [f"enum {{ check_{value} = {value} }};" for value in text]
            for member in text if kind == "struct" else []:
                declared = re.sub(r" noexcept$", "", member)
                field = re.search(r"\(\*(\w+)\)|(\w+)$", declared)
                field = field[1] or field[2]
                mine = re.sub(rf"\b{field}\b(?=\)|$)", f"{title}_{field}", declared, count=1)
                lines.append(f"typedef {mine};")
                lines.append(f"SAME({title}_{field}, __typeof__((({title} *)0)->{field}));")
        else:
            declared = re.sub(r"^ctypedef | noexcept$", "", text)
            mine = re.sub(rf"\b{name}\(", f"check_{name}(", declared).replace(f"(*{name})", f"(*check_{name})")
            lines.append(f"typedef {mine};")
            lines.append(f"SAME(check_{name}, __typeof__({name}));")
    return "\n".join(lines) + "\n"


@needs_sources
@pytest.mark.parametrize("spoiled", [False, True])
def test_core_pxd_says_what_the_header_says(tmp_path, spoiled):
    """Types of every function and member, by the compiler. With one type spoiled the compiler must object."""
    text = as_c(here())
    if spoiled:
        assert text.count("typedef size_t fw_chain_base(") == 0
        text, count = re.subn(r"typedef size_t check_fw_chain_base\(", "typedef int check_fw_chain_base(", text)
        assert count == 1
    source = tmp_path / "check.c"
    source.write_text(text, encoding="ascii")
    words = [*_build.compiler(), "-std=c11", "-fsyntax-only", f"-I{fw.get_include()}", source]
    if spoiled:
        with pytest.raises(AssertionError, match="fw_chain_base"):
            consumers.run(words, tmp_path)
    else:
        consumers.run(words, tmp_path)


def test_every_public_function_can_be_cimported():
    header = (Path(fw.get_include()) / "fellwalk.h").read_text(encoding="utf-8")
    public = set(re.findall(r"^FW_API [^;]*?\b(fw_\w+)\(", header, flags=re.MULTILINE))
    assert len(public) > 30
    assert public <= set(here())
