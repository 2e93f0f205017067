"""Sets of vertices: independent sets, which hold no edge, and vertex covers, which touch every edge."""

from __future__ import annotations

from abc import abstractmethod
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.meanings import I8, Encoding, entry_of, labels_of, plain_list
from patchwalk.problem.penalties import above, problem_of_bits, smallest

I64 = npt.NDArray[np.int64]
F64 = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class VertexSet(Encoding):
    """A set of vertices, spin -1 for its members; ``edges`` i64 (m, 2), ``weights`` f64 (n,)."""

    edges: I64
    weights: F64
    labels: tuple[str, ...]

    def read(self, spins: I8) -> dict[str, Any]:
        return {self.main: [self.labels[place] for place in np.flatnonzero(spins == -1)]}

    def judge(self, value: Mapping[str, Any]) -> tuple[float, tuple[str, ...]]:
        inside = self.encode(value) == -1
        one, other = inside[self.edges[:, 0]], inside[self.edges[:, 1]]
        names = [(self.labels[i], self.labels[j]) for i, j in self.edges[self._wrong(one, other)].tolist()]
        return float(self.weights[inside].sum()), tuple(self._sentence(*pair) for pair in names)

    def encode(self, value: Mapping[str, Any]) -> I8:
        given = plain_list(entry_of(value, self.main), self.main)
        places = {label: place for place, label in enumerate(self.labels)}
        spins = np.ones(len(self.labels), np.int8)
        for name in given:
            if name not in places:
                raise ProblemError(f'"{self.main}" of the answer holds {name!r}, which is no vertex of the problem')
            spins[places[name]] = -1
        return spins

    def mend(self, spins: I8) -> I8:
        """Edge by edge, the lighter end of one that is wrong changes sides."""
        mended = spins.copy()
        inside = spins == -1
        for i, j in self.edges[self._wrong(inside[self.edges[:, 0]], inside[self.edges[:, 1]])].tolist():
            if mended[i] == spins[i] and mended[j] == spins[j]:  # no edge goes wrong by mending another
                lighter = i if self.weights[i] <= self.weights[j] else j
                mended[lighter] = -spins[lighter]
        return mended

    @abstractmethod
    def _wrong(self, one: npt.NDArray[np.bool_], other: npt.NDArray[np.bool_]) -> npt.NDArray[np.bool_]: ...

    @abstractmethod
    def _sentence(self, one: str, other: str) -> str: ...


class IndependentSet(VertexSet):
    """No two members are joined."""

    main = "members"
    shape = "set"

    def _wrong(self, one: npt.NDArray[np.bool_], other: npt.NDArray[np.bool_]) -> npt.NDArray[np.bool_]:
        return one & other

    def _sentence(self, one: str, other: str) -> str:
        return f"{one} and {other} are joined, and both are members"


class VertexCover(VertexSet):
    """Every edge has a member at one end at least."""

    main = "cover"
    shape = "set"

    def _wrong(self, one: npt.NDArray[np.bool_], other: npt.NDArray[np.bool_]) -> npt.NDArray[np.bool_]:
        return ~one & ~other

    def _sentence(self, one: str, other: str) -> str:
        return f"{one} and {other} are joined, and neither is in the cover"


def encode_independent_set(
    edges: npt.ArrayLike,
    weights: npt.ArrayLike | None = None,
    size: int | None = None,
    *,
    names: Iterable[str] | None = None,
    notes: Iterable[str] = (),
) -> Problem:
    """The problem of an independent set of most weight; energy = -weight for every independent set.

    ``edges`` (m, 2) are pairs of vertices counted from 0, ``weights`` (n,) 1 by default. Spin -1 is a member.

    **Penalties.** Both ends of an edge in the set cost P. Taking the lighter one out loses the lesser weight and saves
    at least P, so that any P above it is enough; below it, one edge alone has both its ends in.

    Raises :class:`~patchwalk.problem.ising.ProblemError` for a vertex outside the ``size`` or joined to itself.

    >>> encode_independent_set([(0, 1), (1, 2)]).energy([-1, 1, -1])
    -2.0
    """
    pairs, values, kept = _graph(edges, weights, size, names)
    lesser = np.minimum(values[pairs[:, 0]], values[pairs[:, 1]])
    return problem_of_bits(
        pairs[:, 0],
        pairs[:, 1],
        above(lesser, smallest(values)),
        -values,
        kind="independent_set",
        names=kept,
        encoding=IndependentSet(pairs, values, labels_of(kept, len(values))),
        notes=tuple(notes),
    )


