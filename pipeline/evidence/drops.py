"""What a call is worth on average: the expected energy decrease under the acceptance rule, exactly wherever it can be.

The *drop* of a call is the sum over outcomes of q a (E - E'): q the law of the best of its shots, a the chance that the
acceptance rule takes it, E - E' the decrease. It is signed: what is accepted uphill counts against the call. Beside it
stand the *fall*, its positive part, and the chance to improve.

Exact, without drawing anything:

* where the law of one shot is known (:mod:`patchwalk.evidence.shot_laws`): quantum subsolvers, Boltzmann draws of up to
  14 spins, uniform draws of up to 20;
* for enumeration and elimination, whose minimum is what it is.

The best of m independent shots has the law of an order statistic: with S the chance of one shot to lie above a level,
S^m is that of the best. Everybody else is asked several times, first with the call's own seed and then with seeds
derived from it; the draw of the acceptance rule is averaged out all the same.
"""

from __future__ import annotations

import dataclasses
import time
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from patchwalk.acceptance import AcceptanceRule, judge
from patchwalk.engine import ask
from patchwalk.evidence.shot_laws import SURVEYED_SPINS, best_of, shot_laws
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, U8, U64, ClusterBatch, Proposals, Status, Subsolver, Work
from patchwalk.subsolvers.draws import combine
from patchwalk.subsolvers.elimination import Elimination
from patchwalk.subsolvers.enumeration import Enumeration
from patchwalk.subsolvers.neighbours import with_matrices
from patchwalk.subsolvers.propagate import level_table
from patchwalk.subsolvers.spectrum import (
    TIE_SHARE,
    cluster_energies,
    configuration_number,
    lowest_of,
    tie_tolerance,
)

REPETITIONS = 16
"""How often a call is asked where its drop is only sampled."""

LAW_ENTRIES = 1 << 22
"""Probabilities held at a time: 32 MB."""

REPEAT_WORD = np.uint64(0x7265706561740000)
"""Tells the seeds of repeated calls apart from everything else drawn under a call's seed."""


@dataclass(frozen=True, eq=False)
class Drops:
    """What ``B`` calls are worth, arrays (B,): energies are in the problem's units.

    ``exact`` bool, or sampled; ``mean_drop`` f64, signed, and its standard error ``drop_error``, 0 where exact;
    ``mean_fall`` f64, the positive part of the drop; ``improve_probability`` f64; ``hit_probability`` f64, that one
    shot lands in any minimum, nan where minima are not known. ``seconds`` f64, measured, and ``work``, ``status`` u8
    and ``messages`` are those of the call asked once with its own seed; a failed call changes nothing, its drop is 0.
    """

    exact: npt.NDArray[np.bool_]
    mean_drop: F64
    drop_error: F64
    mean_fall: F64
    improve_probability: F64
    hit_probability: F64
    seconds: F64
    work: Work
    status: U8
    messages: tuple[str, ...]

    def __len__(self) -> int:
        return len(self.mean_drop)


def drops_of(
    subsolver: Subsolver, batch: ClusterBatch, acceptance: AcceptanceRule = "metropolis", repetitions: int = REPETITIONS
) -> Drops:
    """What each call of the batch is worth; row b is a function of row b alone, ``seconds`` apart.

    ``repetitions`` (at least 2) is how often calls are asked whose drop is only sampled.
    """
    began = time.perf_counter()
    answer = ask(subsolver, batch)
    seconds = np.full(len(batch), (time.perf_counter() - began) / len(batch))
    found = _worth(subsolver, batch, answer, acceptance, repetitions)
    failed = answer.status == Status.FAILED
    found.table[failed] = (0.0, 0.0, 0.0, 0.0, np.nan)
    drop, error, fall, improve, hit = (np.ascontiguousarray(column) for column in found.table.T)
    exact = np.full(len(batch), found.exact) & ~failed
    return Drops(exact, drop, error, fall, improve, hit, seconds, answer.work, answer.status, answer.messages)


@dataclass(frozen=True, eq=False)
class _Worth:
    """Columns drop, error, fall, chance to improve and hit probability (B, 5), and whether they are exact."""

    exact: bool
    table: F64


