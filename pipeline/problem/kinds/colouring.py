"""Colours for the vertices of a graph, so that no two that are joined have one colour."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.kinds.vertices import edges_of, once_each
from patchwalk.problem.meanings import I8, Encoding, by_name, labels_of
from patchwalk.problem.penalties import MOST_COUPLINGS, above, problem_of_bits

I64 = npt.NDArray[np.int64]

MOST_MENDED = 20_000
"""Where more vertices are wrong, no repair is tried: it would not be cheap."""


@dataclass(frozen=True, eq=False)
class Colouring(Encoding):
    """``edges`` i64 (m, 2), each once; spin v ``colours`` + c is -1 where vertex v has colour c + 1."""

    edges: I64
    colours: int
    labels: tuple[str, ...]
    main = "colours"

    def read(self, spins: I8) -> dict[str, Any]:
        """The colour of every vertex; a list where it has none or several."""
        rows = spins.reshape(len(self.labels), self.colours) == -1
        lone = rows.sum(axis=1) == 1
        first = (np.argmax(rows, axis=1) + 1).tolist()
        return {
            "colours": {
                label: first[place] if lone[place] else (np.flatnonzero(rows[place]) + 1).tolist()
                for place, label in enumerate(self.labels)
            }
        }

    def judge(self, value: Mapping[str, Any]) -> tuple[float, tuple[str, ...]]:
        return self._judge(self._rows(value))

    def judge_spins(self, spins: I8) -> tuple[float, tuple[str, ...]]:
        return self._judge(spins.reshape(len(self.labels), self.colours) == -1)

    def _judge(self, rows: npt.NDArray[np.bool_]) -> tuple[float, tuple[str, ...]]:
        counts = rows.sum(axis=1)
        broken = [f"{self.labels[place]} has {counts[place] or 'no'} colours" for place in np.flatnonzero(counts != 1)]
        shared = rows[self.edges[:, 0]] & rows[self.edges[:, 1]]
        edges = np.flatnonzero(np.any(shared, axis=1))
        both = (np.argmax(shared[edges], axis=1) + 1).tolist()
        for (one, other), colour in zip(self.edges[edges].tolist(), both, strict=True):
            broken.append(f"{self.labels[one]} and {self.labels[other]} are joined, and both have colour {colour}")
        return float(shared.sum()), tuple(broken)

    def encode(self, value: Mapping[str, Any]) -> I8:
        return np.where(self._rows(value), -1, 1).astype(np.int8).ravel()

    def mend(self, spins: I8) -> I8:
        """Vertex by vertex, the colour that its neighbours use least, where it has not one of its own."""
        rows = spins.reshape(len(self.labels), self.colours) == -1
        clashing = self.edges[np.any(rows[self.edges[:, 0]] & rows[self.edges[:, 1]], axis=1)]
        wrong = np.union1d(np.flatnonzero(rows.sum(axis=1) != 1), clashing)
        if len(wrong) > MOST_MENDED:
            return spins
        heads = self.edges.ravel()
        order = np.argsort(heads, kind="stable")
        tails, starts = self.edges[:, ::-1].ravel()[order], np.searchsorted(heads[order], np.arange(len(rows) + 1))
        for vertex in wrong.tolist():
            around = rows[tails[starts[vertex] : starts[vertex + 1]]].sum(axis=0)
            if rows[vertex].sum() != 1 or around[rows[vertex]].sum():
                rows[vertex] = np.arange(self.colours) == np.argmin(around)
        return np.where(rows, -1, 1).astype(np.int8).ravel()

    def _rows(self, value: Mapping[str, Any]) -> npt.NDArray[np.bool_]:
        """Which vertex has which colour, (n, colours)."""
        rows = np.zeros((len(self.labels), self.colours), np.bool_)
        for place, given in enumerate(by_name(value, self.main, self.labels)):
            for colour in given if isinstance(given, list) else [given]:
                if not isinstance(colour, int) or not 1 <= colour <= self.colours:
                    raise ProblemError(
                        f"colour {colour!r} of {self.labels[place]} does not exist; they are 1 to {self.colours}"
                    )
                rows[place, colour - 1] = True
        return rows


def encode_colouring(
    edges: npt.ArrayLike,
    colours: int,
    size: int | None = None,
    *,
    names: Iterable[str] | None = None,
    notes: Iterable[str] = (),
) -> Problem:
    """The problem of colouring a graph with so many colours; energy = edges whose ends have one colour.

    ``edges`` (m, 2) are pairs of vertices counted from 0. Every vertex has ``colours`` spins, exactly one of which is
    -1 (its group); the energy is exact wherever that is so, and 0 for a proper colouring.

    **Penalties.** A vertex with m colours costs P (1 - m)^2. Taking a colour from one that has several saves at least
    P and adds no conflict. Then, with d neighbours of one colour at most, a vertex that has none can take one that
    floor(d / colours) neighbours have at most, and saves P. So any P above that is enough, and below, a clique of
    colours + 1 vertices leaves one without.

    Raises :class:`~patchwalk.problem.ising.ProblemError` for fewer than two colours, for a vertex outside the ``size``
    or joined to itself, and for more than 20,000,000 couplings.

    >>> encode_colouring([(0, 1)], 2).energy([-1, 1, 1, -1])
    0.0
    """
    kept = None if names is None else tuple(names)
    pairs, count = edges_of(edges, size if size is not None or kept is None else len(kept))
    pairs = once_each(pairs, count)
    if colours < 2:
        raise ProblemError(f"{colours} colours leave nothing to decide; give two or more")
    if colours * (len(pairs) + count * (colours - 1) / 2) > MOST_COUPLINGS:
        raise ProblemError(f"{colours} colours make more than {MOST_COUPLINGS} couplings of this graph; give fewer")
    labels = labels_of(kept, count)
    degrees = np.bincount(pairs.ravel(), minlength=count)
    penalties = np.repeat(above(degrees // colours), colours)
    spins = np.arange(count * colours).reshape(count, colours)
    one, other = np.triu_indices(colours, 1)
    within = spins[:, one].ravel(), spins[:, other].ravel()
    across = spins[pairs[:, 0]].ravel(), spins[pairs[:, 1]].ravel()
    return problem_of_bits(
        np.concatenate([within[0], across[0]]),
        np.concatenate([within[1], across[1]]),
        np.concatenate([2 * penalties[within[0]], np.ones(len(across[0]))]),
        -penalties,
        float(penalties[::colours].sum()),
        kind="colouring",
        names=[f"{label} has colour {colour}" for label in labels for colour in range(1, colours + 1)],
        groups=tuple(spins),
        encoding=Colouring(pairs, colours, labels),
        notes=tuple(notes),
    )
