"""Pairs with weights, as all files of graphs hold them, and the problem that they make.

What the weight of a pair means, and that of a pair of a vertex with itself:

    ising                          a coupling, and the field of a spin
    maxcut, balanced_partition     the weight of an edge; no vertex may be joined to itself
    qubo                           the coefficient of a product of two bits, and of one bit
    independent_set, vertex_cover  edges have no weight, and that of a vertex (1 where it has none)
    colouring                      edges have no weight; no vertex may be joined to itself
"""

from __future__ import annotations

from array import array
from collections import Counter
from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import NoReturn

import numpy as np
import numpy.typing as npt
from scipy import sparse

from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.sources import LARGEST_NUMBER, Source, quoted

I64 = npt.NDArray[np.int64]
F64 = npt.NDArray[np.float64]

WITH_LOOPS = ("ising", "qubo", "independent_set", "vertex_cover")
UNWEIGHTED = ("independent_set", "vertex_cover", "colouring")
MOST_COLOURS = 1000


class Pairs:
    """Pairs as they are read, in flat arrays: ``heads`` and ``tails`` from 0, ``weights`` empty if all are 1."""

    def __init__(self, source: Source, kind: str) -> None:
        self.source, self.kind = source, kind
        self.heads, self.tails, self.weights = array("q"), array("q"), array("d")
        self.notes: list[str] = []
        self.colours = source.colours(MOST_COLOURS, self.notes) if kind == "colouring" else 0
        self.offset = source.offset(0.0)

    def __len__(self) -> int:
        return len(self.heads)

    @property
    def takes_loops(self) -> bool:
        """Whether the kind has a meaning for a pair of a vertex with itself."""
        return self.kind in WITH_LOOPS

    def extend(
        self, heads: npt.NDArray[np.int64], tails: npt.NDArray[np.int64], weights: npt.NDArray[np.float64] | None
    ) -> None:
        """Many pairs at once: ends i64 (m,) from 0, weights f64 (m,) or None where all are 1."""
        self.heads.frombytes(heads.tobytes())
        self.tails.frombytes(tails.tobytes())
        if weights is not None:
            self.weights.frombytes(weights.tobytes())

    def clear(self) -> None:
        """Forget all pairs."""
        self.heads, self.tails, self.weights = array("q"), array("q"), array("d")

    def refuse_loop(self, line: int, name: str) -> NoReturn:
        """The error for a pair of a vertex with itself, where the kind has no fields."""
        self.source.fail(
            line, f"vertex {name} is joined to itself, but kind {self.kind} has no fields; remove the line"
        )

    def problem(self, size: int, names: Iterable[str] | None = None) -> Problem:
        """The problem; repeated pairs are summed, with a note."""
        heads, tails = np.array(self.heads, np.int64), np.array(self.tails, np.int64)
        weights = np.array(self.weights, np.float64) if self.weights else np.ones(len(heads))
        loops = heads == tails
        keys = np.minimum(heads, tails) * size + np.maximum(heads, tails)
        self._note_repeats(keys[~loops], "pair", "weights")
        self._note_repeats(keys[loops], "field", "values")
        if self.kind in ("ising", "maxcut"):
            problem = Problem.from_arrays(
                heads[~loops],
                tails[~loops],
                weights[~loops],
                size=size,
                fields=np.bincount(heads[loops], weights[loops], minlength=size),
                kind=self.kind,
                names=names,
                notes=self.notes,
            )
        else:
            with self.source.naming():
                problem = self._encoded(size, names, heads, tails, weights)
        if not problem.coupling_count and not np.any(problem.fields):
            self.source.fail(None, "there is nothing to decide: no coupling and no field differs from 0")
        offset = problem.offset if self.kind == "qubo" else self.source.offset(problem.offset)
        return replace(problem, offset=offset, details={**problem.details, **self.source.details()})

    def _encoded(self, size: int, names: Iterable[str] | None, heads: I64, tails: I64, weights: F64) -> Problem:
        """The problem of a kind that has an encoding."""
        from patchwalk.problem import encodings

        loops = heads == tails
        edges = np.stack([heads, tails], axis=1)[~loops]
        alone = np.bincount(heads[loops], weights[loops], minlength=size)
        if self.kind in UNWEIGHTED and np.any(weights[~loops] != 1):
            self.notes.append(f"the weights of edges mean nothing to kind {self.kind} and are left out")
        if self.kind == "qubo":
            return encodings.encode_qubo(
                edges[:, 0], edges[:, 1], weights[~loops], alone, self.offset, names=names, notes=self.notes
            )
        if self.kind == "colouring":
            return encodings.encode_colouring(edges, self.colours, size, names=names, notes=self.notes)
        if self.kind == "balanced_partition":
            return encodings.encode_balanced_partition(edges, weights[~loops], size, names=names, notes=self.notes)
        alone[np.bincount(heads[loops], minlength=size) == 0] = 1.0
        encode = {"independent_set": encodings.encode_independent_set, "vertex_cover": encodings.encode_vertex_cover}
        return encode[self.kind](edges, alone, size, names=names, notes=self.notes)

    def _note_repeats(self, keys: npt.NDArray[np.int64], what: str, numbers: str) -> None:
        keys = np.sort(keys)
        repeats = len(np.unique(keys[1:][keys[1:] == keys[:-1]]))
        if repeats == 1:
            self.notes.append(f"1 {what} occurs more than once; its {numbers} were summed")
        elif repeats:
            self.notes.append(f"{repeats} {what}s occur more than once; their {numbers} were summed")


