"""Height of seedlings (mm) after some days under a lamp, invented: a line with normal noise. Written with NumPy."""

import numpy as np

import fellwalk as fw

DAYS = np.array([2.0, 3.0, 5.0, 6.0, 8.0, 9.0, 11.0, 12.0])
HEIGHT = np.array([9.1, 12.7, 17.9, 22.4, 27.3, 31.9, 36.2, 41.0])

parameters = fw.Parameters(level=fw.free(), growth=fw.free(), noise=fw.positive())


def log_density(x):
    """level ~ N(0, 10^2), growth ~ N(0, 5^2), noise ~ half-normal of scale 2; x holds natural values."""
    level, growth, noise = x
    miss = (HEIGHT - level - growth * DAYS) / noise
    prior = -0.5 * ((level / 10) ** 2 + (growth / 5) ** 2 + (noise / 2) ** 2)
    value = -len(DAYS) * np.log(noise) - 0.5 * miss @ miss + prior
    gradient = np.array([
        miss.sum() / noise - level / 100,
        miss @ DAYS / noise - growth / 25,
        (miss @ miss - len(DAYS)) / noise - noise / 4,
    ])
    return value, gradient


density = fw.Density(log_density, parameters, start=[0.0, 3.0, 1.0])
