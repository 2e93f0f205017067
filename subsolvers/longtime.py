"""The law of a walk measured at a random time of an endless interval, by dense diagonalisation."""

from __future__ import annotations

import numpy as np
from scipy.linalg import eigh

from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.drivers import DRIVERS, driver_matrix
from patchwalk.subsolvers.hamiltonian import half_width_within
from patchwalk.subsolvers.propagate import UNIFORM

DENSE_SPINS = 11
"""Largest cluster that is diagonalised: 2^11 levels take a few seconds."""

SAME_LEVEL = 1e-10
"""Levels closer than this share of the spectrum's half width count as one: to tell them apart takes ten thousand
million times longer than the fastest motion of the walk.
"""


def long_time_law(diagonal: F64, hopping: float, driver: str, start: int) -> F64:
    """The infinite-time average f64 (N,) of |<x| exp(-iHt) |start>|^2 for H = -hopping * D + diag(diagonal).

    The interference between different levels averages out: what remains is sum_E |<x| P_E |start>|^2 with the
    projectors P_E on whole levels (degenerate ones together). ``start`` is a configuration's number, or -1 for the
    uniform superposition.
    """
    size = len(diagonal)
    spins = size.bit_length() - 1
    unit = half_width_within(DRIVERS.index(driver), spins, hopping, float(np.ptp(diagonal)))
    matrix = (-hopping / unit) * driver_matrix(driver, spins)
    matrix[np.diag_indices(size)] += (diagonal - diagonal.mean()) / unit
    levels, vectors = eigh(matrix, overwrite_a=True, check_finite=False, driver="evd")
    overlaps = vectors.sum(axis=0) / np.sqrt(size) if start == UNIFORM else vectors[start].copy()
    begins = np.flatnonzero(np.diff(levels, prepend=-np.inf) > SAME_LEVEL)
    amplitudes = np.add.reduceat(vectors * overlaps, begins, axis=1)
    law: F64 = np.square(amplitudes).sum(axis=1)
    return law


def long_time_bytes(spins: int) -> int:
    """Memory for one diagonalisation: the matrix, LAPACK's two more, and what is made of the vectors."""
    return 6 * 8 << 2 * spins


def long_time_updates(spins: int) -> int:
    """Its work in amplitude updates: N^3 / 2, which the clock bears out for the larger clusters."""
    return 1 << 3 * spins - 1
