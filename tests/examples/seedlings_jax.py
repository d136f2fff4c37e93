"""The seedlings with JAX: the gradient and the Hessian product come by automatic differentiation."""

import jax
import jax.numpy as jnp
import numpy as np
from seedlings_numpy import DAYS, HEIGHT, parameters

import fellwalk as fw

jax.config.update("jax_enable_x64", True)  # without this line JAX computes in single precision


def log_density(x):
    level, growth, noise = x
    miss = (HEIGHT - level - growth * DAYS) / noise
    prior = -0.5 * ((level / 10) ** 2 + (growth / 5) ** 2 + (noise / 2) ** 2)
    return -len(DAYS) * jnp.log(noise) - 0.5 * miss @ miss + prior


value_and_gradient = jax.jit(jax.value_and_grad(log_density))
product = jax.jit(lambda x, p: jax.jvp(jax.grad(log_density), (x,), (p,))[1])


def call(x):
    """x is lent for the call; JAX may look at it later, so it gets a copy."""
    value, gradient = value_and_gradient(x.copy())
    return float(value), np.asarray(gradient)


density = fw.Density(call, parameters, start=[0.0, 3.0, 1.0],
                     hessian_product=lambda x, p: np.asarray(product(x.copy(), p.copy())))
