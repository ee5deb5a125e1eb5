"""Named random streams: every draw of quietlimb comes from one of these, injected by the caller.

One seed serves a whole run. Each use of chance has a name, and its generator depends on
the seed and that name alone, so adding a new use never changes the numbers of the others.
"""

from __future__ import annotations

import hashlib

import numpy as np


def stream(seed: int, name: str, index: int = 0) -> np.random.Generator:
    """Random generator of one named use.

    Parameters
    ----------
    seed : int
        Seed of the run; non-negative.
    name : str
        What the numbers are for, such as ``"radiometer-noise"``.
    index : int
        Which draw of that use, so that each can be made again alone.

    Returns
    -------
    numpy.random.Generator
        PCG-64, seeded by (seed, SHA-256 of the name, index).
    """
    words = np.frombuffer(hashlib.sha256(name.encode()).digest(), dtype="<u4")
    return np.random.default_rng(np.random.SeedSequence([seed, index, *(int(word) for word in words)]))