def _worth(
    subsolver: Subsolver, batch: ClusterBatch, answer: Proposals, acceptance: AcceptanceRule, repetitions: int
) -> _Worth:
    if isinstance(subsolver, (Enumeration, Elimination)) and subsolver.draw == "minimum":
        return _Worth(True, _of_minima(batch, answer))
    if np.all(answer.status == Status.FAILED):
        return _Worth(False, np.zeros((len(batch), 5)))
    exact_chance = acceptance != "hastings" or subsolver.balance == "symmetric"
    if exact_chance:
        table = _from_laws(subsolver, batch, answer.outcomes.shape[1], _plain(acceptance))
        if table is not None:
            return _Worth(True, table)
    return _Worth(False, _from_samples(subsolver, batch, answer, acceptance, max(2, repetitions)))


def _plain(acceptance: AcceptanceRule) -> AcceptanceRule:
    """The rule where the ratio of proposal densities is one."""
    return "metropolis" if acceptance == "hastings" else acceptance


def _of_minima(batch: ClusterBatch, answer: Proposals) -> F64:
    """Whoever draws a minimum has the drop of any of them, and every rule accepts it."""
    _, change, _ = judge(batch, answer, "greedy")
    fall = np.maximum(0.0, -change)
    improves = (change < -tie_tolerances(batch)).astype(np.float64)
    return np.stack([fall, np.zeros(len(batch)), fall, improves, np.ones(len(batch))], axis=1)


def tie_tolerances(batch: ClusterBatch) -> F64:
    """Energy differences (B,) below which configurations are tied."""
    weights = np.abs(batch.fields).sum(axis=1)
    if batch.couplings is not None:
        weights = weights + 0.5 * np.abs(batch.couplings).sum(axis=(1, 2))
    elif batch.edges is not None:
        rows = np.repeat(np.arange(len(batch)), np.diff(batch.edges.offsets))
        weights = weights + np.bincount(rows, np.abs(batch.edges.weights), len(batch))
    return TIE_SHARE * weights


def _from_laws(subsolver: Subsolver, batch: ClusterBatch, shots: int, acceptance: AcceptanceRule) -> F64 | None:
    """The exact table of a subsolver that tells the law of its shots; None for one that does not."""
    matrices = with_matrices(batch)
    if matrices.couplings is None or batch.size > 24:
        return None
    together = max(1, LAW_ENTRIES >> batch.size)
    parts = []
    for first in range(0, len(batch), together):
        part = matrices.rows(first, min(first + together, len(batch)))
        laws = shot_laws(subsolver, part)
        if laws is None:
            return None
        parts.append(_weighed(part, laws, shots, acceptance))
    return np.concatenate(parts)


def _weighed(batch: ClusterBatch, laws: F64, shots: int, acceptance: AcceptanceRule) -> F64:
    assert batch.couplings is not None
    best = laws
    if shots > 1:
        best = np.stack([
            best_of(law, level_table(batch.fields[row], batch.couplings[row]), shots) for row, law in enumerate(laws)
        ])  # fmt: skip
    table = np.zeros((len(batch), 5))
    rule = ("metropolis", "threshold", "greedy").index(acceptance)
    _weigh(batch.fields, batch.couplings, batch.spins, batch.temperature, laws, best, rule, table)
    return table


@compiled
def _weigh(
    fields: F64, couplings: F64, spins: I8, temperature: F64, laws: F64, best: F64, rule: int, table: F64
) -> None:
    """Fill ``table`` (B, 5) from the laws of one shot and of the best one; ``rule`` counts the names in _weighed."""
    energies = np.empty(laws.shape[1])
    for row in range(len(laws)):
        cluster_energies(fields[row], couplings[row], energies)
        tolerance = tie_tolerance(fields[row], couplings[row])
        ceiling = lowest_of(energies) + tolerance
        before = energies[configuration_number(spins[row])]
        drop, fall, improve, hit, total, total_best = 0.0, 0.0, 0.0, 0.0, 0.0, 0.0
        for number in range(len(energies)):
            share, change = best[row, number], energies[number] - before
            total += laws[row, number]
            total_best += share
            if energies[number] <= ceiling:
                hit += laws[row, number]
            if change <= 0.0:
                drop -= share * change
                fall -= share * change
                if change < -tolerance:
                    improve += share
            elif rule == 0 and temperature[row] > 0.0:
                drop -= share * change * np.exp(-change / temperature[row])
            elif rule == 1 and change <= temperature[row]:
                drop -= share * change
        table[row, 0] = drop / total_best
        table[row, 2] = fall / total_best
        table[row, 3] = improve / total_best
        table[row, 4] = hit / total


