"""Which calls of a run are replayed: all that have rows, or a stratified sample of them.

Strata are tenths of the stage by sizes k by who was asked.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from patchwalk.evidence.stored import StoredFile, StoredRun
from patchwalk.evidence.sweep_curves import CallName
from patchwalk.subsolvers.contract import I64
from patchwalk.subsolvers.draws import generator_for

SELECTION = 0x73656C65
"""The word of the stream that samples are drawn from."""


@dataclass(frozen=True, eq=False)
class Listed:
    """All calls of a run that have rows: their names, stratum i64 (N,) each, and which of them are ``selected``."""

    names: list[CallName]
    strata: I64
    selected: set[CallName]
    owners: list[str]


def listed_calls(stored: StoredFile, run: StoredRun, wanted: int | None, seed: int) -> Listed:
    """The calls of a run, and which are replayed: all, or a sample of about ``wanted`` of them, drawn from ``seed``."""
    query = "SELECT round, replica, place, stage, k, subsolver FROM calls WHERE run = ? ORDER BY round, replica, place"
    rows = [tuple(row) for row in stored.rows(query, (run.number,))]
    names = [CallName(*row[:3]) for row in rows]
    tenths = np.minimum(9, (10 * np.array([row[3] for row in rows], float)).astype(np.int64))
    sizes = np.array([row[4] for row in rows], np.int64)
    owners = [row[5] for row in rows]
    asked = np.unique(owners, return_inverse=True)[1].ravel()
    strata = np.unique(np.stack([sizes, tenths, asked]), axis=1, return_inverse=True)[1].ravel()
    chosen = selection(strata, wanted, seed)
    return Listed(names, strata, {names[index] for index in chosen}, owners)


def selection(strata: I64, wanted: int | None, seed: int) -> I64:
    """Indices of a stratified sample of about ``wanted`` of the calls, each stratum getting its share and one at least.

    A smaller sample of the same calls and seed is part of a larger one.

    >>> selection(np.array([0, 0, 1, 1]), 2, seed=1).size
    2
    """
    if wanted is None or wanted >= len(strata):
        return np.arange(len(strata))
    order = generator_for(seed, SELECTION).permutation(len(strata))
    chosen = []
    for stratum in np.unique(strata):
        own = order[strata[order] == stratum]
        chosen.append(own[: max(1, round(wanted * len(own) / len(strata)))])
    return np.sort(np.concatenate(chosen))
