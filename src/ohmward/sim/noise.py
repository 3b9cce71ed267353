"""Noise and spread by key: the same seed and key give the same number, in whatever order asked.

Nothing here is a stream. A reading's noise hangs on (seed, instrument, part, reading) alone, so
that leaving out or repeating one reading changes no other.
"""

from hashlib import blake2b
from statistics import NormalDist

_INVERSE_CDF = NormalDist().inv_cdf
_STEPS = 1 << 53


def uniform(seed: int, *key: object) -> float:
    """A number in the open interval (0, 1), evenly spread over keys."""
    text = "\x1f".join((str(seed), *map(str, key)))
    digest = blake2b(text.encode(), digest_size=8).digest()
    return ((int.from_bytes(digest, "little") >> 11) + 0.5) / _STEPS


def normal(seed: int, *key: object) -> float:
    """A standard normal number (mean 0, deviation 1): the inverse CDF of ``uniform``."""
    return _INVERSE_CDF(uniform(seed, *key))
