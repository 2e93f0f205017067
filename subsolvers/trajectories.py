"""Dephasing by quantum trajectories: a pure state that moves under H and is struck by Z at random times.

Z is unitary, so jumps come at a constant rate, whatever the state (Dalibard, Castin & Molmer, PRL 68 (1992) 580): k
spins with ``jump_rate`` each wait exponentially long between jumps, and each jump strikes any spin alike. Averaged
over trajectories that is d rho/dt = -i [H, rho] + jump_rate * sum_i (Z_i rho Z_i - rho), exactly. Between jumps the
state moves by the Chebyshev series of propagate.py, once for its real part and, after the first jump, once for its
imaginary part; always in double precision. For a few spins density.py has the law itself.
"""

from __future__ import annotations

import math

import numpy as np

from patchwalk.subsolvers.coefficients import DOUBLE_DECAY, series_coefficients, series_terms
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I64, U64
from patchwalk.subsolvers.draws import combine, next_below, next_unit
from patchwalk.subsolvers.hamiltonian import advance, advance_few, aligned, held_vectors, padded
from patchwalk.subsolvers.lanes import width_in
from patchwalk.subsolvers.outcomes import CHUNK, draw_number, sum_chunks
from patchwalk.subsolvers.propagate import UNIFORM, scale_spectrum
from patchwalk.subsolvers.spectrum import cluster_energies, configuration_number, write_configuration

JUMPS = np.uint64(0x2A)
"""The word that tells a call's stream of jumps apart from its others."""


@compiled
def next_jump(stream: U64, rate: float, time: float) -> float:
    """When the next jump strikes after ``time``, if ``rate`` are expected in a unit of time; inf where none is."""
    unit = next_unit(stream)
    return time - math.log(1.0 - unit) / rate if rate > 0.0 else np.inf


@compiled
def strike(spin: int, real: F64, imaginary: F64) -> None:
    """Apply Z to one spin of a state (2^k,)."""
    for number in range(len(real)):
        if number >> spin & 1:
            real[number] = -real[number]
            imaginary[number] = -imaginary[number]


@compiled
def _copy(source: F64, target: F64) -> None:
    """target <- source: assigning to a slice does the same and compiles seconds longer."""
    for number in range(len(source)):
        target[number] = source[number]


@compiled
def _sum_from(
    driver: int, diagonal: F64, pull: float, source: F64, vectors: F64, weights: F64, terms: I64, columns: I64
) -> None:
    """Leave the even and the odd part of the series applied to a real ``source`` in the two sums of ``vectors``."""
    size = len(source)
    stride = padded(size, vectors.itemsize)
    now, earlier, spare = vectors[:size], vectors[stride:][:size], vectors[2 * stride :][:size]
    sums = vectors[held_vectors(driver) * stride :]
    _copy(source, now)
    for number in range(size):
        earlier[number] = 0.0
    for term in range(1, terms[0]):
        base, summed = (term % 2) * stride, 1 if term % 4 >= 2 else 0
        if size < width_in(now):
            advance_few(driver, diagonal, pull, now, spare, earlier, sums, base, weights, columns, summed, term)
        else:
            advance(driver, diagonal, pull, now, spare, earlier, sums, base, weights, columns, summed, term)
        if term == 1:
            for number in range(size):
                earlier[number] *= 0.5  # T_1 = H T_0, without the factor of two
        now, earlier = earlier, now


@compiled
def _move(
    driver: int, diagonal: F64, pull: float, reach: float, struck: bool, real: F64, imaginary: F64, aside: F64,
    vectors: F64,
) -> int:  # fmt: skip
    """Take a state through exp(-iHt) but for a global phase; returns the applications of H.

    ``reach`` is the half width of the spectrum times t; the state is real as long as it was not ``struck``.
    """
    size, terms, columns = len(real), np.empty(1, np.int64), np.zeros(1, np.int64)
    weights = series_coefficients(reach, np.ones(1), DOUBLE_DECAY, terms)
    stride = padded(size, vectors.itemsize)
    even = vectors[held_vectors(driver) * stride :][:size]
    odd = vectors[(held_vectors(driver) + 1) * stride :][:size]
    _sum_from(driver, diagonal, pull, real, vectors, weights, terms, columns)
    _copy(even, real)
    if not struck:
        _copy(odd, imaginary)
        return terms[0] - 1
    _copy(odd, aside)
    _sum_from(driver, diagonal, pull, imaginary, vectors, weights, terms, columns)
    for number in range(size):
        real[number] -= odd[number]
        imaginary[number] = aside[number] + even[number]
    return 2 * (terms[0] - 1)