@dataclass(frozen=True, eq=False)
class Listing:
    """What a file of pairs has to say for a problem to be read back from it.

    ``heads`` and ``tails`` i64 (m,) from 0 with ``weights`` f64 (m,), pairs of a vertex with itself last; ``settings``
    are lines such as ``offset = 1.5``.
    """

    size: int
    names: tuple[str, ...] | None
    heads: I64
    tails: I64
    weights: F64
    settings: tuple[str, ...]


def listing(problem: Problem) -> Listing:
    """The pairs of a problem; raises :class:`ProblemError` for what would not be read back."""
    content = _own(problem) if problem.kind in ("ising", "maxcut") else _original(problem)
    if not len(content.weights):
        raise ProblemError("the problem has no coupling and no field: a file of it would not be read")
    if np.abs(content.weights).max() > LARGEST_NUMBER:
        raise ProblemError(f"a number beyond {LARGEST_NUMBER} would not be read back; rescale the problem")
    settings = [f"kind = {problem.kind}", *content.settings]
    if "planted_energy" in problem.details:
        settings.append(f"planted_energy = {problem.details['planted_energy']!r}")
    return replace(content, settings=tuple(settings))


def _own(problem: Problem) -> Listing:
    """Couplings and fields, or weights of edges: the spins are the user's own."""
    upper = sparse.triu(problem.matrix, 1).tocoo()
    weights, default = upper.data, 0.0
    if problem.kind == "maxcut":
        weights, default = 2 * upper.data, -float(upper.data.sum())
        fielded = np.flatnonzero(problem.fields)
        if len(fielded):
            raise ProblemError(f"spin {fielded[0]} has a field, which kind maxcut cannot hold; make it kind ising")
    settings = () if problem.offset == default else (f"offset = {problem.offset!r}",)
    return _joined(len(problem), problem.names, (upper.row, upper.col), weights, problem.fields, settings)


def _original(problem: Problem) -> Listing:
    """The numbers that an encoded problem was made from."""
    from patchwalk.problem.kinds.balance import BalancedParts
    from patchwalk.problem.kinds.colouring import Colouring
    from patchwalk.problem.kinds.qubo import BitForm
    from patchwalk.problem.kinds.vertices import VertexSet

    form = problem.encoding
    if isinstance(form, BitForm):
        settings = (f"offset = {form.offset!r}",) if form.offset else ()
        ends, weights, alone = (form.heads, form.tails), form.weights, form.linear
    elif isinstance(form, BalancedParts | Colouring | VertexSet):
        ends = (form.edges[:, 0], form.edges[:, 1])
        weights = form.weights if isinstance(form, BalancedParts) else np.ones(len(form.edges))
        alone = form.weights if isinstance(form, VertexSet) else np.zeros(len(form.labels))
        settings = (f"colours = {form.colours}",) if isinstance(form, Colouring) else ()
    else:
        raise ProblemError(f"a problem of kind {problem.kind} without what it was made from cannot be written")
    names = None if are_numbers(form.labels) else form.labels
    usual = 1.0 if isinstance(form, VertexSet) else 0.0
    return _joined(len(form.labels), names, ends, weights, alone, settings, usual)


def _joined(
    size: int,
    names: tuple[str, ...] | None,
    ends: tuple[npt.NDArray[np.integer], npt.NDArray[np.integer]],
    weights: F64,
    alone: F64,
    settings: tuple[str, ...],
    usual: float = 0.0,
) -> Listing:
    """Pairs, and behind them, as pairs of a vertex with itself, what stands ``alone`` and differs from ``usual``."""
    sites = np.flatnonzero(alone != usual)
    heads, tails = (np.concatenate([end, sites]).astype(np.int64) for end in ends)
    return Listing(size, names, heads, tails, np.concatenate([weights, alone[sites]]), settings)


def are_numbers(names: tuple[str, ...]) -> bool:
    """Whether names are the numbers from 1, which they are where the user gave none."""
    return all(name == str(number) for number, name in enumerate(names, 1))


def different_names(content: Listing) -> tuple[str, ...]:
    """The names of a listing, numbers from 1 where there are none; raises :class:`ProblemError` if two are the same."""
    names = content.names or tuple(map(str, range(1, content.size + 1)))
    seen = Counter(names)
    for name in names:
        if seen[name] > 1 or not name.strip():
            why = "occurs twice" if seen[name] > 1 else "is empty"
            raise ProblemError(f"name {quoted(name)} {why}, which such a file cannot hold; write a .txt file")
    return names
