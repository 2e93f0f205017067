"""Kernels of the low-rank semidefinite program: min <C, V V^T> over matrices V (v, r) with rows of length one.

Every row in turn goes against the pull of all others, which is the exact minimum over that row; with r(r + 1)/2 > v
the program has, for almost all C, no local minima that are not global (Burer & Monteiro, Math. Program. 95 (2003) 329;
Boumal, Voroninski & Bandeira, NeurIPS 2016, from memory).
"""

from __future__ import annotations

import math

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64, U64
from patchwalk.subsolvers.draws import next_gaussian
from patchwalk.subsolvers.neighbours import turn


@compiled
def random_rows(vectors: F64, stream: U64) -> None:
    """Rows of length one in random directions."""
    for i in range(len(vectors)):
        square = 0.0
        for k in range(vectors.shape[1]):
            vectors[i, k] = next_gaussian(stream)
            square += vectors[i, k] ** 2
        vectors[i] /= math.sqrt(square)


@compiled
def pull_on(i: int, starts: I64, neighbours: I32, weights: F64, vectors: F64, pull: F64) -> None:
    """Fill ``pull`` (r,) with sum_j C_ij v_j, four neighbours at a time, which spares loads and stores."""
    pull[:] = 0.0
    place, stop = starts[i], starts[i + 1]
    while place + 4 <= stop:
        w0, w1, w2, w3 = weights[place], weights[place + 1], weights[place + 2], weights[place + 3]
        j0, j1, j2, j3 = neighbours[place], neighbours[place + 1], neighbours[place + 2], neighbours[place + 3]
        for k in range(len(pull)):
            pull[k] += (w0 * vectors[j0, k] + w1 * vectors[j1, k]) + (w2 * vectors[j2, k] + w3 * vectors[j3, k])
        place += 4
    while place < stop:
        for k in range(len(pull)):
            pull[k] += weights[place] * vectors[neighbours[place], k]
        place += 1


@compiled
def mix(starts: I64, neighbours: I32, weights: F64, vectors: F64, sweeps: int) -> float:
    """Sweeps over all rows, in place; returns by how much the last one lowered <C, V V^T>."""
    gain = 0.0
    pull = np.empty(vectors.shape[1])
    for _ in range(sweeps):
        gain = 0.0
        for i in range(len(vectors)):
            pull_on(i, starts, neighbours, weights, vectors, pull)
            square, along = 0.0, 0.0
            for k in range(len(pull)):
                square += pull[k] * pull[k]
                along += pull[k] * vectors[i, k]
            length = math.sqrt(square)
            gain += 2.0 * (along + length)
            if length > 0.0:
                for k in range(len(pull)):
                    vectors[i, k] = -pull[k] / length
    return gain


@compiled
def multipliers(starts: I64, neighbours: I32, weights: F64, vectors: F64, diagonal: F64) -> None:
    """Fill ``diagonal`` (v,) with v_i . sum_j C_ij v_j; their sum is <C, V V^T>."""
    pull = np.empty(vectors.shape[1])
    for i in range(len(vectors)):
        pull_on(i, starts, neighbours, weights, vectors, pull)
        along = 0.0
        for k in range(len(pull)):
            along += pull[k] * vectors[i, k]
        diagonal[i] = along


@compiled
def descend_to_rest(starts: I64, neighbours: I32, weights: F64, signs: I8, local: F64, tolerance: float) -> None:
    """Flip the steepest sign, one after the other, until none lowers the energy by more than ``tolerance``."""
    while True:
        best, chosen = -tolerance, -1
        for i in range(len(signs)):
            change = -4.0 * signs[i] * local[i]
            if change < best:
                best, chosen = change, i
        if chosen < 0:
            return
        turn(chosen, signs, local, starts, neighbours, weights)


@compiled
def round_rows(
    starts: I64, neighbours: I32, weights: F64, vectors: F64, trials: int, tolerance: float, stream: U64, best: I8
) -> float:
    """Signs by random hyperplanes, each then brought down by single flips; the best goes into ``best`` (v,).

    Returns its x^T C x. What ``best`` holds at the start counts as the first trial.
    """
    size, rank = vectors.shape
    signs, local, normal = best.copy(), np.empty(size), np.empty(rank)
    lowest = math.inf
    for trial in range(trials + 1):
        if trial > 0:
            for k in range(rank):
                normal[k] = next_gaussian(stream)
            for i in range(size):
                along = 0.0
                for k in range(rank):
                    along += normal[k] * vectors[i, k]
                signs[i] = 1 if along >= 0.0 else -1
        for i in range(size):
            local[i] = 0.0
            for place in range(starts[i], starts[i + 1]):
                local[i] += weights[place] * signs[neighbours[place]]
        descend_to_rest(starts, neighbours, weights, signs, local, tolerance)
        energy = 0.0
        for i in range(size):
            energy += signs[i] * local[i]
        if energy < lowest - tolerance:
            lowest = energy
            best[:] = signs
    return lowest
