"""The same chain three ways, bit for bit: without Python, a compiled density in `fellwalk.Chain`, a Python function in
`fellwalk.Chain`. Prints where fellwalk was found, as JSON."""

import json

import numpy as np
import walker
from scipy import LowLevelCallable

import fellwalk as fw

SEED, SETTLE, KEEP = 2385, 300, 400


def python_route(density, start):
    chain = fw.Chain(density, start, seed=SEED, settle=SETTLE)
    chain.block(SETTLE)
    assert chain.settled
    block = chain.advance(KEEP)
    return block.draws, block.facts["log_density"], chain.state


for which in ("bent", "linked"):
    start = np.array([0.731, -0.468, 1.117, 0.292])
    compiled = fw.Density(LowLevelCallable.from_cython(walker, which), 4)
    plan = fw.Chain(compiled, start, settle=SETTLE).settings.core()
    draws, values, state = walker.walk(which, SEED, start, plan, KEEP)
    assert len(np.unique(draws[:, 0])) > KEEP / 2, "the chain hardly moved"
    plain = fw.Density(lambda x, which=which: walker.evaluate(which, x), 4)
    assert compiled.compiled
    assert not plain.compiled
    for density in (compiled, plain):
        found = python_route(density, start)
        assert found[0].tobytes() == draws.tobytes(), f"{which}: other draws than {density}"
        assert found[1].tobytes() == values.tobytes()
        assert state in found[2], "the state of the core is not inside that of the chain"
print(json.dumps({"fellwalk": fw.__file__, "include": fw.get_include(), "library": fw.get_library()}))