@compiled
def follow_trajectory(
    driver: int, diagonal: F64, pull: float, half_width: float, start: int, time: float, jump_rate: float, jumps: U64,
    real: F64, imaginary: F64, aside: F64, vectors: F64,
) -> int:  # fmt: skip
    """Leave the state at ``time`` of one trajectory in ``real`` and ``imaginary``; returns the applications of H.

    ``diagonal`` and ``pull`` are those that :func:`scale_spectrum` makes; ``jumps`` is the stream that strikes.
    """
    size, spins = len(real), 0
    while 1 << spins < size:
        spins += 1
    for number in range(size):
        real[number] = math.sqrt(1.0 / size) if start == UNIFORM else 0.0
        imaginary[number] = 0.0
    if start != UNIFORM:
        real[start] = 1.0
    here, struck, applications = 0.0, False, 0
    while True:
        there = next_jump(jumps, spins * jump_rate, here)
        reach = half_width * (min(there, time) - here)
        applications += _move(driver, diagonal, pull, reach, struck, real, imaginary, aside, vectors)
        if there >= time:
            return applications
        strike(next_below(jumps, spins), real, imaginary)
        here, struck = there, True


@compiled
def dephased_shots(
    fields: F64, couplings: F64, spins: I8, seeds: U64, rates: F64, times: F64, jump_rates: F64, driver: int,
    from_incumbent: bool, workspace: F64, outcomes: I8, drawn: F64, applications: I64,
) -> None:  # fmt: skip
    """Answer a batch, every shot by a trajectory of its own; ``jump_rates`` (B,) are per spin and 1/energy.

    Measuring times and thresholds are those that the noiseless walk draws from the same seed.
    """
    size, moments = 1 << fields.shape[1], times.shape[1]
    energies, chunks = np.empty(size), np.empty((size + CHUNK - 1) // CHUNK)
    real, imaginary, aside = np.empty(size), np.empty(size), np.empty(size)
    stream, jumps = np.empty(1, np.uint64), np.empty(1, np.uint64)
    workspace = aligned(workspace)
    stride = padded(size, workspace.itemsize)
    diagonal, vectors = workspace[:stride], workspace[stride:]
    for row in range(len(fields)):
        stream[0], jumps[0] = seeds[row], combine(seeds[row], JUMPS)
        cluster_energies(fields[row], couplings[row], energies)
        _, half_width, pull = scale_spectrum(energies, driver, rates[row], diagonal)
        start = configuration_number(spins[row]) if from_incumbent else UNIFORM
        applications[row] = 0
        for shot in range(outcomes.shape[1]):
            time, unit = times[row, next_below(stream, moments)], next_unit(stream)
            applications[row] += follow_trajectory(
                driver, diagonal, pull, half_width, start, time, jump_rates[row], jumps, real, imaginary, aside, vectors
            )
            total = sum_chunks(real, imaginary, chunks)
            write_configuration(draw_number(real, imaginary, chunks, unit * total), outcomes[row, shot])
            drawn[row, shot] = time


@compiled
def plan_trajectories(
    seeds: U64, spins: int, shots: int, half_widths: F64, times: F64, jump_rates: F64, applications: I64, pieces: I64
) -> None:
    """Applications of H (B,) that :func:`dephased_shots` will need, and the most pieces (B,) of one trajectory.

    Jumps do not depend on the state, so the seeds tell; ``half_widths`` (B,) may be bounds.
    """
    stream, jumps = np.empty(1, np.uint64), np.empty(1, np.uint64)
    for row in range(len(seeds)):
        stream[0], jumps[0] = seeds[row], combine(seeds[row], JUMPS)
        applications[row] = pieces[row] = 0
        for _ in range(shots):
            time = times[row, next_below(stream, times.shape[1])]
            next_unit(stream)
            here, count, done = 0.0, 0, False
            while not done:
                there = next_jump(jumps, spins * jump_rates[row], here)
                needed = series_terms(half_widths[row] * (min(there, time) - here), DOUBLE_DECAY) - 1
                applications[row] += needed if count == 0 else 2 * needed
                count += 1
                done = there >= time
                if not done:
                    next_below(jumps, spins)
                    here = there
            pieces[row] = max(pieces[row], count)
