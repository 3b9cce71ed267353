"""Evenly spread sample points for Monte Carlo that are the same on every machine and run.

Richtmyer's sequence, frac(i·√p) for one prime p per dimension: error falls nearly as 1/n where
random points give 1/√n, and no generator's stream has to stay the same between releases.
"""

from functools import lru_cache

import numpy as np

from ohmward.metrology.arrays import FloatArray

_PRIMES = (2, 3, 5, 7, 11, 13, 17, 19, 23, 29, 31, 37)


@lru_cache(maxsize=8)
def uniform_points(count: int, dimensions: int) -> FloatArray:
    """Shape (dimensions, count), inside 0…1 with the ends left out; not to be written to."""
    if not 1 <= dimensions <= len(_PRIMES):
        raise ValueError(f"1 to {len(_PRIMES)} dimensions, not {dimensions}")
    steps = np.arange(1, count + 1, dtype=np.float64)
    roots = np.sqrt(np.array(_PRIMES[:dimensions], dtype=np.float64))
    points: FloatArray = np.clip(np.mod(roots[:, None] * steps, 1.0), 1e-12, 1 - 1e-12)
    points.setflags(write=False)
    return points


@lru_cache(maxsize=8)
def normal_points(count: int, dimensions: int) -> FloatArray:
    """The same points as independent standard normal deviates."""
    from scipy.special import ndtri

    points = np.asarray(ndtri(uniform_points(count, dimensions)), dtype=np.float64)
    points.setflags(write=False)
    return points
