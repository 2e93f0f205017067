"""Single-spin Metropolis sweeps over the whole problem: the classical carrier between cluster calls.

Local fields are carried along, so that a refused flip costs one comparison and an accepted one a walk over the
spin's neighbours. Metropolis et al., J. Chem. Phys. 21 (1953) 1087.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from patchwalk.problem.ising import Problem
from patchwalk.search.sweep_colours import LANES, sweep_listed, sweep_packed
from patchwalk.search.sweep_replicas import NARROW, LaneTables, lane_tables, sweep_side_by_side
from patchwalk.search.sweep_rows import fields_from_matrix, sweep_matrix
from patchwalk.search.sweep_tables import U32, Batches, batches_of, palette_of
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64, U64
from patchwalk.subsolvers.draws import happens, next_unit, stream_for
from patchwalk.subsolvers.lanes_decisions import coldness_at
from patchwalk.subsolvers.neighbours import TIE_CHANCE, turn

LARGEST_CACHED_MATRIX = 2048
"""Spins up to which a full matrix (32 MB) stays in cache; replicas of larger dense problems are swept in lanes."""


@dataclass(frozen=True, eq=False)
class Carrier:
    """Sweeps over one problem, in the representation that suits its couplings. Made by :func:`carrier_for`.

    ``representation`` is how a single replica is swept:

    - ``"colours"``: batches of spins that do not touch, decided in lanes (``sweep_colours``);
    - ``"matrix"``: in order, decided a row of lanes ahead, with rows of a full matrix (``sweep_rows``);
    - ``"lists"``: in order, one by one (:func:`metropolis_sweep`).

    Replicas together are swept in lanes (``sweep_replicas``) but for small dense problems; in lanes a replica takes
    another path than :meth:`sweep` takes from the same seed, of the same law. What a call does depends on its
    arguments alone, and calls may run in several threads at once (kernels run without the interpreter lock).
    ``sweeps=0`` compiles and flips nothing.
    """

    problem: Problem
    batches: Batches
    representation: str

    def sweep(self, spins: I8, local_fields: F64, temperature: float, seed: int, sweeps: int = 1) -> float:
        """Sweep one replica in place; returns the energy change.

        ``spins`` i8 (n,) and their ``local_fields`` f64 (n,), h_i + sum_j J_ij s_j, are both carried along;
        ``temperature`` in energy units, 0 allowed.
        """
        stream, cold = stream_for(seed), coldness_at(temperature)
        if self.representation == "matrix":
            return sweep_matrix(self._matrix, spins, local_fields, cold, stream, sweeps)
        if self.representation == "lists":
            change = 0.0
            for _ in range(sweeps):
                change += metropolis_sweep(*self._lists, spins, local_fields, float(temperature), stream)
            return change
        if self._packed is not None:
            return sweep_packed(*self._packed, spins, local_fields, cold, stream, sweeps)
        return sweep_listed(*self._batched_lists, spins, local_fields, cold, stream, sweeps)

    @property
    def together(self) -> int:
        """How many replicas :meth:`sweep_replicas` takes at once: to divide so many between threads gains nothing."""
        small = self.representation == "matrix" and len(self.problem) <= LARGEST_CACHED_MATRIX
        return 1 if small else NARROW

    def sweep_replicas(
        self, spins: I8, local_fields: F64 | None, temperatures: F64, seeds: U64, sweeps: int = 1
    ) -> F64:
        """Sweep R replicas in place, each at its own temperature; returns their energy changes f64 (R,).

        ``spins`` i8 (R, n), ``local_fields`` f64 (R, n), ``temperatures`` f64 (R,), ``seeds`` u64 (R,). What becomes
        of a replica depends on its own row alone, to the last bit, whatever the others are.

        Small dense problems are swept one replica after the other, carrying ``local_fields`` along as :meth:`sweep`
        does. All others are swept in lanes, 16 or 32 replicas at a time (1 takes as long as 16, 17 as 32; fewer
        than about six are faster through :meth:`sweep`, each by itself), and
        ``local_fields`` are filled in afresh from the spins at the end, to the bit what ``Problem.local_fields``
        gives, which takes about as long as one sweep. With None they are not wanted: faster in lanes, slower for
        dense problems, which then have to find them first.
        """
        if self.together == 1:
            return self._one_after_the_other(spins, local_fields, temperatures, seeds, sweeps)
        return sweep_side_by_side(self.problem, self._lane_tables, spins, local_fields, temperatures, seeds, sweeps)

    def _one_after_the_other(
        self, spins: I8, local_fields: F64 | None, temperatures: F64, seeds: U64, sweeps: int
    ) -> F64:
        changes = np.empty(len(spins))
        for row, own in enumerate(spins):
            if local_fields is None:
                fields = fields_from_matrix(self._matrix, self.problem.fields, own)
            else:
                fields = local_fields[row]
            changes[row] = self.sweep(own, fields, float(temperatures[row]), int(seeds[row]), sweeps)
        return changes

    @cached_property
    def _lists(self) -> tuple[I64, I32, F64]:
        return self.problem.row_starts, self.problem.neighbours, self.problem.couplings

    @cached_property
    def _batched_lists(self) -> tuple[U32, I64, I64, U32, F64]:
        row_starts, neighbours, couplings = self._lists
        return self.batches.order, self.batches.starts, row_starts, neighbours.view(np.uint32), couplings

    @cached_property
    def _packed(self) -> tuple[U32, I64, U32, U32, F64] | None:
        palette = palette_of(self.problem, self.batches)
        if palette is None:
            return None
        return self.batches.order, self.batches.starts, palette.row_starts, palette.words, palette.values

    @cached_property
    def _matrix(self) -> F64:
        return self.problem.matrix.toarray()

    @cached_property
    def _lane_tables(self) -> LaneTables:
        return lane_tables(self.problem, self.batches)


def carrier_for(problem: Problem) -> Carrier:
    """The carrier of a problem, to be made once. How it represents the couplings depends on counts alone.

    Colours where their batches fill at least a quarter of the lanes, else a full matrix where it takes at most eight
    times the memory of the couplings' lists, else the lists.

    >>> carrier_for(Problem.from_arrays(range(100), [*range(1, 100), 0], [1.0] * 100)).representation
    'colours'
    """
    batches = batches_of(problem)
    if 4 * len(problem) >= LANES * batches.rows_of(LANES):
        return Carrier(problem, batches, "colours")
    affordable = len(problem) ** 2 <= 12 * len(problem.couplings)
    return Carrier(problem, batches, "matrix" if affordable else "lists")


@compiled
def metropolis_sweep(
    row_starts: I64,
    neighbours: I32,
    couplings: F64,
    spins: I8,
    local_fields: F64,
    temperature: float,
    stream: U64,
) -> float:
    """One sweep over all spins in order, in place; returns the energy change.

    At temperature zero no flip that raises the energy is made. One that leaves it as it is is made nine times in ten:
    were it always made, the domain walls of a chain would travel with the sweep and never meet (computed here, ring
    of 100 spins); were it made half the time, glasses of +-J couplings would cool worse.
    """
    change = 0.0
    hopeless = 40.0 * temperature  # exp(-40) is below any chance worth a random number
    coldness = 1.0 / temperature
    for spin in range(len(spins)):
        rise = -2.0 * spins[spin] * local_fields[spin]
        if rise > 0.0:
            if rise > hopeless or not happens(stream, rise * coldness):
                continue
        elif rise == 0.0 and next_unit(stream) >= TIE_CHANCE:
            continue
        change += rise
        turn(spin, spins, local_fields, row_starts, neighbours, couplings)
    return change


@compiled
def descend(row_starts: I64, neighbours: I32, couplings: F64, spins: I8, local_fields: F64, tolerance: float) -> float:
    """Flip spins in order while any flip lowers the energy by more than ``tolerance``; returns the energy change."""
    change = 0.0
    moving = True
    while moving:
        moving = False
        for spin in range(len(spins)):
            rise = -2.0 * spins[spin] * local_fields[spin]
            if rise < -tolerance:
                change += rise
                turn(spin, spins, local_fields, row_starts, neighbours, couplings)
                moving = True
    return change


@compiled
def flip_accepted(
    row_starts: I64,
    neighbours: I32,
    couplings: F64,
    all_spins: I8,
    all_local_fields: F64,
    energies: F64,
    replicas: I64,
    members: I32,
    outcomes: I8,
    chosen: I64,
    change: F64,
    accepted: npt.NDArray[np.bool_],
    before: F64,
) -> None:
    """Put the chosen outcomes (B, m, k) of accepted calls into their replicas; ``before`` gets the energies before."""
    for row in range(len(members)):
        replica = replicas[row]
        before[row] = energies[replica]
        if not accepted[row]:
            continue
        energies[replica] += change[row]
        spins, local_fields = all_spins[replica], all_local_fields[replica]
        for i in range(members.shape[1]):
            spin = members[row, i]
            if spins[spin] != outcomes[row, chosen[row], i]:
                turn(spin, spins, local_fields, row_starts, neighbours, couplings)
