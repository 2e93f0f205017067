"""The law of one shot of a call, where it is known without drawing anything, and that of the best of several.

Known are those of whoever tells them, as all quantum subsolvers do: ``distribution(batch)`` without noise and
``noisy_distribution(batch)`` with noise (control errors are then those of the call's own seed); Boltzmann draws of
enumeration and elimination up to 14 spins; uniform draws up to 20.
"""

from __future__ import annotations

import numpy as np

from patchwalk.subsolvers.contract import F64, ClusterBatch, Subsolver
from patchwalk.subsolvers.elimination import Elimination
from patchwalk.subsolvers.enumeration import Enumeration
from patchwalk.subsolvers.propagate import level_table
from patchwalk.subsolvers.spectrum import tie_tolerance
from patchwalk.subsolvers.uniform import Uniform

BOLTZMANN_SPINS = 14
"""Largest cluster whose Boltzmann law is written down."""

SURVEYED_SPINS = 20
"""Largest cluster whose minima are found by enumeration, and whose uniform law is written down."""


def shot_laws(subsolver: Subsolver, batch: ClusterBatch) -> F64 | None:
    """The law f64 (B, 2^k) of one shot of every call, noise and all; None where it is not known."""
    if isinstance(subsolver, Uniform) and batch.size <= SURVEYED_SPINS:
        return np.full((len(batch), 1 << batch.size), 0.5**batch.size)
    if isinstance(subsolver, (Enumeration, Elimination)):
        if subsolver.draw == "boltzmann" and batch.size <= BOLTZMANN_SPINS:
            return np.stack([_boltzmann_law(batch, row) for row in range(len(batch))])
        return None
    noise = getattr(subsolver, "noise", None)
    quiet = noise is None or noise.off
    tell = getattr(subsolver, "distribution" if quiet else "noisy_distribution", None)
    if not callable(tell):
        return None
    try:
        laws = np.asarray(tell(batch), np.float64)
    except ValueError:  # only samples are known
        return None
    return laws if laws.shape == (len(batch), 1 << batch.size) else None


def _boltzmann_law(batch: ClusterBatch, row: int) -> F64:
    """exp(-E/T) / Z of one cluster, even over the minima at T = 0."""
    assert batch.couplings is not None
    above = level_table(batch.fields[row], batch.couplings[row])
    above -= above.min()
    if batch.temperature[row] > 0.0:
        law = np.exp(-above / batch.temperature[row])
    else:
        law = (above <= tie_tolerance(batch.fields[row], batch.couplings[row])).astype(np.float64)
    return np.asarray(law / law.sum())


def best_of(law: F64, energies: F64, shots: int) -> F64:
    """The law f64 (N,) of the lowest of so many independent draws from ``law``, by order statistics.

    >>> best_of(np.array([0.5, 0.5]), np.array([1.0, 0.0]), 2)
    array([0.25, 0.75])
    """
    order = np.argsort(energies, kind="stable")
    above = np.maximum(0.0, 1.0 - np.cumsum(law[order]) / law.sum())
    above[-1] = 0.0
    powers = above**shots
    best = np.empty(len(law))
    best[order] = np.concatenate([[1.0], powers[:-1]]) - powers
    return best
