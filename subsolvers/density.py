"""The law of a dephased evolution of a few spins, exactly: the density matrix itself is followed.

d rho/dt = -i [H(t), rho] + jump_rate * sum_i (Z_i rho Z_i - rho), H(t) = -A(t) * mover + B(t) * diagonal: what the
trajectories of trajectories.py and anneal_trajectories.py are on average. A and B are straight lines over a step, so
that rho is a power series in time whose coefficients follow from the two before,

    s[n+1] = length / (n+1) * (G s[n] + (change of G over the step) s[n-1]),      G the generator as the step begins,

and long steps are cut until the generator turns by at most LONGEST in each piece.
"""

from __future__ import annotations

import math

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.drivers import DRIVERS, driver_matrix
from patchwalk.subsolvers.steps import A_BEGIN, A_END, B_BEGIN, B_END, BEGIN, END, moving_norm, series_passes

MATRIX_SPINS = 4
"""Largest cluster whose density matrix is followed, for milliseconds a call."""

LONGEST, NEGLIGIBLE = 4.0, 1e-16
"""Norm of the generator times a piece, and what the series of a piece may leave out."""


def constant_steps(hopping: float, times: F64) -> F64:
    """Steps (M, 7) under -hopping * mover + diagonal from 0 to the first of the rising times (M,), and on to each."""
    steps = np.zeros((len(times), 7))
    steps[1:, BEGIN], steps[:, END] = times[:-1], times
    steps[:, A_BEGIN] = steps[:, A_END] = hopping
    steps[:, B_BEGIN] = steps[:, B_END] = 1.0
    return steps


def dephased_laws(diagonal: F64, driver: int, steps: F64, start: int, jump_rate: float) -> F64:
    """Laws f64 (S, N) after each of the steps (S, 7) of ramp.py, averaged over all trajectories.

    ``diagonal`` f64 (N,) are energies, ``jump_rate`` is per spin and 1/energy; ``start`` is a configuration's number,
    or -1 for the uniform superposition.
    """
    size = len(diagonal)
    spins = size.bit_length() - 1
    numbers = np.arange(size)
    distances = ((numbers[:, None] ^ numbers[None, :])[:, :, None] >> np.arange(spins) & 1).sum(axis=2)
    half_width = 0.5 * float(diagonal.max() - diagonal.min())
    centred = diagonal - (float(diagonal.min()) + half_width)
    rho = np.full((size, size), 1.0 / size)
    if start >= 0:
        rho[:] = 0.0
        rho[start, start] = 1.0
    norms, laws = np.empty((len(steps), 2)), np.empty((len(steps), size))
    _bound_norms(steps, moving_norm(size, driver), half_width, jump_rate * spins, norms)
    fade = 2.0 * jump_rate * distances.astype(np.float64)
    _follow(driver_matrix(DRIVERS[driver], spins), centred, fade, steps, norms, rho, laws)
    return laws


@compiled
def density_updates(spins: int, driver: int, half_width: float, steps: F64, jump_rate: float) -> int:
    """Amplitude updates of :func:`dephased_laws`: every application of H to a matrix is one for each column."""
    norms, powers = np.empty((len(steps), 2)), 0
    _bound_norms(steps, moving_norm(1 << spins, driver), half_width, jump_rate * spins, norms)
    for number in range(len(steps)):
        pieces, terms = _cut(norms[number], steps[number, END] - steps[number, BEGIN])
        powers += pieces * terms
    return powers << 2 * spins


@compiled
def _bound_norms(steps: F64, moving: float, half_width: float, jumping: float, norms: F64) -> None:
    """Bounds (S, 2) of the generator's norm in every step, and of its change from the step's beginning to its end."""
    for number in range(len(steps)):
        step = steps[number]
        begin = abs(step[A_BEGIN]) * moving + abs(step[B_BEGIN]) * half_width
        end = abs(step[A_END]) * moving + abs(step[B_END]) * half_width
        change = abs(step[A_END] - step[A_BEGIN]) * moving + abs(step[B_END] - step[B_BEGIN]) * half_width
        norms[number, 0] = 2.0 * max(begin, end) + 2.0 * jumping
        norms[number, 1] = 2.0 * change


@compiled
def _cut(norms: F64, length: float) -> tuple[int, int]:
    """How many pieces a step is cut into, and the powers of time in the series of each."""
    pieces = max(1, math.ceil(norms[0] * length / LONGEST))
    return pieces, series_passes(norms[0], norms[1] / pieces, length / pieces, NEGLIGIBLE, np.empty(1))


@compiled
def _follow(mover: F64, diagonal: F64, fade: F64, steps: F64, norms: F64, rho: F64, laws: F64) -> None:
    """Leave the diagonal of the density matrix, at first the real ``rho``, after each of the steps in ``laws``."""
    size = len(rho)
    state = np.zeros((2, size, size))
    state[0] = rho
    now, older, moved, moved_older, product = np.empty((5, 2, size, size))
    for number in range(len(steps)):
        step = steps[number]
        pieces, powers = _cut(norms[number], step[END] - step[BEGIN])
        length = (step[END] - step[BEGIN]) / pieces
        a_change, b_change = (step[A_END] - step[A_BEGIN]) / pieces, (step[B_END] - step[B_BEGIN]) / pieces
        for piece in range(pieces):
            a, b = step[A_BEGIN] + piece * a_change, step[B_BEGIN] + piece * b_change
            now[:], older[:], moved_older[:] = state, 0.0, 0.0
            for power in range(1, powers + 1):
                _multiply(mover, now, moved)
                for x in range(size):
                    for y in range(size):
                        for part in range(2):
                            levelled = diagonal[x] * (b * now[part, x, y] + b_change * older[part, x, y])
                            hopped = a * moved[part, x, y] + a_change * moved_older[part, x, y]
                            product[part, x, y] = levelled - hopped
                _turn(product, now, fade, length / power, older)
                now, older, moved, moved_older = older, now, moved_older, moved
                state += now
        for entry in range(size):
            laws[number, entry] = max(0.0, state[0, entry, entry])


@compiled
def _turn(product: F64, now: F64, fade: F64, length: float, later: F64) -> None:
    """later <- length * (-i (P - adjoint of P) - fade * now), with P = ``product``, real and imaginary parts (2, N, N).

    The commutator of H with a Hermitian term is H times it less the adjoint of that.
    """
    size = len(fade)
    for x in range(size):
        for y in range(size):
            onwards = product[1, x, y] + product[1, y, x] - fade[x, y] * now[0, x, y]
            sideways = product[0, y, x] - product[0, x, y] - fade[x, y] * now[1, x, y]
            later[0, x, y], later[1, x, y] = length * onwards, length * sideways


@compiled
def _multiply(left: F64, right: F64, product: F64) -> None:
    """product <- left right for real and imaginary parts (2, N, N), without the zeros of the left one."""
    size = len(left)
    for part in range(2):
        for x in range(size):
            for y in range(size):
                product[part, x, y] = 0.0
            for z in range(size):
                if left[x, z] != 0.0:
                    for y in range(size):
                        product[part, x, y] += left[x, z] * right[part, z, y]
