"""Builds the compiled core; everything that is not about compiling is in pyproject.toml."""

import shutil
from pathlib import Path

import numpy
from Cython.Build import cythonize
from setuptools import Extension, setup
from setuptools.command.build_ext import build_ext
from setuptools.command.build_py import build_py
from setuptools.command.sdist import sdist

# setuptools wants paths relative to this file, with forward slashes, and runs with this folder as the current one.
PACKAGE = Path("python/fellwalk")
HEADERS = Path("csrc/include")
SOURCES = Path("csrc/src")

# No contraction and no fast-math: draws must have the same bits on every CPU of a kind. Errno and traps are never read.
UNIX_FLAGS = [
    "-std=c11",
    "-O3",
    "-g0",
    "-ffp-contract=off",
    "-fno-math-errno",
    "-fno-trapping-math",
    "-fvisibility=hidden",
]
MSVC_FLAGS = ["/std:c11", "/O2", "/fp:precise"]


def listed(folder: Path, pattern: str) -> list[str]:
    """Paths below a folder that match a pattern, sorted so that builds are repeatable."""
    return sorted(path.as_posix() for path in folder.glob(pattern))


class BuildExtension(build_ext):
    """Chooses the flags once the compiler is known."""

    def build_extensions(self) -> None:
        msvc = self.compiler.compiler_type == "msvc"
        for extension in self.extensions:
            extension.extra_compile_args = MSVC_FLAGS if msvc else UNIX_FLAGS
            extension.libraries = ["npyrandom"] if msvc else ["npyrandom", "m"]
        super().build_extensions()


class BuildPackage(build_py):
    """Copies the public headers beside the modules; an editable install reads them in place instead."""

    def _headers(self) -> list[tuple[str, str]]:
        target = Path(self.build_lib) / "fellwalk" / "include"
        return [(header, str(target / Path(header).name)) for header in listed(HEADERS, "*.h")]

    def run(self) -> None:
        super().run()
        if not self.editable_mode:
            for source, target in self._headers():
                Path(target).parent.mkdir(parents=True, exist_ok=True)
                shutil.copyfile(source, target)

    def get_outputs(self, include_bytecode: bool = True) -> list[str]:
        outputs = super().get_outputs(include_bytecode)
        if self.editable_mode:
            return outputs
        return outputs + [target for _, target in self._headers()]


class SourceArchive(sdist):
    """Adds the tests with their data: setuptools alone takes only tests/test*.py, which cannot run without the rest."""

    def make_distribution(self) -> None:
        for folder in ("tests", "benchmarks"):
            if Path(folder).is_dir():
                self.filelist.graft(folder)
        self.filelist.global_exclude("*.py[cod]")
        self.filelist.remove_duplicates()
        super().make_distribution()


numpy_random = Path(numpy.__file__).parent / "random" / "lib"
core = Extension(
    "fellwalk._core",
    sources=[(PACKAGE / "_core.pyx").as_posix(), *listed(SOURCES, "*.c")],
    include_dirs=[HEADERS.as_posix(), SOURCES.as_posix(), numpy.get_include()],
    library_dirs=[str(numpy_random)],
    depends=[
        *listed(PACKAGE, "*.pyx"),
        *listed(PACKAGE, "*.pxd"),
        *listed(PACKAGE, "*.pxi"),
        *listed(HEADERS, "*.h"),
        *listed(SOURCES, "*.h"),
    ],
)

setup(
    ext_modules=cythonize(
        [core],
        build_dir="build/cython",
        include_path=["python"],
        compiler_directives={"language_level": 3},
    ),
    cmdclass={"build_ext": BuildExtension, "build_py": BuildPackage, "sdist": SourceArchive},
)
