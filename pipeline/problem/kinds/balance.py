"""Two parts of equal size that cut as little weight as possible."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.kinds.vertices import edges_of
from patchwalk.problem.meanings import I8, Encoding, labels_of, two_parts
from patchwalk.problem.penalties import MOST_COUPLINGS, above, smallest

I64 = npt.NDArray[np.int64]
F64 = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class BalancedParts(Encoding):
    """``edges`` i64 (m, 2) and their ``weights`` f64 (m,); spin +1 is the first part."""

    edges: I64
    weights: F64
    labels: tuple[str, ...]
    main = "parts"
    shape = "parts"

    def read(self, spins: I8) -> dict[str, Any]:
        return {"parts": [[self.labels[place] for place in np.flatnonzero(spins == side)] for side in (1, -1)]}

    def judge(self, value: Mapping[str, Any]) -> tuple[float, tuple[str, ...]]:
        spins = self.encode(value)
        cut = float(self.weights[spins[self.edges[:, 0]] != spins[self.edges[:, 1]]].sum())
        sizes = [int(np.count_nonzero(spins == side)) for side in (1, -1)]
        if abs(sizes[0] - sizes[1]) <= 1:
            return cut, ()
        return cut, (f"the parts have {sizes[0]} and {sizes[1]} vertices, not halves",)

    def encode(self, value: Mapping[str, Any]) -> I8:
        return two_parts(value, self.main, self.labels)

    def mend(self, spins: I8) -> I8:
        """From the larger part, again and again, the vertex whose move adds least to the cut."""
        mended = spins.copy()
        graph = Problem.from_arrays(
            self.edges[:, 0], self.edges[:, 1], -self.weights / 2, size=len(mended), kind="balanced_partition"
        )
        while abs(surplus := int(mended.sum(dtype=np.int64))) > 1:
            side = 1 if surplus > 0 else -1
            added = np.where(mended == side, -2.0 * mended * graph.local_fields(mended), np.inf)
            mended[np.argmin(added)] = -side
        return mended


def encode_balanced_partition(
    edges: npt.ArrayLike,
    weights: npt.ArrayLike | None = None,
    size: int | None = None,
    *,
    names: Iterable[str] | None = None,
    notes: Iterable[str] = (),
) -> Problem:
    """The problem of two parts of equal size (one more in one of them if n is odd); energy = weight cut.

    ``edges`` (m, 2) are pairs of n vertices counted from 0, ``weights`` (m,) 1 by default. The energy is exact for
    every balanced configuration; the penalty P (sum of all spins)^2 couples every pair.

    **Penalty.** Let the parts differ by D, 2 at least if n is even, 3 if it is odd. Moving a vertex from the larger
    part adds at most its degree (the sum of the sizes of its weights) to the cut and saves P (D^2 - (D - 2)^2) =
    4 P (D - 1). The larger part misses (n - D)/2 vertices only, so that its least degree is at most the next after
    so many of all degrees, in rising order. With D least, the worst case, any P above that degree / (4 (D - 1)) is
    enough; below it, a clique of n/2 + 1 vertices next to n/2 - 1 lone ones (n even) is left whole.

    Raises :class:`~patchwalk.problem.ising.ProblemError` for a vertex outside the ``size`` or joined to itself, and
    for more than 20,000,000 couplings.

    >>> encode_balanced_partition([(0, 1), (1, 2), (2, 3)]).energy([1, 1, -1, -1])
    1.0
    """
    kept = None if names is None else tuple(names)
    pairs, count = edges_of(edges, size if size is not None or kept is None else len(kept))
    values = np.ones(len(pairs)) if weights is None else np.array(weights, np.float64).ravel()
    if len(values) != len(pairs):
        raise ProblemError(f"{len(values)} weights for {len(pairs)} edges; give one each")
    if count < 2:
        raise ProblemError(f"{count} vertices have no two parts; give two or more")
    if count * (count - 1) // 2 > MOST_COUPLINGS:
        raise ProblemError(f"{count} vertices make more than {MOST_COUPLINGS} couplings, all pairs; give fewer")
    penalty = float(above(_bound(pairs, values, count), smallest(values) / 4))
    heads, tails = np.triu_indices(count, 1)
    return Problem.from_arrays(
        np.concatenate([heads, pairs[:, 0]]),
        np.concatenate([tails, pairs[:, 1]]),
        np.concatenate([np.full(len(heads), 2 * penalty), -values / 2]),
        size=count,
        offset=float(values.sum() / 2 + penalty * (count - count % 2)),
        kind="balanced_partition",
        names=kept,
        encoding=BalancedParts(pairs, values, labels_of(kept, count)),
        notes=tuple(notes),
    )


def _bound(pairs: I64, weights: F64, count: int) -> float:
    degrees = np.sort(np.bincount(pairs.ravel(), np.repeat(np.abs(weights), 2), count))
    imbalance = 2 + count % 2
    return float(degrees[(count - imbalance) // 2] / (4 * (imbalance - 1)))
