"""One integer seed, many named independent random streams.

A stream depends on the seed and its name alone: never on the order in which streams are
asked for, on the number of workers, or on which contender asks.
"""

import hashlib

import numpy as np


def _words(name: str | int) -> list[int]:
    # a numpy integer or text names the same stream as the plain one
    plain = str(name) if isinstance(name, str) else int(name)
    digest = hashlib.sha256(repr(plain).encode()).digest()
    return [int.from_bytes(digest[i : i + 4], "little") for i in (0, 4)]


def sequence(seed: int, *names: str | int) -> np.random.SeedSequence:
    """Return the seed sequence that belongs to `seed` and the path of `names`."""
    return np.random.SeedSequence(seed, spawn_key=tuple(w for n in names for w in _words(n)))


def stream(seed: int, *names: str | int) -> np.random.Generator:
    """Return the generator that belongs to `seed` and the path of `names`.

    Args:
        seed: the study's one integer, >= 0.
        *names: path of the stream, such as ("noise", 3).
    """
    return np.random.default_rng(sequence(seed, *names))
