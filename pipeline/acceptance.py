"""The acceptance rules, written once: which shot of a call is taken, and whether its flips are.

Energies are recomputed here from the cluster, never taken from a subsolver. ``change`` is the energy change and ``T``
the temperature of a call:

* ``metropolis``: with probability min(1, exp(-change/T)), whatever the proposal (Metropolis et al., J. Chem. Phys. 21
  (1953) 1087); at T = 0 whatever does not raise the energy;
* ``hastings``: with probability min(1, exp(-change/T + log_ratio)), which samples the Boltzmann law exactly (Hastings,
  Biometrika 57 (1970) 97);
* ``threshold``: whenever the energy rises by at most T (Dueck & Scheuer, J. Comput. Phys. 90 (1990) 161, from memory);
* ``greedy``: whenever the energy does not rise.
"""

from __future__ import annotations

from typing import Literal, get_args

import numpy as np
import numpy.typing as npt

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64, U8, U64, ClusterBatch, Proposals, Status
from patchwalk.subsolvers.draws import combine, next_unit

AcceptanceRule = Literal["metropolis", "hastings", "threshold", "greedy"]
ACCEPTANCE_RULES: tuple[AcceptanceRule, ...] = get_args(AcceptanceRule)
METROPOLIS, HASTINGS, THRESHOLD, GREEDY = range(4)

FAILED = int(Status.FAILED)
ACCEPTANCE_WORD = np.uint64(0x6163636570740000)
"""Tells the acceptance draw apart from the subsolver's own draws under the same call seed."""


def judge(
    batch: ClusterBatch, proposals: Proposals, rule: AcceptanceRule = "metropolis"
) -> tuple[I64, F64, npt.NDArray[np.bool_]]:
    """The chosen shot i64 (B,), its energy change f64 (B,) and whether it is accepted, bool (B,).

    The shot of lowest energy is chosen, the first among ties. A failed call changes nothing and is not accepted; under
    ``hastings`` the same holds for a call whose ``log_ratio`` is nan, and a subsolver without one counts as symmetric.
    """
    rows = len(batch)
    chosen, change = np.zeros(rows, np.int64), np.zeros(rows)
    if batch.couplings is not None:
        _choose_dense(batch.fields, batch.couplings, batch.spins, proposals.outcomes, chosen, change)
    elif batch.edges is not None:
        edges = batch.edges
        _choose_sparse(
            batch.fields, edges.offsets, edges.pairs, edges.weights, batch.spins, proposals.outcomes, chosen, change
        )
    accepted = np.zeros(rows, np.bool_)
    ratio = proposals.log_ratio if rule == "hastings" and proposals.log_ratio is not None else np.zeros(rows)
    code = ACCEPTANCE_RULES.index(rule)
    _accept(change, batch.temperature, ratio, batch.seeds, proposals.status, code, accepted)
    return chosen, change, accepted


@compiled
def _choose_dense(fields: F64, couplings: F64, spins: I8, outcomes: I8, chosen: I64, change: F64) -> None:
    rows, size = fields.shape
    for row in range(rows):
        tolerance = 0.0
        for i in range(size):
            tolerance += abs(fields[row, i])
            for j in range(i):
                tolerance += abs(couplings[row, i, j])
        before = _dense_energy(fields[row], couplings[row], spins[row])
        best = np.inf
        for shot in range(outcomes.shape[1]):
            rise = _dense_energy(fields[row], couplings[row], outcomes[row, shot]) - before
            if rise < best - 1e-9 * tolerance:
                best = rise
                chosen[row] = shot
        change[row] = best


@compiled
def _dense_energy(fields: F64, couplings: F64, spins: I8) -> float:
    energy = 0.0
    for i in range(len(spins)):
        local = fields[i]
        for j in range(i):
            local += couplings[i, j] * spins[j]
        energy += local * spins[i]
    return energy


@compiled
def _choose_sparse(
    fields: F64, offsets: I64, pairs: I32, weights: F64, spins: I8, outcomes: I8, chosen: I64, change: F64
) -> None:
    for row in range(len(fields)):
        own_pairs, own_weights = pairs[offsets[row] : offsets[row + 1]], weights[offsets[row] : offsets[row + 1]]
        tolerance = np.abs(fields[row]).sum() + np.abs(own_weights).sum()
        before = _sparse_energy(fields[row], own_pairs, own_weights, spins[row])
        best = np.inf
        for shot in range(outcomes.shape[1]):
            rise = _sparse_energy(fields[row], own_pairs, own_weights, outcomes[row, shot]) - before
            if rise < best - 1e-9 * tolerance:
                best = rise
                chosen[row] = shot
        change[row] = best


@compiled
def _sparse_energy(fields: F64, pairs: I32, weights: F64, spins: I8) -> float:
    energy = 0.0
    for i in range(len(spins)):
        energy += fields[i] * spins[i]
    for edge in range(len(weights)):
        energy += weights[edge] * spins[pairs[edge, 0]] * spins[pairs[edge, 1]]
    return energy


@compiled
def _accept(
    change: F64, temperature: F64, log_ratio: F64, seeds: U64, status: U8, rule: int, accepted: npt.NDArray[np.bool_]
) -> None:
    stream = np.empty(1, np.uint64)
    for row in range(len(change)):
        if status[row] == FAILED:
            change[row] = 0.0
            continue
        if rule == GREEDY or (temperature[row] == 0.0 and rule != HASTINGS):
            accepted[row] = change[row] <= 0.0
            continue
        if rule == THRESHOLD:
            accepted[row] = change[row] <= temperature[row]
            continue
        rise = change[row] / temperature[row] if change[row] != 0.0 else 0.0
        exponent = log_ratio[row] - rise
        if exponent >= 0.0:
            accepted[row] = True
            continue
        stream[0] = combine(seeds[row], ACCEPTANCE_WORD)
        accepted[row] = next_unit(stream) < np.exp(exponent)
