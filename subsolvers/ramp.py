"""Evolution under a Hamiltonian that changes in time: H(t) = -A(t) * mover + B(t) * diag(diagonal), hbar = 1.

The mover is one of the matrices of ``drivers.py``; only single flips have a kernel made for speed.

Time is cut into steps. Within a step A and B are replaced by the straight lines that share their mean and their
first moment, which leaves a local error of fifth order in the step: a fourth-order scheme (those two moments are all
that a fourth-order Magnus expansion sees: Blanes & Moan, Appl. Numer. Math. 56 (2006) 1519). Drives that are straight
lines already, and constant ones, are not changed at all, however long the step.

Under straight lines the state is a power series in time. With H(t) = late + (end - t) * back over a step of length h,

    q[n] = start + (-ih/(n+1)) late q[n+1] + (-ih/(n+2)) h back q[n+2],        q[0] = the state at the end of the step:

Horner's rule for the transposed series of the step run backwards, the same operator because H is symmetric. Each
pass applies H once, to imaginary and real parts in turn: the factor -i turns one into the other, so that a new part
takes the place of an old one of the other kind. The sums over neighbours of one pass serve again in the next. The
number of passes follows from a majorant of the series and a proven bound of the norm of H, so that what is cut off
is bounded, not guessed.

Steps rest on the drive and the diagonal alone, never on the state. A drive that is its own mirror image is cut into
mirrored steps; the first half of the time adds its series up term by term instead of by Horner's rule, which makes
each step the exact transpose of its mirror image, whatever is cut off: the evolution has a symmetric matrix. Every
decision is made on products that a common power of two leaves unchanged to the last bit.
"""

from __future__ import annotations

import math

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.drivers import COMPLETE, HYPERCUBE, PAIRS
from patchwalk.subsolvers.lanes import CACHE_LINE, WIDTH, add, fma, load, splat, store, swap
from patchwalk.subsolvers.steps import (
    A_BEGIN,
    A_END,
    B_BEGIN,
    B_END,
    BEGIN,
    END,
    PASSES,
    adds_up,
    copy_into,
    count_passes,
    moving_norm,
    straighten,
)

UNIFORM = -1
"""The ``start`` that stands for the uniform superposition."""

POWER_STEPS = 12
"""Steps of the power iteration behind the bound of the norm of H; each brings the bound down, and none breaks it."""


@compiled
def _sweep(
    diagonal: F64, now: F64, older: F64, moved: F64, source: F64,
    level: float, hop: float, old_level: float, old_hop: float, adding_up: bool,
) -> None:  # fmt: skip
    """older <- source + (level * diagonal + hop * mover) now + (old_level * diagonal + old_hop * mover) older.

    ``moved`` holds the mover's work on ``older`` and receives its work on ``now``; the mover flips single spins. When
    ``adding_up``, ``source`` is left out, and the result added to it.
    """
    levels, hops, old_levels, old_hops, nothing = splat(level), splat(hop), splat(old_level), splat(old_hop), splat(0.0)
    kept = splat(0.0 if adding_up else 1.0)
    size = len(diagonal)
    for first in range(0, size, WIDTH):
        here = load(now, first)
        near = add(add(swap(here, 1), swap(here, 2)), swap(here, 4))
        neighbours = add(add(near, swap(here, 32)), add(swap(here, 8), swap(here, 16)))
        distance = WIDTH
        while distance < size:
            neighbours = add(neighbours, load(now, first ^ distance))
            distance *= 2
        result = fma(old_hops, load(moved, first), fma(kept, load(source, first), nothing))
        store(moved, first, neighbours)
        result = fma(hops, neighbours, result)
        levelled = fma(old_levels, load(older, first), fma(levels, load(now, first), nothing))
        result = fma(load(diagonal, first), levelled, result)
        store(older, first, result)
        if adding_up:
            store(source, first, add(load(source, first), result))


