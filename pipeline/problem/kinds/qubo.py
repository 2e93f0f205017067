"""A quadratic form of bits, to be minimised."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patchwalk.problem.ising import Problem
from patchwalk.problem.meanings import I8, Encoding, labels_of, truth_values
from patchwalk.problem.penalties import problem_of_bits


@dataclass(frozen=True, eq=False)
class BitForm(Encoding):
    """``offset + sum linear_i x_i + sum weights_e x_heads x_tails`` over bits x."""

    heads: npt.NDArray[np.int64]
    tails: npt.NDArray[np.int64]
    weights: npt.NDArray[np.float64]
    linear: npt.NDArray[np.float64]
    offset: float
    labels: tuple[str, ...]
    main = "bits"

    def read(self, spins: I8) -> dict[str, Any]:
        return {"bits": dict(zip(self.labels, ((1 - spins) // 2).tolist(), strict=True))}

    def judge(self, value: Mapping[str, Any]) -> tuple[float, tuple[str, ...]]:
        bits = truth_values(value, self.main, self.labels).astype(np.float64)
        pairs = float(self.weights @ (bits[self.heads] * bits[self.tails]))
        return self.offset + float(self.linear @ bits) + pairs, ()

    def encode(self, value: Mapping[str, Any]) -> I8:
        return (1 - 2 * truth_values(value, self.main, self.labels)).astype(np.int8)


def encode_qubo(
    heads: npt.ArrayLike,
    tails: npt.ArrayLike,
    weights: npt.ArrayLike,
    linear: npt.ArrayLike,
    offset: float = 0.0,
    names: Iterable[str] | None = None,
    notes: Iterable[str] = (),
) -> Problem:
    """The problem of least ``offset + sum linear_i x_i + sum weights_e x_heads x_tails``, bits counted from 0.

    The energy is that value for every configuration; bit 1 is spin -1. Pairs given more than once are summed, and
    a pair of a bit with itself is linear. Raises :class:`~patchwalk.problem.ising.ProblemError` for indices outside
    the bits and for numbers that are not finite.

    >>> encode_qubo([0], [1], [2.0], [-1.0, -1.0]).energy([-1, -1])
    0.0
    """
    kept = None if names is None else tuple(names)
    alone = np.array(linear, np.float64).ravel()
    encoding = BitForm(
        np.array(heads, np.int64).ravel(),
        np.array(tails, np.int64).ravel(),
        np.array(weights, np.float64).ravel(),
        alone,
        float(offset),
        labels_of(kept, len(alone)),
    )
    return problem_of_bits(
        heads, tails, weights, alone, offset, kind="qubo", names=kept, encoding=encoding, notes=tuple(notes)
    )
