"""The semidefinite bound, from a low-rank ascent; for dense problems the bound that counts.

min <C, X> over positive semidefinite X with unit diagonal lies below every x^T C x. It is solved in factors X = V V^T
(:mod:`patchwalk.bounds.lowrank`); the multipliers of the unit rows, lowered by the smallest eigenvalue, are the
certificate (:mod:`patchwalk.bounds.spectral`), so that nothing rests on convergence. Hyperplanes through the vectors
give configurations (Goemans & Williamson, J. ACM 42 (1995) 1115), brought down by single flips.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from time import perf_counter

import numpy as np

from patchwalk.bounds.lowrank import mix, multipliers, random_rows, round_rows
from patchwalk.bounds.spectral import (
    F64,
    I8,
    I32,
    SquareCertificate,
    refuse_large,
    settled,
    vertex_matrix,
    without_cuts,
)
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.contract import I64
from patchwalk.subsolvers.draws import stream_for

SEMIDEFINITE_STREAM = 0x5D9
FIRST_SWEEPS = 32


@dataclass(frozen=True, eq=False)
class SemidefiniteBound:
    """``lower_bound`` on E with the certificate that proves it, and the best configuration rounded from the vectors.

    ``semidefinite_value`` is <C, V V^T> + offset, which the bound approaches from below as both near the optimum of the
    program; ``vectors`` f64 (v, r); ``spins`` i8 (n,) with their ``energy``; ``sweeps`` over the rows made.
    """

    lower_bound: float
    certificate: SquareCertificate
    semidefinite_value: float
    vectors: F64
    spins: I8
    energy: float
    sweeps: int


def semidefinite_bound(
    problem: Problem,
    *,
    sweeps: int = 4096,
    tolerance: float = 1e-5,
    seconds: float = math.inf,
    trials: int = 100,
    vectors: F64 | None = None,
    seed: int = 0,
) -> SemidefiniteBound:
    """The semidefinite bound to within ``tolerance``, relative to its value, or after ``sweeps`` or ``seconds``.

    ``vectors`` f64 (v, r) are rows of length one to start from; ``trials`` hyperplanes are drawn from ``seed``. The
    clock is read only where ``seconds`` is given, so that otherwise equal calls give equal bits. Raises ``ValueError``
    beyond 6000 spins.

    >>> triangle = Problem.from_arrays([0, 1, 2], [1, 2, 0], [1, 1, 1])
    >>> bound = semidefinite_bound(triangle)
    >>> round(bound.lower_bound, 3), bound.energy
    (-1.5, -1.0)
    """
    refuse_large(problem)
    rows = rows_of(problem)
    size = len(rows[0]) - 1
    stream = stream_for(seed, SEMIDEFINITE_STREAM)
    if vectors is None:
        vectors = np.empty((size, rank_for(size)))
        random_rows(vectors, stream)
    else:
        vectors = np.array(vectors, np.float64, order="C")
    begun = perf_counter()
    diagonal, made, block = np.empty(size), 0, FIRST_SWEEPS
    best: tuple[float, SquareCertificate] | None = None
    while True:
        block = max(0, min(block, sweeps - made))
        mix(*rows, vectors, block)
        made += block
        multipliers(*rows, vectors, diagonal)
        value = problem.offset + math.fsum(diagonal)
        found = settled(problem, without_cuts(problem, diagonal))
        best = found if best is None or found[0] > best[0] else best
        exact = value - best[0] <= tolerance * abs(value - problem.offset)
        if exact or made >= sweeps or (seconds < math.inf and perf_counter() - begun >= seconds):
            break
        block = made // 2
    spins = _rounded(problem, rows, vectors, trials, stream)
    return SemidefiniteBound(best[0], best[1], value, vectors, spins, problem.energy(spins), made)


def rank_for(size: int) -> int:
    """Columns enough for the program to have no false minima."""
    return math.ceil(math.sqrt(2 * size)) + 1


def rows_of(problem: Problem) -> tuple[I64, I32, F64]:
    """The rows of C: starts i64 (v+1,), neighbours i32 and weights f64."""
    matrix = vertex_matrix(problem)
    return matrix.indptr.astype(np.int64), matrix.indices.astype(np.int32), matrix.data.astype(np.float64)


def _rounded(problem: Problem, rows: tuple[I64, I32, F64], vectors: F64, trials: int, stream: np.ndarray) -> I8:
    signs = np.ones(len(vectors), np.int8)
    round_rows(*rows, vectors, trials, problem.tie_tolerance, stream, signs)
    return np.ascontiguousarray(signs[: len(problem)] * (signs[-1] if len(signs) > len(problem) else 1))
