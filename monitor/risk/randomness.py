"""Random numbers that a replay draws again.

NumPy keeps the stream of its legacy RandomState for a given seed for ever (NEP 19), which it promises of no newer
generator; uniform integers agree to the last bit under any version, normal variates to the last few units in the last
place, for they pass through the machine's logarithm.
"""

from __future__ import annotations

import hashlib

import numpy as np


def random_state(*names: str) -> np.random.RandomState:
    """The generator that belongs to these names in this order: site, date, subject and what the draws are for.

    The seed is the SHA-256 of the names, each with its length before it so that no two lists read alike.
    """
    text = "".join(f"{len(name)}:{name}" for name in names)
    return np.random.RandomState(np.frombuffer(hashlib.sha256(text.encode()).digest(), dtype="<u4").astype(np.uint32))
