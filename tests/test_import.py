"""`import fellwalk` brings in what a chain needs and no more. Its time is measured in benchmarks/import_time.py; here
it is the set of modules that counts, which no load of the machine changes."""

import importlib
import inspect
import json
import subprocess
import sys
import types

import pytest

import fellwalk as fw

# What costs most, or has no part in a chain.
HEAVY = {
    "scipy", "matplotlib", "jinja2", "markupsafe", "cloudpickle", "pandas", "pyarrow", "numba", "jax", "dask", "loky",
    "tqdm", "threadpoolctl", "sqlite3", "email", "argparse", "importlib.metadata", "concurrent.futures", "csv",
    "unittest", "multiprocessing", "asyncio", "http", "Cython", "setuptools",
}  # fmt: skip
EMBEDDING = {
    "fellwalk", "fellwalk._core", "fellwalk.errors", "fellwalk.kernels", "fellwalk.chain", "fellwalk.density",
    "fellwalk.motions", "fellwalk.parameter_kinds", "fellwalk.parameters", "fellwalk.paths", "fellwalk.settings",
    "fellwalk.settled", "fellwalk.watch", "fellwalk.batch",
}  # fmt: skip


def modules_after(program):
    """Modules that a fresh interpreter has after the program, less those that NumPy alone brings in."""
    tail = "\nimport sys, json; print(json.dumps(sorted(sys.modules)))"

    def run(text):
        done = subprocess.run([sys.executable, "-c", text + tail], capture_output=True, text=True, check=True)
        return set(json.loads(done.stdout.splitlines()[-1]))

    return run(program) - run("import numpy, numpy.random")


USE = """
import fellwalk as fw, numpy as np
chain = fw.Chain(fw.Density(lambda x: (-0.5 * float(x @ x), -x), 2), [0.1, 0.2], seed=1)
chain.settle(30); chain.advance(5); fw.Chain.from_state(chain.density, chain.state)
"""


@pytest.mark.parametrize("program", ["import fellwalk", USE], ids=["import", "use of a chain"])
def test_a_chain_needs_few_modules(program):
    found = modules_after(program)
    assert {name for name in found if name.split(".")[0] == "fellwalk"} <= EMBEDDING
    assert {name for name in found if name in HEAVY or name.split(".")[0] in HEAVY} == set()


def test_every_public_name_is_there_and_listed():
    assert set(fw.__all__) <= set(dir(fw))
    for name in fw.__all__:
        assert getattr(fw, name) is not None
    assert "__version__" in dir(fw)
    assert fw.facts.FACTS.names is not None  # modules too
    with pytest.raises(AttributeError, match="no attribute 'runn'"):
        _ = fw.runn


FIRST = ["import fellwalk.run", "import fellwalk.audit", "from fellwalk.judge import judge", "from fellwalk import run"]


@pytest.mark.parametrize("first", FIRST)
def test_functions_are_not_covered_by_the_modules_they_live_in(first):
    """audit, judge and run, whichever import comes first."""
    program = f"{first}\nimport fellwalk as fw\nassert all(map(callable, (fw.audit, fw.judge, fw.run, fw.load)))\n"
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr


def test_names_imported_late_are_those_of_their_modules():
    for name in ("audit", "judge", "run"):
        module = importlib.import_module(f"fellwalk.{name}")
        assert isinstance(module, types.ModuleType)
        assert inspect.isfunction(getattr(fw, name))
        assert getattr(fw, name) is getattr(module, name)