def encode_vertex_cover(
    edges: npt.ArrayLike,
    weights: npt.ArrayLike | None = None,
    size: int | None = None,
    *,
    names: Iterable[str] | None = None,
    notes: Iterable[str] = (),
) -> Problem:
    """The problem of a vertex cover of least weight; energy = weight for every cover.

    Arguments and errors are those of :func:`encode_independent_set`; spin -1 is in the cover.

    **Penalties.** An edge without an end in the cover costs P. Taking the lighter end in costs the lesser weight and
    saves at least P, so that any P above it is enough; below it, the cover of one edge alone is empty.
    """
    pairs, values, kept = _graph(edges, weights, size, names)
    penalties = above(np.minimum(values[pairs[:, 0]], values[pairs[:, 1]]), smallest(values))
    pulls = np.bincount(pairs.ravel(), np.repeat(penalties, 2), len(values))
    return problem_of_bits(
        pairs[:, 0],
        pairs[:, 1],
        penalties,
        values - pulls,
        float(penalties.sum()),
        kind="vertex_cover",
        names=kept,
        encoding=VertexCover(pairs, values, labels_of(kept, len(values))),
        notes=tuple(notes),
    )


def _graph(
    edges: npt.ArrayLike, weights: npt.ArrayLike | None, size: int | None, names: Iterable[str] | None
) -> tuple[I64, F64, tuple[str, ...] | None]:
    """Edges once each, weights and names of vertices."""
    kept = None if names is None else tuple(names)
    if size is None and weights is not None:
        size = len(np.asarray(weights).ravel())
    pairs, count = edges_of(edges, size if size is not None or kept is None else len(kept))
    values = np.ones(count) if weights is None else np.array(weights, np.float64).ravel()
    if len(values) != count:
        raise ProblemError(f"{len(values)} weights for {count} vertices; give one each")
    return once_each(pairs, count), values, kept


def edges_of(edges: npt.ArrayLike, size: int | None) -> tuple[I64, int]:
    """Edges i64 (m, 2) with the lesser vertex first, and the number of vertices; raises :class:`ProblemError`."""
    pairs = np.asarray(edges, np.int64)
    if pairs.size == 0:
        pairs = pairs.reshape(0, 2)
    if pairs.ndim != 2 or pairs.shape[1] != 2:
        raise ProblemError(f"edges have shape {pairs.shape}, expected (m, 2): pairs of vertices counted from 0")
    count = int(pairs.max(initial=-1)) + 1 if size is None else size
    outside = pairs[(pairs < 0) | (pairs >= count)]
    if len(outside):
        raise ProblemError(f"vertex {outside[0]} does not exist: {count} vertices are numbered 0 to {count - 1}")
    loops = np.flatnonzero(pairs[:, 0] == pairs[:, 1])
    if len(loops):
        raise ProblemError(f"vertex {pairs[loops[0], 0]} is joined to itself; leave that edge out")
    return np.sort(pairs, axis=1), count


def once_each(pairs: I64, count: int) -> I64:
    """Edges i64 (m, 2), lesser vertex first, without repeats and rising."""
    keys = np.unique(pairs[:, 0] * count + pairs[:, 1])
    return np.stack(np.divmod(keys, max(count, 1)), axis=1)
