"""Builds the consumer against the fellwalk that this interpreter imports; nothing else of fellwalk's tree is used."""

import os
from pathlib import Path

import numpy
from Cython.Build import cythonize
from setuptools import Extension, setup

import fellwalk

numpy_random = Path(numpy.__file__).parent / "random" / "lib"
walker = Extension(
    "walker",
    sources=["walker.pyx", "ridge.c"],
    include_dirs=[".", fellwalk.get_include(), numpy.get_include()],
    library_dirs=[fellwalk.get_library(), str(numpy_random)],
    libraries=["fellwalk", "npyrandom"],
    extra_compile_args=[] if os.name == "nt" else ["-O1"],  # quick to compile
)
setup(name="walker", version="1", ext_modules=cythonize([walker], language_level=3))
