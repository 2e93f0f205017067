"""Pairs with weights, as all readers of graphs gather them, and the problem that they make."""

from __future__ import annotations

from array import array
from collections.abc import Iterable
from dataclasses import replace
from typing import NoReturn

import numpy as np
import numpy.typing as npt

from patchwalk.problem.ising import Problem
from patchwalk.problem.sources import Source

WITH_LOOPS = ("ising", "qubo")  # kinds in which a pair of a vertex with itself means something


class Pairs:
    """Pairs as they are read, in flat arrays: ``heads`` and ``tails`` from 0, ``weights`` empty if all are 1."""

    def __init__(self, source: Source, kind: str) -> None:
        self.source, self.kind = source, kind
        self.heads, self.tails, self.weights = array("q"), array("q"), array("d")
        self.notes: list[str] = []

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

    def refuse_loop(self, line: int, name: str) -> NoReturn:
        """The error for a pair of a vertex with itself, where the kind has no fields."""
        self.source.fail(
            line, f"vertex {name} is joined to itself, but kind {self.kind} has no fields; remove the line"
        )

    def problem(self, size: int, names: Iterable[str] | None = None) -> Problem:
        """The problem: pairs of a spin with itself are its fields, repeated pairs are summed with a note."""
        heads, tails = np.array(self.heads, np.int64), np.array(self.tails, np.int64)
        weights = np.array(self.weights, np.float64) if self.weights else np.ones(len(heads))
        loops = heads == tails
        fields = np.bincount(heads[loops], weights[loops], minlength=size)
        keys = np.minimum(heads, tails) * size + np.maximum(heads, tails)
        self._note_repeats(keys[~loops], "pair", "weights")
        self._note_repeats(keys[loops], "field", "values")
        problem = Problem.from_arrays(
            heads[~loops],
            tails[~loops],
            weights[~loops],
            size=size,
            fields=fields,
            kind=self.kind,
            names=names,
            notes=self.notes,
            details=self.source.details(),
        )
        if not problem.coupling_count and not np.any(problem.fields):
            self.source.fail(None, "there is nothing to decide: no coupling and no field differs from 0")
        offset = self.source.offset(problem.offset)
        return problem if offset == problem.offset else replace(problem, offset=offset)

    def _note_repeats(self, keys: npt.NDArray[np.int64], what: str, numbers: str) -> None:
        keys = np.sort(keys)
        repeats = len(np.unique(keys[1:][keys[1:] == keys[:-1]]))
        if repeats == 1:
            self.notes.append(f"1 {what} occurs more than once; its {numbers} were summed")
        elif repeats:
            self.notes.append(f"{repeats} {what}s occur more than once; their {numbers} were summed")
