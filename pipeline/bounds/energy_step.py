"""Exact arithmetic on energies: the steps in which they move, and numbers that are surely not above the truth.

Energies of a problem with integer couplings move in fixed steps, so that a lower bound may be rounded up to the next
reachable energy. The sum of a configuration's terms is taken exactly (``math.fsum``) before it is rounded down.
"""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np

from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.contract import I8

FINEST = 24
"""Couplings count as multiples of some 2^-p with p up to this; finer ones have no step worth rounding to."""


def lower_energy(problem: Problem, spins: I8) -> float:
    """E(s) rounded down: a number that is surely not above the exact energy, and within one rounding of it."""
    values = spins.astype(np.float64)
    rows = np.repeat(np.arange(len(problem)), np.diff(problem.row_starts))
    once = rows < problem.neighbours
    terms = problem.couplings[once] * values[rows[once]] * values[problem.neighbours[once]]
    exact = [problem.offset, *terms.tolist(), *(problem.fields * values).tolist()]
    energy = math.fsum(exact)
    return energy if math.fsum([*exact, -energy]) >= 0.0 else math.nextafter(energy, -math.inf)


def energy_levels(problem: Problem) -> tuple[Fraction, Fraction]:
    """``(step, reference)``: reachable energies are ``reference + step * integer``; a step of 0 says nothing is known.

    Flipping spin i changes E by ``-2 s_i (h_i + sum_j J_ij s_j)``. The bracket differs from ``h_i + sum_j J_ij`` by an
    even multiple of couplings, so the change is a multiple of ``2 gcd(h_i + sum_j J_ij, 2 J_i1, 2 J_i2, ...)``, and the
    gcd of that over all spins divides every difference of two energies: 4 on a +-J lattice of even degree. Exact, for
    couplings and fields that are integers over some power of two up to 2^24.

    >>> square = Problem.from_arrays([0, 1, 2, 3], [1, 2, 3, 0], [1, 1, 1, -1])
    >>> energy_levels(square)[0], rounded_up(square, -2.8)
    (Fraction(4, 1), -2.0)
    """
    values = np.concatenate([problem.couplings, problem.fields])
    for power in range(FINEST + 1):
        scaled = np.ldexp(values, power)
        if np.all(scaled == np.rint(scaled)):
            break
    else:
        return Fraction(0), Fraction(0)
    if np.abs(scaled).sum() >= 2.0**52:
        return Fraction(0), Fraction(0)
    couplings = scaled[: len(problem.couplings)].astype(np.int64)
    fields = scaled[len(problem.couplings) :].astype(np.int64)
    filled = np.flatnonzero(np.diff(problem.row_starts))
    sums = fields.copy()
    sums[filled] += np.add.reduceat(couplings, problem.row_starts[filled]) if len(filled) else 0
    step = int(np.gcd.reduce(np.concatenate([sums, 2 * couplings])))
    total = int(fields.sum()) + int(couplings.sum()) // 2
    scale = Fraction(1, 2**power)
    return 2 * step * scale, Fraction(problem.offset) + total * scale


def rounded_up(problem: Problem, bound: float, levels: tuple[Fraction, Fraction] | None = None) -> float:
    """The lowest reachable energy that is not below a true ``bound``; ``levels`` saves finding them again."""
    step, reference = energy_levels(problem) if levels is None else levels
    if not step or not math.isfinite(bound):
        return bound
    reached = reference + math.ceil((Fraction(bound) - reference) / step) * step
    nearest = float(reached)
    return nearest if Fraction(nearest) <= reached else math.nextafter(nearest, -math.inf)
