"""Random graphs, drawn from a generator and nothing else: pairs of vertices from 0, each pair once, smaller first."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

I64 = npt.NDArray[np.int64]

FRUITLESS_ROUNDS = 30


def regular_pairs(size: int, degree: int, draws: np.random.Generator) -> I64:
    """The edges i64 (size * degree / 2, 2) of a random graph in which every vertex has ``degree`` neighbours.

    Ends of edges are joined at random; what would join a vertex to itself or a pair twice is joined anew (Steger &
    Wormald, Comb. Probab. Comput. 8 (1999) 377), from the start where that does not come to an end. Nearly uniform
    for fixed degree. Dense graphs are drawn as those whose edges are absent. ``size * degree`` must be even.
    """
    if 2 * degree > size - 1:
        absent = regular_pairs(size, size - 1 - degree, draws)
        heads, tails = np.triu_indices(size, 1)
        kept = ~np.isin(heads * size + tails, absent[:, 0] * size + absent[:, 1])
        return np.stack([heads[kept], tails[kept]], axis=1)
    while True:
        keys = _joined(np.repeat(np.arange(size), degree), size, draws)
        if keys is not None:
            return np.stack(np.divmod(np.sort(keys), size), axis=1)


def _joined(ends: I64, size: int, draws: np.random.Generator) -> I64 | None:
    """Keys (one * size + other) of edges between the ends; None where the last ends cannot be joined."""
    keys, fruitless = np.empty(0, np.int64), 0
    while len(ends) and fruitless < FRUITLESS_ROUNDS:
        pairs = np.sort(draws.permutation(ends).reshape(-1, 2), axis=1)
        new = pairs[:, 0] * size + pairs[:, 1]
        first = np.zeros(len(new), bool)
        first[np.unique(new, return_index=True)[1]] = True
        good = first & (pairs[:, 0] != pairs[:, 1]) & ~np.isin(new, keys)
        fruitless = 0 if np.any(good) else fruitless + 1
        keys = np.concatenate([keys, new[good]])
        ends = pairs[~good].ravel()
    return None if len(ends) else keys


def independent_pairs(size: int, density: float, draws: np.random.Generator) -> I64:
    """The edges i64 (m, 2) of a random graph that has each pair with probability ``density``.

    (Gilbert, Ann. Math. Stat. 30 (1959) 1141; Erdos & Renyi, Publ. Math. Debrecen 6 (1959) 290.) Their number is
    drawn first, then so many different pairs, so that time and memory go with the edges and not with all pairs.
    """
    pairs = size * (size - 1) // 2
    count = int(draws.binomial(pairs, density))
    if 2 * count > pairs:
        heads, tails = np.triu_indices(size, 1)
        kept = np.sort(draws.permutation(pairs)[:count])
        return np.stack([heads[kept], tails[kept]], axis=1)
    keys = np.empty(0, np.int64)
    while len(keys) < count:
        ends = draws.integers(0, size, (count - len(keys) + 16, 2))
        ends = np.sort(ends[ends[:, 0] != ends[:, 1]], axis=1)
        keys = np.unique(np.concatenate([keys, ends[:, 0] * size + ends[:, 1]]))
    kept = np.sort(draws.permutation(len(keys))[:count])
    return np.stack(np.divmod(keys[kept], size), axis=1)
