"""Seeds that depend on names, not on the order of work."""

from __future__ import annotations

import hashlib

import numpy as np


def seed_for(seed: int, *names: object) -> int:
    """Return a 63-bit seed from a base seed and any names; the same on every machine and in any order of work."""
    text = "\x1f".join([str(seed), *map(str, names)]).encode()
    return int.from_bytes(hashlib.blake2b(text, digest_size=8).digest(), "big") >> 1


def rng_for(seed: int, *names: object) -> np.random.Generator:
    """Return a generator seeded by :func:`seed_for`."""
    return np.random.default_rng(seed_for(seed, *names))
