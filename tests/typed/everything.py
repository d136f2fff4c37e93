"""A program that uses the whole public interface of fellwalk, for mypy --strict. It is read, not run."""

import ctypes
from collections.abc import Callable, Mapping
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any, assert_type

import numpy as np
from numpy.typing import NDArray

import fellwalk as fw

Array = NDArray[np.float64]


def pair(x: Array) -> tuple[float, Array]:
    return -0.5 * float(x @ x), -x


def fill(x: Array, gradient: Array) -> float:
    np.negative(x, out=gradient)
    return -0.5 * float(x @ x)


def product(x: Array, p: Array) -> Array:
    return -p


def by_name(values: Mapping[str, Array]) -> tuple[float, dict[str, Array]]:
    return -float(values["a"]), {"a": np.ones(()), "b": np.zeros(3)}


def make(scale: float) -> fw.Density:
    return fw.Density(lambda x: (-0.5 * float(x @ x) / scale, -x / scale), 2)


def densities() -> list[fw.Density]:
    parameters = fw.Parameters(
        a=fw.free(), b=fw.positive(3), c=fw.between(0, [1, 2]), d=fw.shares(4), e=fw.increasing(5, above=0.0),
        f=fw.correlation(3),
    )
    assert_type(parameters, fw.Parameters)
    assert_type(parameters.dimension, int)
    assert_type(parameters.names, list[str])
    assert_type(parameters.natural([0.0]), Array)
    assert_type(parameters.free({"a": 1.0, "b": [1.0, 2.0, 3.0]}), Array)
    assert_type(parameters.log_jacobian(np.zeros(3)), Array)
    assert_type(parameters.split(np.zeros(3)), dict[str, Array])
    compiled = (ctypes.py_object(), "capsule, function, user data")  # a scipy.LowLevelCallable is such a tuple
    return [
        fw.Density(pair, 2, hessian_product=product, names=["u", "v"], start=[0.0, 1.0]),
        fw.Density(fill, 2, in_place=True),
        fw.Density(by_name, parameters, by_name=True, start={"a": 0.0, "b": [1.0, 2.0, 3.0]}),
        fw.Density(compiled, 3),
        fw.Density.factory(make, 2.0),
    ]


def guest(density: fw.Density) -> None:
    value, gradient = density([0.1, 0.2])
    assert_type(value, float)
    assert_type(gradient, Array)
    assert_type(density.product([0.1, 0.2], [1.0, 0.0]), Array)
    assert_type(density.gradients, int)
    chain = fw.Chain(
        density, [0.1, 0.2], motion=fw.Lagrangian(bend=0.1, curvature="difference"), path=fw.NoUTurn(doublings=8),
        seed=np.random.SeedSequence(3), settle="auto", acceptance=0.8, scale=[1.0, 2.0], rank=2,
    )
    named = fw.Chain(density, {"a": 1.0}, motion=fw.Leapfrog(halvings=2), path=fw.Jittered(5), step_size=0.1, beta=0.5)
    settling = chain.settle()
    assert_type(settling, fw.Block)
    block = chain.advance(100)
    block = chain.advance(draws=10, gradients=1000, seconds=0.5)
    block = chain.block(10, draws=False, gradients=True)
    assert_type(len(block), int)
    assert_type(block.phase, str)
    assert_type(block.draws, Array)
    assert_type(block.gradients, Array | None)
    assert_type(block.facts, NDArray[np.void])
    assert_type(block.error, BaseException | None)
    index, code, position = block.failures
    assert_type(index, NDArray[np.int64])
    assert_type(code, NDArray[np.int32])
    assert_type(position, Array)
    chain.density_changed()
    chain.density_changed({"a": 1.0})
    chain.interrupt()
    assert_type(chain.position, Array)
    assert_type(chain.gradient, Array)
    assert_type(chain.log_density, float)
    assert_type(chain.step_size, float)
    assert_type(chain.scale, Array)
    assert_type(chain.base_metric, tuple[Array, Array, Array])
    assert_type(chain.counts, dict[str, int])
    assert_type(chain.settled, bool)
    assert_type(chain.phase, str)
    assert_type(chain.density, fw.Density)
    state = chain.state
    assert_type(state, bytes)
    chain.state = memoryview(state)
    again = fw.Chain.from_state(density, bytearray(state))
    part: fw.SettledChain = again.settled_part
    assert_type(part.scale, Array)
    assert_type(part.step_size, float)
    fw.Chain(density, named.position, settled=part)
    path = fw.integrate(density, [0.0, 0.0], [1.0, 0.0], step_size=0.1, steps=8, scale=[1.0, 1.0], trace=True)
    assert_type(path, fw.Trajectory)
    assert_type(path.position, Array)
    assert_type(path.log_ratio, float)
    assert_type(path.sentence, str)
    assert_type(path.trace, dict[str, Array] | None)
    assert_type(fw.kernels.apply([1.0, 2.0], [0.1, 0.2], [1.0, 1.0], sign=-1), Array)
    assert_type(fw.kernels.solve([1.0, 2.0], [0.1, 0.2], [1.0, 1.0], out=np.empty(2)), Array)
    assert_type(fw.kernels.velocity([1.0], [0.1], [1.0]), Array)
    assert_type(fw.kernels.momentum([1.0], [0.1], [1.0]), Array)
    assert_type(fw.kernels.log_determinant([1.0], [0.1]), float)


