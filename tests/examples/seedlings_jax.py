"""The seedlings with JAX: the gradient and the Hessian product come by automatic differentiation."""

import jax
import jax.numpy as jnp
from seedlings_numpy import DAYS, HEIGHT, parameters

import fellwalk as fw

jax.config.update("jax_enable_x64", True)  # without this line JAX computes in single precision, which from_jax refuses


def log_density(x):
    level, growth, noise = x
    miss = (HEIGHT - level - growth * DAYS) / noise
    prior = -0.5 * ((level / 10) ** 2 + (growth / 5) ** 2 + (noise / 2) ** 2)
    return -len(DAYS) * jnp.log(noise) - 0.5 * miss @ miss + prior


density = fw.from_jax(log_density, parameters, start=[0.0, 3.0, 1.0])
