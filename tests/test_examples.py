"""The examples of the README on writing a density: each runs as it stands, passes the audit, and they agree."""

import importlib
import sys
from functools import cache
from pathlib import Path

import numpy as np
import pytest
import stat_checks
from scipy.integrate import quad

import fellwalk as fw

HERE = Path(__file__).resolve().parent / "examples"
POINTS = [[0.0, 3.0, 1.0], [2.3, 3.1, 0.7], [-4.0, 1.5, 5.0]]


@cache
def growth_mean():
    """Posterior mean of growth: given the noise all is normal (linear algebra); the noise by quadrature."""
    days = np.array([2.0, 3.0, 5.0, 6.0, 8.0, 9.0, 11.0, 12.0])
    height = np.array([9.1, 12.7, 17.9, 22.4, 27.3, 31.9, 36.2, 41.0])
    design, prior = np.column_stack([np.ones(8), days]), np.diag([1 / 100, 1 / 25])

    def parts(noise):
        precision = design.T @ design / noise**2 + prior
        mean = np.linalg.solve(precision, design.T @ height / noise**2)
        miss = height - design @ mean
        log_weight = (-8 * np.log(noise) - 0.5 * np.linalg.slogdet(precision)[1] - 0.5 * miss @ miss / noise**2
                      - 0.5 * mean @ prior @ mean - 0.5 * (noise / 2) ** 2)
        return np.exp(log_weight), mean[1]

    above = quad(lambda s: np.prod(parts(s)), 0.05, 12, epsabs=0, epsrel=1e-9, limit=200)[0]
    return above / quad(lambda s: parts(s)[0], 0.05, 12, epsabs=0, epsrel=1e-9, limit=200)[0]


@pytest.fixture(scope="module")
def built(tmp_path_factory):
    """The Cython example compiled as its text says."""
    from Cython.Build import cythonize
    from setuptools import Distribution
    from setuptools.command.build_ext import build_ext

    place = tmp_path_factory.mktemp("cython")
    (place / "seedlings_cython.pyx").write_text((HERE / "seedlings_cython.pyx").read_text())
    command = build_ext(Distribution({"ext_modules": cythonize([str(place / "seedlings_cython.pyx")], quiet=True)}))
    command.build_lib, command.build_temp = str(place), str(place / "temp")
    command.ensure_finalized()
    command.run()
    return place


@pytest.fixture
def load(monkeypatch):
    def find(name):
        monkeypatch.syspath_prepend(HERE)
        return importlib.import_module(name).density

    yield find
    for name in [name for name in sys.modules if name.startswith("seedlings")]:
        del sys.modules[name]


def check(density, plain):
    for x in POINTS:
        y = plain.parameters.free(x)
        value, gradient = density(y)
        expected, slope = plain(y)
        # eight terms of at most some hundreds, summed in another order
        assert value == pytest.approx(expected, rel=1e-13)
        np.testing.assert_allclose(gradient, slope, rtol=1e-12)
    found = fw.audit(density)
    assert found.ok, str(found)
    result = fw.run(density, keep=1000, chains=2, seed=4, progress="off")
    stat_checks.assert_all([stat_checks.compare_mean(result["growth"], growth_mean(), what="growth")], 1e-6)


def test_numpy(load):
    check(load("seedlings_numpy"), load("seedlings_numpy"))


def test_numba(load):
    density = load("seedlings_numba")
    assert density.compiled
    check(density, load("seedlings_numpy"))


def test_cython(load, built, monkeypatch):
    monkeypatch.syspath_prepend(built)
    density = load("seedlings_cython_density")
    assert density.compiled
    check(density, load("seedlings_numpy"))


def test_jax(load):
    pytest.importorskip("jax", reason="JAX is not installed")
    density = load("seedlings_jax")
    plain = load("seedlings_numpy")
    check(density, plain)
    y, p = plain.parameters.free(POINTS[1]), np.array([0.3, -1.1, 0.7])
    h = 1e-5  # error of central differences: h^2 and eps / h times values of some hundreds
    change = (plain(y + h * p)[1] - plain(y - h * p)[1]) / (2 * h)
    np.testing.assert_allclose(density.product(y, p), change, rtol=1e-6)