def whole_run(density: fw.Density) -> None:
    checked = fw.audit(density, [0.1, 0.2], seed=3, value=lambda x: float(x[0]))
    assert_type(checked, fw.Audit)
    assert_type(checked.ok, bool)
    assert_type([finding.text for finding in checked.mistakes], list[str])
    with ThreadPoolExecutor(2) as pool:
        result = fw.run(density, [0.0, 0.5], keep=100, chains=2, seed=7, record=Path("walk.fell"), executor=pool,
                        progress="off", notes={"who": "a reader"})
    fw.run(density, {"a": 1.0}, settled=result, gradients=True)
    fw.run(density, lambda rng: rng.standard_normal(2), settled=result.settled, seconds=1.0)
    result = fw.resume("walk.fell", density, keep=200)
    result = fw.load("walk.fell", salvage=True)
    assert_type(result, fw.Result)
    assert_type(result.draws, Array)
    assert_type(result["a"], Array)
    assert_type(result.gradients, Array | None)
    assert_type(result.facts, NDArray[np.void])
    assert_type(result.settling, list[NDArray[np.void]])
    assert_type(result.names, list[str])
    assert_type(result.seed, int)
    assert_type(result.finished, bool)
    assert_type(result.ended, str)
    assert_type(result.spent, dict[str, float])
    assert_type(result.settled, fw.Settled)
    assert_type(result.settled.hash, str)
    assert_type(result.judgement, fw.Judgement)
    assert_type(result.report("walk.html"), str)
    result.save_npz("walk.npz")
    result.save_csv(Path("walk.csv"))
    result.save_netcdf("walk.nc")
    assert_type(result.estimate("a", quantiles=[0.1]), fw.Estimates)
    assert_type(result.estimate("a", quantiles=[0.1]).estimate, Array)
    judged = result.of(lambda x: x[0] > 1)
    judged = fw.judge(result.draws, result.names, facts=result.facts, spent=result.spent, gradients=result.gradients)
    assert_type(judged, fw.Judgement)
    assert_type(judged.names, tuple[str, ...])
    for numbers in (judged.estimate, judged.error, judged.spread, judged.low, judged.worth, judged.agreement):
        assert_type(numbers, Array)
    assert_type(judged.quantile(0.9), tuple[Array, Array])
    assert_type(judged.verdict.kind, str)
    assert_type(judged.least_worth(), int | None)
    assert_type(str(judged), str)
    assert_type(judged.to_dict(), dict[str, Any])


def tried(density: fw.Density) -> None:
    found = fw.trial(density, [0.1, 0.2], budget=5000, chains=4, seed=2, acceptance=0.8, product_cost=2.0)
    assert_type(found, fw.Trial)
    assert_type(found.winner, str)
    assert_type(found.settled, fw.Settled)
    assert_type(found.positions, Array)
    assert_type(found.reasons, tuple[str, ...])
    assert_type(str(found), str)
    fw.run(density, settled=found)
    fw.run(density, motion="auto")
    fw.run(density, motion=fw.Isokinetic(halvings=1), path=fw.Jittered("auto"), watch=["a"])


def of_other_libraries(f: Callable[[Any], Any]) -> fw.Density:
    assert_type(fw.from_jax(f, 2), fw.Density)
    assert_type(fw.from_torch(f, 2), fw.Density)
    return fw.from_numba(f, 2, in_place=True)


def many(f: Callable[[Array], tuple[Array, Array]]) -> None:
    density = fw.Density(f, 2, batch=True)
    chains = fw.Lockstep(density, np.zeros((8, 2)), seed=1, settle="auto")
    assert_type(chains.settle(), NDArray[np.void])
    assert_type(chains.advance(10), list[fw.Block])
    assert_type(chains.state, bytes)
    assert_type(fw.run(density, [0.0, 0.0], chains=8), fw.Result)


def refused(density: fw.Density) -> str:
    try:
        guest(density)
    except fw.errors.BusyError as error:
        return str(error)
    except (fw.errors.StartError, fw.errors.CallbackStop) as error:
        raise fw.FellwalkError(f"{fw.__version__} of {fw.get_include()}, {fw.get_library()}") from error
    return ""
