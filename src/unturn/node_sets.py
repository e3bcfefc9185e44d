"""Sets of nodes compared by one number each: which faces or edges of cells occur once."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Ints = NDArray[np.int64]
Keys = NDArray[np.uint64]


def random_numbers(n: int, seed: int) -> Keys:
    """Return `(n,)` random 64-bit numbers, the same ones every time."""
    return np.random.default_rng(seed).integers(1, 2**64 - 1, size=n, dtype=np.uint64)


def set_keys(nodes: NDArray[np.integer], table: Keys) -> tuple[Keys, NDArray[np.int8]]:
    """Return a key of each set of nodes and how many different ones it has, from `(k, m)` nodes.

    The key is the sum of the random 64-bit numbers that `table` gives to the different nodes. Two sets get the same key
    by chance once in 2^64 pairs; a free face is lost so with a probability of faces times free faces over 2^64: 2e-8 for a
    million hexahedra.
    """
    values = table[nodes]
    key = values[0].copy()
    count = np.ones(nodes.shape[1], dtype=np.int8)
    for j in range(1, len(nodes)):
        fresh = nodes[j] != nodes[0]
        for i in range(1, j):
            fresh &= nodes[j] != nodes[i]
        key += values[j] * fresh
        count += fresh
    return key, count


def singles(keys: Keys) -> Ints:
    """Return the positions, ascending, of the keys that occur once.

    Most keys are pairs. In a table where every key is combined with what is there by exclusive or, a pair leaves nothing:
    only keys that meet something in their place are sorted.
    """
    bits = max(4, len(keys).bit_length())
    place = (keys >> np.uint64(64 - bits)).view(np.int64)
    table = np.zeros(1 << bits, dtype=np.uint64)
    np.bitwise_xor.at(table, place, keys)
    maybe = np.flatnonzero(table[place])
    _, first, count = np.unique(keys[maybe], return_index=True, return_counts=True)
    return np.sort(maybe[first[count == 1]])
