"""Builds the compiled core; everything that is not about compiling is in pyproject.toml."""

import shutil
from pathlib import Path

import numpy
from Cython.Build import cythonize
from setuptools import Extension, setup
from setuptools.command.build_ext import build_ext
from setuptools.command.build_py import build_py
from setuptools.command.sdist import sdist
from setuptools.modified import newer_group

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
# cl has no function clones and no vector types: kernels.c then runs its portable loops, operations in the same order.
MSVC_FLAGS = ["/std:c11", "/O2", "/fp:precise"]


def listed(folder: Path, pattern: str) -> list[str]:
    """Paths below a folder that match a pattern, sorted so that builds are repeatable."""
    return sorted(path.as_posix() for path in folder.glob(pattern))


class BuildExtension(build_ext):
    """Chooses the flags once the compiler is known, and makes the core a static library: the extension is linked with
    it, and it is shipped beside the headers for programs in C and Cython."""

    def build_extensions(self) -> None:
        msvc = self.compiler.compiler_type == "msvc"
        flags = MSVC_FLAGS if msvc else UNIX_FLAGS
        library = self._core(flags)
        for extension in self.extensions:
            extension.extra_compile_args = flags
            extension.extra_objects = [str(library)]
            extension.depends.append(str(library))
            extension.libraries = ["npyrandom"] if msvc else ["npyrandom", "m"]
        super().build_extensions()

    def _library(self) -> Path:
        return Path(self.build_lib) / "fellwalk" / "lib" / self.compiler.library_filename("fellwalk")

    def _core(self, flags: list[str]) -> Path:
        library = self._library()
        sources = listed(SOURCES, "*.c")
        inputs = [*sources, *listed(SOURCES, "*.h"), *listed(HEADERS, "*.h"), "setup.py"]
        if self.force or newer_group(inputs, str(library)):
            library.unlink(missing_ok=True)
            objects = self.compiler.compile(
                sources, output_dir=self.build_temp, include_dirs=[str(HEADERS), str(SOURCES)], extra_preargs=flags
            )
            self.compiler.create_static_lib(objects, "fellwalk", output_dir=str(library.parent))
        return library

    def copy_extensions_to_source(self) -> None:
        super().copy_extensions_to_source()
        (PACKAGE / "lib").mkdir(exist_ok=True)
        shutil.copy2(self._library(), PACKAGE / "lib")

    def get_outputs(self) -> list[str]:
        library = [] if self.inplace else [str(path) for path in Path(self.build_lib).glob("fellwalk/lib/*")]
        return [*super().get_outputs(), *library]


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
    sources=[(PACKAGE / "_core.pyx").as_posix()],
    include_dirs=[HEADERS.as_posix(), SOURCES.as_posix(), numpy.get_include()],
    library_dirs=[str(numpy_random)],
    depends=[
        *listed(PACKAGE, "*.pyx"),
        *listed(PACKAGE, "*.pxd"),
        *listed(PACKAGE, "*.pxi"),
        *listed(HEADERS, "*.h"),
        *listed(SOURCES, "*.[ch]"),
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