def _from_samples(
    subsolver: Subsolver, batch: ClusterBatch, first: Proposals, acceptance: AcceptanceRule, repetitions: int
) -> F64:
    """Averages over repeated calls; one that fails when repeated counts as no change."""
    drops, falls, improved = (np.zeros((len(batch), repetitions)) for _ in range(3))  # a row's sum is its own
    shots, tolerances = [], tie_tolerances(batch)
    for turn in range(repetitions):
        asked = batch if turn == 0 else dataclasses.replace(batch, seeds=repeated_seeds(batch.seeds, turn))
        answer = first if turn == 0 else ask(subsolver, asked)
        _, change, _ = judge(asked, answer, "greedy")
        chance = acceptance_chances(change, batch.temperature, acceptance, answer.log_ratio)
        drops[:, turn] = -change * chance
        falls[:, turn] = np.maximum(0.0, -change) * chance
        improved[:, turn] = (change < -tolerances) * chance
        shots.append(answer.outcomes)
    error = drops.std(axis=1, ddof=1) / np.sqrt(repetitions)
    hits = hit_shares(batch, np.concatenate(shots, axis=1))
    return np.stack([drops.mean(axis=1), error, falls.mean(axis=1), improved.mean(axis=1), hits], axis=1)


def acceptance_chances(change: F64, temperature: F64, acceptance: AcceptanceRule, log_ratio: F64 | None) -> F64:
    """The chance f64 (B,) that the rule accepts a call of this energy change: what ``judge`` draws from."""
    if acceptance == "greedy":
        return (change <= 0.0).astype(np.float64)
    if acceptance == "threshold":
        return (change <= temperature).astype(np.float64)
    ratio = np.zeros(len(change)) if acceptance == "metropolis" or log_ratio is None else log_ratio
    cold = temperature == 0.0
    with np.errstate(over="ignore", invalid="ignore"):
        exponent = ratio - np.divide(change, temperature, out=np.zeros(len(change)), where=~cold)
        chance = np.exp(np.minimum(0.0, exponent))
    return np.asarray(np.where(cold, change <= 0.0, np.nan_to_num(chance, nan=0.0)), np.float64)


def repeated_seeds(seeds: U64, turn: int) -> U64:
    """Seeds (B,) for asking the same calls once more, from their own."""
    fresh = np.empty(len(seeds), np.uint64)
    _derive_seeds(seeds, np.uint64(int(REPEAT_WORD) + turn), fresh)
    return fresh


@compiled
def _derive_seeds(seeds: U64, word: np.uint64, fresh: U64) -> None:
    for row in range(len(seeds)):
        fresh[row] = combine(seeds[row], word) >> np.uint64(1)


def hit_shares(batch: ClusterBatch, outcomes: I8) -> F64:
    """The share f64 (B,) of the outcomes i8 (B, m, k) in a minimum, found by enumeration; nan above 20 spins."""
    shares = np.full(len(batch), np.nan)
    matrices = with_matrices(batch) if batch.size <= SURVEYED_SPINS else batch
    if matrices.couplings is not None and batch.size <= SURVEYED_SPINS:
        _count_hits(matrices.fields, matrices.couplings, outcomes, np.empty(1 << batch.size), shares)
    return shares


@compiled
def _count_hits(fields: F64, couplings: F64, outcomes: I8, energies: F64, shares: F64) -> None:
    for row in range(len(fields)):
        cluster_energies(fields[row], couplings[row], energies)
        ceiling = lowest_of(energies) + tie_tolerance(fields[row], couplings[row])
        hits = 0
        for shot in range(outcomes.shape[1]):
            hits += energies[configuration_number(outcomes[row, shot])] <= ceiling
        shares[row] = hits / outcomes.shape[1]
