"""What does a call of the density cost in each language it can be written in?

A standard normal with its gradient through a chain (leapfrog, jittered paths), all included, and through a Hessian
product. Libraries that are not installed are left out. JAX works in threads of its own, so the processor time of the
whole process is taken.

    python benchmarks/call_time.py [--quick]
"""

import importlib.util
import sys
import time
from collections.abc import Callable

import numpy as np
from common import busy, interleaved, machine, table, targets

import fellwalk as fw

QUICK = "--quick" in sys.argv


def normal_filled(x, gradient):
    total = 0.0
    for i in range(x.size):
        gradient[i] = -x[i]
        total -= 0.5 * x[i] * x[i]
    return total


def normal_pair(x):
    return -0.5 * (x * x).sum(), -x


def minus(x, p):
    return -p


def minus_filled(x, p, product):
    for i in range(x.size):
        product[i] = -p[i]


def in_jax(d: int) -> fw.Density:
    import jax

    jax.config.update("jax_enable_x64", True)
    return fw.from_jax(lambda x: -0.5 * (x * x).sum(), d)


def in_torch(d: int) -> fw.Density:
    import torch

    torch.set_num_threads(1)
    return fw.from_torch(lambda x: -0.5 * (x * x).sum(), d)


def in_c(d: int) -> fw.Density:
    target = targets.standard_normal(d)
    return fw.Density(target.density, d, hessian_product=target.hessian_product)


def densities(d: int) -> dict[str, fw.Density]:
    """By name, those whose library is here."""
    makers: dict[str, tuple[str, Callable[[], fw.Density]]] = {
        "NumPy": ("numpy", lambda: fw.Density(normal_pair, d, hessian_product=minus)),
        "C": ("numpy", lambda: in_c(d)),
        "Numba, in place": ("numba", lambda: fw.from_numba(normal_filled, d, in_place=True,
                                                           hessian_product=minus_filled)),
        "Numba, new array": ("numba", lambda: fw.from_numba(normal_pair, d, hessian_product=minus)),
        "JAX": ("jax", lambda: in_jax(d)),
        "PyTorch": ("torch", lambda: in_torch(d)),
    }
    return {name: make() for name, (library, make) in makers.items() if importlib.util.find_spec(library)}


def timer(work: Callable[[int], int], seconds: float) -> Callable[[], float]:
    """Times work(n), which makes n or more calls and says how many, and gives the seconds a call."""
    def timed(n: int) -> tuple[float, int]:
        start = time.process_time()
        calls = work(n)
        return time.process_time() - start, calls

    spent, calls = timed(50)
    n = max(20, int(calls * seconds / max(spent, 1e-6)))

    def once() -> float:
        spent, calls = timed(n)
        return spent / calls

    return once


def gradients(density: fw.Density) -> Callable[[int], int]:
    d = density.dimension
    chain = fw.Chain(density, np.full(d, 0.3), path=fw.Jittered(16), seed=1, step_size=0.3 * d**-0.25)

    def work(n: int) -> int:
        before = density.gradients
        chain.advance(max(1, round(n / 8.5)))
        return density.gradients - before

    return work


def products(density: fw.Density) -> Callable[[int], int]:
    x, v = np.full(density.dimension, 0.3), np.ones(density.dimension)
    motion = fw.Lagrangian(curvature="product")

    def work(n: int) -> int:  # a step takes a gradient and two products; the gradients are taken off below
        found = fw.integrate(density, x, v, motion=motion, step_size=1e-4, steps=max(1, n // 2), beta=1e-3)
        return found.products

    return work


def main() -> None:
    seconds, repeats = (0.05, 3) if QUICK else (0.4, 7)
    before = busy()
    rows = []
    for d in (10, 1000):
        made = densities(d)
        works = {f"g {name}": timer(gradients(density), seconds) for name, density in made.items()}
        works |= {f"p {name}": timer(products(density), seconds) for name, density in made.items()}
        found = interleaved(works, repeats)
        numpy_time = found["g NumPy"]
        for name in made:
            g, p = found[f"g {name}"], found[f"p {name}"]
            product = np.median(np.maximum(p - 0.5 * g, 0.0))
            rows.append([name, str(d), f"{1e6 * np.median(g):.3g} us", f"{np.median(g / numpy_time):.3g}",
                         f"{1e6 * product:.3g} us"])
    print(machine())
    print(f"Processor time, medians of {repeats} interleaved repeats; {before} before, {busy()} after.\n")
    print(table(["density", "d", "a gradient", "of NumPy's", "a Hessian product"], rows))


if __name__ == "__main__":
    main()
