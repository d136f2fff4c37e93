"""What is shipped: the source archive builds alone, and the wheel made from it holds what it should and nothing else.

The archives are made from a copy of the tree, so nothing that happens to lie in the tree's build folders can help.
"""

import email
import importlib.metadata
import json
import os
import shutil
import subprocess
import sys
import tarfile
import tomllib
import venv
import zipfile
from importlib.resources import files
from pathlib import Path, PurePosixPath

import consumers
import numpy
import pytest

import fellwalk

TREE = Path(__file__).resolve().parents[1]
COMPILED_SUFFIXES = (".so", ".pyd", ".a", ".lib")
LEFT_OUT = (".*", "build", "dist", "venv", "*.egg-info", "__pycache__", "*.pyc", "*.fell*",
            *(f"*{suffix}" for suffix in COMPILED_SUFFIXES))


def project():
    return tomllib.loads((TREE / "pyproject.toml").read_text(encoding="utf-8"))["project"]


def shipped_sources(*folders):
    """Paths below the named folders of the tree, without what a build leaves there."""
    found = set()
    for folder in folders:
        for path in (TREE / folder).rglob("*"):
            relative = path.relative_to(TREE)
            unwanted = any(part.match(pattern) for part in map(PurePosixPath, relative.parts) for pattern in LEFT_OUT)
            if path.is_file() and not unwanted:
                found.add(relative.as_posix())
    return found


def build(hook, folder, target):
    """Runs one build hook of the standard build interface in a fresh interpreter; the path of the archive it made."""
    command = f"from setuptools import build_meta; print(build_meta.{hook}({str(target)!r}))"
    environment = {key: value for key, value in os.environ.items() if key != "PYTHONPATH"}
    run = subprocess.run([sys.executable, "-c", command], cwd=folder, env=environment, capture_output=True, text=True)
    assert run.returncode == 0, f"{hook} failed:\n{run.stdout[-4000:]}\n{run.stderr[-4000:]}"
    return target / run.stdout.split()[-1]


@pytest.fixture(scope="module")
def sdist(tmp_path_factory):
    place = tmp_path_factory.mktemp("sdist")
    shutil.copytree(TREE, place / "tree", ignore=shutil.ignore_patterns(*LEFT_OUT))
    return build("build_sdist", place / "tree", place)


@pytest.fixture(scope="module")
def wheel(sdist, tmp_path_factory):
    place = tmp_path_factory.mktemp("wheel")
    with tarfile.open(sdist) as archive:
        # An attribute, because extractall has no filter= argument before Python 3.11.4 (Debian 12 has 3.11.2).
        archive.extraction_filter = getattr(tarfile, "data_filter", None)
        archive.extractall(place)
    return build("build_wheel", place / sdist.name.removesuffix(".tar.gz"), place)


@pytest.fixture(scope="module")
def unpacked(wheel, tmp_path_factory):
    """The wheel's content in a folder that can stand on the module path, which is what installing it amounts to."""
    place = tmp_path_factory.mktemp("site")
    with zipfile.ZipFile(wheel) as archive:
        archive.extractall(place)
    return place


@pytest.fixture(scope="module")
def fresh(wheel, tmp_path_factory):
    """The interpreter of a new environment in which pip has installed the wheel. NumPy and the build tools are those of
    the environment of the tests, behind everything of its own, so that nothing need be downloaded."""
    folder = tmp_path_factory.mktemp("fresh") / "venv"
    venv.EnvBuilder(with_pip=False, symlinks=os.name != "nt").create(folder)
    python = folder / ("Scripts/python.exe" if os.name == "nt" else "bin/python")
    said = consumers.run([python, "-c", "import sysconfig; print(sysconfig.get_path('purelib'))"], folder)
    (Path(said.strip()) / "tools.pth").write_text(f"{Path(numpy.__file__).parents[1]}\n", encoding="utf-8")
    pip = [sys.executable, "-m", "pip", "-q", "--disable-pip-version-check", "--python", python]
    consumers.run([*pip, "install", "--no-index", "--no-deps", "--force-reinstall", wheel], folder)
    return python


def test_sdist_holds_every_source_and_the_tests(sdist):
    with tarfile.open(sdist) as archive:
        names = {name.partition("/")[2] for name in archive.getnames()}
    expected = shipped_sources("csrc", "python", "tests") | {"pyproject.toml", "setup.py", "README.md", "LICENSE"}
    assert expected - names == set()
    assert [name for name in names if name.endswith((*COMPILED_SUFFIXES, ".pyc", ".o", ".fell"))] == []


