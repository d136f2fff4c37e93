"""Mistakes that mypy must see in a program that uses fellwalk; each marked line is one. It is read, not run."""

import numpy as np

import fellwalk as fw

density = fw.Density(lambda x: (0.0, x), "three")  # mistake
density = fw.Density(lambda x: (0.0, x), 3, inplace=True)  # mistake
chain = fw.Chain(density, [0.0], motion="leapfrog")  # mistake
chain.advance("many")  # mistake
chain.advance(gradient=10)  # mistake
chain.step_size = 0.5  # mistake
chain.counts["gradients"].upper()  # mistake
chain.state = "text"  # mistake
block: fw.Result = chain.advance(10)  # mistake
fw.run(density, [0.0], keep=2.5)  # mistake
fw.run(density, [0.0], executor=3)  # mistake
fw.integrate(density, [0.0], [1.0], steps=3)  # mistake
fw.kernels.apply(np.ones(2), np.ones(2))  # mistake
fw.judge(np.zeros((1, 4, 1)), names=3)  # mistake
fw.load(3.5)  # mistake
fw.runn(density)  # mistake
fw.errors.BusyErrors  # mistake  # noqa: B018
