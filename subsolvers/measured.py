"""Walks of a whole batch, measured: the one kernel behind every proposal of a walk.

The measuring times are drawn first, so that whole vectors are summed only for times at which a shot is measured; of
the others only the minima are wanted, for the hit probability, and these few amplitudes are watched. Where so many
configurations are minima that watching would cost memory and time, all times are summed instead.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import numpy.typing as npt

from patchwalk.subsolvers.coefficients import DOUBLE_DECAY, SINGLE_DECAY, series_coefficients
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I64, U64
from patchwalk.subsolvers.draws import next_below, next_unit
from patchwalk.subsolvers.hamiltonian import aligned, diagonal_vectors, held_vectors, padded, times_together
from patchwalk.subsolvers.outcomes import (
    CHUNK,
    LEAST_PROBABILITY,
    draw_number,
    lowest_of,
    minima_below,
    probability,
    share_below,
    sum_chunks,
)
from patchwalk.subsolvers.propagate import UNIFORM, longest_first, scale_spectrum, sum_series
from patchwalk.subsolvers.spectrum import cluster_energies, configuration_number, tie_tolerance, write_configuration

Vector = npt.NDArray[Any]


@compiled
def watched_entries(size: int) -> int:
    """Most amplitudes that are watched, counting each once for every measuring time: half a vector of memory."""
    return max(size // 4, 1024)


@compiled
def _times_in_full(shots: I64, times: F64, everything: bool) -> I64:
    """The measuring times that occur among the shots, or all, the longest first."""
    order = longest_first(times)
    kept = 0
    for moment in order:
        wanted = everything
        for shot in shots:
            wanted = wanted or shot == moment
        if wanted:
            order[kept] = moment
            kept += 1
    return order[:kept]


@compiled
def _shoot(real: Vector, imaginary: Vector, chunks: F64, total: float, unit: float, before: int, spins: I8) -> float:
    """Write one outcome into ``spins``; returns log q(before) - log q(outcome), finite whatever underflows."""
    number = draw_number(real, imaginary, chunks, unit * total)
    write_configuration(number, spins)
    back = max(probability(real, imaginary, before), LEAST_PROBABILITY)
    there = max(probability(real, imaginary, number), LEAST_PROBABILITY)
    return math.log(back) - math.log(there)


@compiled
def walk_and_measure(
    members: I64, fields: F64, couplings: F64, spins: I8, seeds: U64, rates: F64, times: F64, driver: int,
    from_incumbent: bool, workspace: Vector, outcomes: I8, drawn: F64, hit: F64, log_ratio: F64, applications: I64,
) -> None:  # fmt: skip
    """Answer the rows ``members``; the type of ``workspace`` is the precision. Other arrays are those of the batch."""
    size, moments, shots = 1 << fields.shape[1], times.shape[1], outcomes.shape[1]
    energies = np.empty(size)
    chunks = np.empty((size + CHUNK - 1) // CHUNK)
    room = np.empty(watched_entries(size) // moments, np.int64)
    nothing = room[:0]
    stream = np.empty(1, np.uint64)
    moment_of, unit_of = np.empty(shots, np.int64), np.empty(shots)
    workspace = aligned(workspace)
    decay = SINGLE_DECAY if workspace.itemsize == 4 else DOUBLE_DECAY
    stride = padded(size, workspace.itemsize)
    behind = diagonal_vectors(workspace.itemsize) * stride
    scaled, vectors = workspace[:behind], workspace[behind:]
    sums = vectors[held_vectors(driver) * stride :]
    terms = np.empty(moments, np.int64)
    for row in members:
        stream[0] = seeds[row]
        for shot in range(shots):
            moment_of[shot] = next_below(stream, moments)
            unit_of[shot] = next_unit(stream)
            drawn[row, shot] = times[row, moment_of[shot]]
        cluster_energies(fields[row], couplings[row], energies)
        before = configuration_number(spins[row])
        start = before if from_incumbent else UNIFORM
        ceiling = lowest_of(energies) + tie_tolerance(fields[row], couplings[row])
        minima = minima_below(energies, ceiling, room)
        watching = minima <= len(room)
        watched = room[:minima] if watching else nothing
        amplitudes = np.zeros((2, len(watched), moments))
        _centre, half_width, pull = scale_spectrum(energies, driver, rates[row], scaled)
        weights = series_coefficients(half_width, times[row], decay, terms)
        in_full = _times_in_full(moment_of, times[row], not watching)
        together = times_together(fields.shape[1], len(in_full), workspace.itemsize)
        applications[row] = 0
        share = 0.0
        for begin in range(0, len(in_full), together):
            group = in_full[begin : begin + together]
            applications[row] += sum_series(
                driver, size, scaled, scaled.dtype.type(pull), start, vectors, weights, terms, group,
                watched if begin == 0 else nothing, amplitudes,
            )  # fmt: skip
            for place in range(len(group)):
                real = sums[place * stride :][:size]
                imaginary = sums[(len(group) + place) * stride :][:size]
                total = sum_chunks(real, imaginary, chunks)
                if not watching:
                    share += share_below(energies, ceiling, real, imaginary) / total
                for shot in range(shots):
                    if moment_of[shot] == group[place]:
                        ratio = _shoot(real, imaginary, chunks, total, unit_of[shot], before, outcomes[row, shot])
                        if shot == 0:
                            log_ratio[row] = ratio
        for place in range(len(watched)):
            for moment in range(moments):
                share += amplitudes[0, place, moment] ** 2 + amplitudes[1, place, moment] ** 2
        hit[row] = min(share / moments, 1.0)


@compiled
def measure_laws(
    fields: F64, couplings: F64, spins: I8, seeds: U64, laws: F64, outcomes: I8, hit: F64, log_ratio: F64
) -> None:
    """Draw the shots of every row from its given law (B, 2^k)."""
    size = laws.shape[1]
    energies, chunks = np.empty(size), np.empty((size + CHUNK - 1) // CHUNK)
    real, imaginary = np.empty(size), np.zeros(size)
    stream = np.empty(1, np.uint64)
    for row in range(len(laws)):
        stream[0] = seeds[row]
        cluster_energies(fields[row], couplings[row], energies)
        for number in range(size):
            real[number] = math.sqrt(laws[row, number])
        total = sum_chunks(real, imaginary, chunks)
        ceiling = lowest_of(energies) + tie_tolerance(fields[row], couplings[row])
        hit[row] = share_below(energies, ceiling, real, imaginary) / total
        before = configuration_number(spins[row])
        for shot in range(outcomes.shape[1]):
            ratio = _shoot(real, imaginary, chunks, total, next_unit(stream), before, outcomes[row, shot])
            if shot == 0:
                log_ratio[row] = ratio
