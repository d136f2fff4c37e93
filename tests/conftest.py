"""Hypothesis profiles: "quick" by default, the same examples every time; "long" searches at random and for longer.

``python -m pytest --hypothesis-profile=long`` asks for the second.

The files with tests of JAX come last, as they leave it in the process, where nothing may fork any more: tests that do
so ask for `forks`.
"""

import sys

import pytest
from hypothesis import settings

settings.register_profile("quick", derandomize=True, deadline=None, max_examples=50, database=None)
settings.register_profile("long", deadline=None, max_examples=2000, print_blob=True)
settings.load_profile("quick")


def pytest_collection_modifyitems(items):
    items.sort(key=lambda item: item.path.name in ("test_adapters.py", "test_examples.py"))


@pytest.fixture
def forks():
    """For tests that fork this process: they cannot run where another test has left JAX."""
    if "jax" in sys.modules:
        pytest.skip("JAX was imported by a test before, and processes with it must not fork")