@pytest.mark.slow
def test_wheel_holds_modules_stubs_data_and_headers_only(wheel):
    with zipfile.ZipFile(wheel) as archive:
        names = {name for name in archive.namelist() if ".dist-info/" not in name}
    # Everything in the package but what only the build reads; a data file not declared in pyproject.toml fails here.
    package = {
        name.removeprefix("python/") for name in shipped_sources("python") if not name.endswith((".pyx", ".pxi"))
    }
    headers = {f"fellwalk/include/{path.name}" for path in (TREE / "csrc/include").glob("*.h")}
    compiled = {name for name in names if name.endswith(COMPILED_SUFFIXES)}
    assert names - compiled == package | headers
    stems = sorted(PurePosixPath(name).name.split(".")[0] for name in compiled)
    assert [stem.removeprefix("lib") for stem in stems] == ["_core", "fellwalk"]
    assert not [name for name in names if name.endswith((".pyx", ".pxi", ".c")) or "tests/" in name or "/test_" in name]


@pytest.mark.slow
def test_wheel_metadata(wheel):
    with zipfile.ZipFile(wheel) as archive:
        (folder,) = {name.split("/")[0] for name in archive.namelist() if ".dist-info/" in name}
        metadata = email.message_from_bytes(archive.read(f"{folder}/METADATA"))
        entry_points = archive.read(f"{folder}/entry_points.txt").decode()
        licence = archive.read(f"{folder}/licenses/LICENSE").decode()
    assert metadata["Version"] == project()["version"]
    assert metadata["License-Expression"] == "BSD-3-Clause"
    assert metadata["Requires-Python"] == ">=3.11"
    assert "fellwalk = fellwalk.cli:main" in entry_points
    assert "The fellwalk authors" in licence


@pytest.mark.slow
def test_wheel_works_alone(unpacked, tmp_path):
    """From another folder, with only the wheel's content: it imports, computes, and knows its version and headers."""
    program = (
        "import json, fellwalk\n"
        "from fellwalk.demo import hives\n"
        "value, gradient = hives.value_gradient(hives.start)\n"
        "print(json.dumps([fellwalk.__file__, fellwalk._core.__file__, fellwalk.__version__,"
        " fellwalk.get_include(), value]))\n"
    )
    environment = {**os.environ, "PYTHONPATH": str(unpacked)}
    run = subprocess.run([sys.executable, "-c", program], cwd=tmp_path, env=environment, capture_output=True, text=True)
    assert run.returncode == 0, run.stderr
    module, core, version, include, value = json.loads(run.stdout)
    assert Path(module).is_relative_to(unpacked)
    assert Path(core).is_relative_to(unpacked)
    assert version == project()["version"]
    assert Path(include).is_relative_to(unpacked)
    assert (Path(include) / "fellwalk.h").read_bytes() == (TREE / "csrc/include/fellwalk.h").read_bytes()
    assert value < 0


def test_version_has_one_source():
    assert fellwalk.__version__ == importlib.metadata.version("fellwalk") == project()["version"]


def test_headers_and_type_marker_are_found_where_the_package_is_installed():
    header = Path(fellwalk.get_include()) / "fellwalk.h"
    assert "fw_" in header.read_text(encoding="utf-8")
    assert files("fellwalk").joinpath("py.typed").is_file()
    assert files("fellwalk").joinpath("_core.pyi").is_file()


def test_the_extra_for_people_at_a_terminal_stays_light():
    extras = project()["optional-dependencies"]
    assert set(extras) == {"report", "test", "bench", "cluster", "jax", "torch", "numba", "all"}
    wanted = {requirement.split(">=")[0].split("[")[0] for requirement in extras["all"] + extras["report"]}
    assert wanted == {"fellwalk", "tqdm", "matplotlib", "Jinja2", "loky", "threadpoolctl"}


@pytest.mark.slow
def test_a_consumer_in_c_and_cython_of_the_installed_wheel(fresh, tmp_path):
    """tests/consumer, built by its own setup.py in the fresh environment: the draws of its chain in C are those of the
    Python route, bit for bit; and the plain C program is linked with the library of the wheel."""
    found = consumers.built_and_compared(fresh, tmp_path)
    package = Path(found["fellwalk"]).parent
    assert package.is_relative_to(fresh.parents[1])
    assert Path(found["include"]) == package / "include"
    assert Path(found["library"]) == package / "lib"
    words = [f"-I{found['include']}", f"-L{found['library']}", "-lfellwalk"]
    assert len(consumers.run([consumers.plain_program(tmp_path, *words)], tmp_path).splitlines()) == 9
