"""Random numbers that belong to a place, so that planes come out the same in whatever order they are asked for."""

from __future__ import annotations

import numpy as np

PLACE = 1 << 40
"""Added to each coordinate: objects of a scene may lie before its first pixel, a counter may not be negative."""


def generator(seed: int, purpose: int, a: int = 0, b: int = 0, c: int = 0) -> np.random.Generator:
    """Return the generator of one place.

    Philox is a counter-based generator (Salmon et al., SC11, 2011): the key says which sequence, the three upper words
    of the counter where in it. The lowest word counts the numbers drawn, so places never overlap.

    Parameters
    ----------
    seed : int
        Seed of the stack, 0 to 2**64 - 1.
    purpose : int
        What the numbers are for; each use has its own.
    a, b, c : int
        The place, for example channel and plane; may be negative.
    """
    key = np.array([seed, purpose], np.uint64)
    counter = np.array([0, a + PLACE, b + PLACE, c + PLACE], np.uint64)
    return np.random.Generator(np.random.Philox(key=key, counter=counter))