@compiled
def _sweep_plainly(
    diagonal: F64, now: F64, older: F64, moved: F64, source: F64,
    level: float, hop: float, old_level: float, old_hop: float, adding_up: bool, mover: int,
) -> None:  # fmt: skip
    """The same for vectors shorter than one block, and for the other drivers."""
    size = len(diagonal)
    total = 0.0
    if mover == COMPLETE:
        for amplitude in now:
            total += amplitude
    for number in range(size):
        neighbours = total
        distance = 1
        while mover != COMPLETE and distance < size:
            neighbours += now[number ^ distance]
            second = 1
            while mover == PAIRS and second < distance:
                neighbours += now[number ^ distance ^ second]
                second *= 2
            distance *= 2
        result = old_hop * moved[number] + hop * neighbours
        moved[number] = neighbours
        result += diagonal[number] * (level * now[number] + old_level * older[number])
        if adding_up:
            source[number] += result
        else:
            result += source[number]
        older[number] = result


@compiled
def take_step(diagonal: F64, mover: int, step: F64, adding_up: bool, rooms: F64, real: F64, imaginary: F64) -> None:
    """Take the state in ``real`` and ``imaginary`` through one step; ``rooms`` is workspace free of nan.

    When ``adding_up``, by terms (-ih/(n+1)) (early term[n] + h forth term[n-1]), with H(t) = early + (t - begin) *
    forth; otherwise by Horner's rule.
    """
    size, stride = len(diagonal), _stride(len(diagonal))
    real_now, imaginary_now = rooms[:size], rooms[stride:][:size]
    real_older, imaginary_older = rooms[2 * stride :][:size], rooms[3 * stride :][:size]
    real_moved, imaginary_moved = rooms[4 * stride :][:size], rooms[5 * stride :][:size]
    copy_into(real, real_now)
    copy_into(imaginary, imaginary_now)
    length = step[END] - step[BEGIN]
    near_a, near_b, far_a, far_b = step[A_END], step[B_END], step[A_BEGIN], step[B_BEGIN]
    if adding_up:
        near_a, near_b, far_a, far_b = far_a, far_b, near_a, near_b
    passes = int(step[PASSES])
    for turn in range(2 * passes):
        done, on_real = turn // 2, turn % 2 == 1
        term = done if adding_up else passes - 1 - done
        share = length / (term + 1)
        old_share = 0.0 if done == 0 else share if adding_up else length / (term + 2)
        if on_real:
            share, old_share = -share, -old_share
        weights = share * near_b, -share * near_a, old_share * (far_b - near_b), -old_share * (far_a - near_a)
        now, older = (real_now, real_older) if on_real else (imaginary_now, imaginary_older)
        moved, source = (real_moved, imaginary) if on_real else (imaginary_moved, real)
        if mover == HYPERCUBE and size >= WIDTH:
            _sweep(diagonal, now, older, moved, source, *weights, adding_up)
        else:
            _sweep_plainly(diagonal, now, older, moved, source, *weights, adding_up, mover)
        if on_real:
            real_now, imaginary_now, real_older, imaginary_older = imaginary_older, real_older, real_now, imaginary_now
    if adding_up:
        return
    copy_into(real_now, real)
    copy_into(imaginary_now, imaginary)


@compiled
def norm_shape(centred: F64, half_width: float, mover: int, rooms: F64, shape: F64) -> None:
    """Bounds of the norm of H, f64 (5,), as shares of the sum of its parts' norms, for five shares of the mover in it.

    The norm is a convex function of the share, so that straight lines between the five bound it everywhere. Between
    the ends, with H plus a constant free of negative entries: the largest eigenvalue is at most the largest of
    (Hv)_x / v_x, for any positive v (Collatz, Math. Z. 48 (1942) 221; Wielandt, Math. Z. 52 (1950) 642; both from
    memory), and v is found by power iteration. Both ends of the spectrum are of that kind, as the mover changes sign
    under a change of basis; that is true of single flips alone, and other movers keep the sum of the norms.
    """
    size, stride = len(centred), _stride(len(centred))
    moved = rooms[:size]
    moving = moving_norm(size, mover)
    for place in range(5):
        shape[place] = 1.0
        if mover != HYPERCUBE or half_width == 0.0 or place in (0, 4):
            continue
        share = 0.25 * place
        largest = 0.0
        for sign in (-1.0, 1.0):
            now, later = rooms[stride:][:size], rooms[2 * stride :][:size]
            for number in range(size):
                now[number] = 1.0
            ratio = 0.0
            for turn in range(POWER_STEPS):
                weights = sign / half_width, share / (moving * (1.0 - share)), 0.0, 0.0
                if size >= WIDTH:
                    _sweep(centred, now, later, moved, now, *weights, False)
                else:
                    _sweep_plainly(centred, now, later, moved, now, *weights, False, mover)
                if turn == POWER_STEPS - 1:
                    for number in range(size):
                        ratio = max(ratio, later[number] / now[number])
                now, later = later, now
            largest = max(largest, (1.0 - share) * (ratio - 1.0) * (1.0 + 1e-12))
        shape[place] = min(1.0, largest)


