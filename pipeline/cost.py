"""Fixed prices of counted work: what decisions rest on, so that no decision ever rests on the clock.

The prices are round figures in seconds for one core of a present-day machine, as ``patchwalk backends --time`` measures
them. They need only be right within a factor of a few: they cut batches into slices, weigh rules against each other
and say which calls are dear enough to be recorded one by one.
"""

from __future__ import annotations

import numpy as np

from patchwalk.subsolvers.contract import F64, Work

PRICES = {
    "amplitude_updates": 4.5e-10,
    "spin_updates": 5e-9,
    "energies": 1.5e-9,
    "table_entries": 2e-9,
    "load_s": 1.0,
    "evolve_s": 1.0,
    "read_s": 1.0,
    "wait_s": 1.0,
}
"""Seconds per counted unit; seconds that a device reports or forecasts about itself count as they are."""

DEAR_SECONDS = 1.2e-6
"""A call at this price or above has a row of its own in the run file; cheaper ones a seeded share and exact tallies."""

SLICE_SECONDS = 1.0
"""A slice of a batch is meant to last no longer than this, or one call."""


def priced(work: Work, rows: int) -> F64:
    """Seconds (rows,) that each call's counted work costs at the fixed prices."""
    seconds = np.zeros(rows)
    for name, price in PRICES.items():
        counted = getattr(work, name)
        if counted is not None:
            seconds += price * counted
    return seconds


def sweep_seconds(spins: int, degree: float, replicas: int) -> float:
    """Seconds at fixed prices of one sweep of all replicas; several together are swept in vector lanes."""
    update = 5.5e-10 + 3e-11 * degree if replicas > 5 else 2.6e-9 + 4e-11 * degree
    return replicas * spins * update