@compiled
def workspace_bytes(size: int) -> int:
    """Memory that one row holds for itself, the diagonal included, its law or amplitudes not."""
    return 8 * 12 * _stride(size)


@compiled
def _stride(size: int) -> int:
    """Distance between vectors: whole cache lines, but no multiple of a page, where they would evict one another."""
    return (size + CACHE_LINE - 1) // CACHE_LINE * CACHE_LINE + 9 * CACHE_LINE


@compiled
def make_rooms(size: int) -> F64:
    """Workspace of :func:`follow_steps`: eight vectors in a row, zeroed, each beginning on a cache line."""
    memory = np.zeros(8 * _stride(size) + CACHE_LINE)
    shift = (-(memory.ctypes.data // 8)) % CACHE_LINE
    return memory[shift : shift + 8 * _stride(size)]


@compiled
def centre_of(diagonal: F64, centred: F64) -> tuple[float, float]:
    """Write the diagonal about the middle of its spread; returns that middle and half the spread."""
    lowest = highest = diagonal[0]
    for level in diagonal:
        lowest = min(lowest, level)
        highest = max(highest, level)
    centre = 0.5 * lowest + 0.5 * highest
    for number in range(len(diagonal)):
        centred[number] = diagonal[number] - centre
    return centre, 0.5 * highest - 0.5 * lowest


@compiled
def start_from(start: int, real: F64, imaginary: F64) -> None:
    """Write the configuration with this number as a state, or the uniform superposition."""
    imaginary[:] = 0.0
    real[:] = math.sqrt(1.0 / len(real)) if start < 0 else 0.0
    if start >= 0:
        real[start] = 1.0


@compiled
def leg_at(legs: F64, time: float) -> int:
    """The leg that goes on from this time."""
    for number in range(len(legs)):
        if time < legs[number, END]:
            return number
    return len(legs) - 1


@compiled
def follow_steps(
    centred: F64, half_width: float, shape: F64, mover: int, legs: F64, knots: F64, steps: F64, neglected: float,
    start: int, times: F64, rooms: F64, real: F64, imaginary: F64,
) -> int:  # fmt: skip
    """Amplitudes f64 (M, N), real and imaginary, at every one of ``times`` (M,), which rise; returns the passes made.

    The global phase is that of the centred diagonal. A time within a step is reached by a shorter step from where
    that one begins, so that asking for it changes nothing at other times.
    """
    size = len(centred)
    moving = moving_norm(size, mover)
    peak, partial = np.empty(1), np.empty(7)
    stride = _stride(size)
    here_real, here_imaginary = rooms[6 * stride :][:size], rooms[7 * stride :][:size]
    start_from(start, here_real, here_imaginary)
    done, passes = 0, 0
    for row in range(len(times)):
        while done < len(steps) and steps[done, END] <= times[row]:
            take_step(centred, mover, steps[done], adds_up(steps[done], legs), rooms, here_real, here_imaginary)
            passes += int(steps[done, PASSES])
            done += 1
        copy_into(here_real, real[row])
        copy_into(here_imaginary, imaginary[row])
        if done < len(steps) and steps[done, BEGIN] < times[row]:
            leg = legs[leg_at(legs, steps[done, BEGIN])]
            straighten(leg, knots, steps[done, BEGIN], times[row], partial)
            adding_up = adds_up(partial, legs)
            passes += count_passes(partial, adding_up, moving, half_width, shape, neglected, peak)
            take_step(centred, mover, partial, adding_up, rooms, real[row], imaginary[row])
    return passes
