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
number of passes follows from a majorant of the series, so that what is cut off is bounded, not guessed.

Steps rest on the drive and the diagonal alone, never on the state: a drive that is its own mirror image is cut into
mirrored steps, and its evolution has a symmetric matrix. Every decision is made on products that a common power of
two leaves unchanged to the last bit.
"""

from __future__ import annotations

import math

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.drivers import COMPLETE, HYPERCUBE, PAIRS, driver_range
from patchwalk.subsolvers.lanes import CACHE_LINE, WIDTH, add, fma, load, splat, store, swap

UNIFORM = -1
"""The ``start`` that stands for the uniform superposition."""

BEGIN, END, A_BEGIN, A_END, B_BEGIN, B_END, CURVE = range(7)
"""Columns of a leg: its times, A and B at its ends, and how A and B go from one end to the other.

``CURVE`` is 0 for a straight line, -1 for the curve tabulated in ``knots``, and otherwise the angle of a tangent.
"""

PASSES = 6
"""The column that steps have in the place of ``CURVE``: terms of their series."""

LONGEST_STRAIGHT = 12.0
"""Norm of H times the step on straight legs: more passes save less than rounding costs."""

LONGEST_CURVED = 4.0
"""The same on curved legs, where the error of the straightened drive is taken from its leading term."""

ROUNDING = 2.2e-16


@compiled
def _sweep(
    diagonal: F64, now: F64, older: F64, moved: F64, source: F64,
    level: float, hop: float, old_level: float, old_hop: float,
) -> None:  # fmt: skip
    """older <- source + (level * diagonal + hop * mover) now + (old_level * diagonal + old_hop * mover) older.

    ``moved`` holds the mover's work on ``older`` and receives its work on ``now``; the mover flips single spins.
    """
    levels, hops, old_levels, old_hops, nothing = splat(level), splat(hop), splat(old_level), splat(old_hop), splat(0.0)
    size = len(diagonal)
    for first in range(0, size, WIDTH):
        here = load(now, first)
        near = add(add(swap(here, 1), swap(here, 2)), swap(here, 4))
        neighbours = add(add(near, swap(here, 32)), add(swap(here, 8), swap(here, 16)))
        distance = WIDTH
        while distance < size:
            neighbours = add(neighbours, load(now, first ^ distance))
            distance *= 2
        result = fma(old_hops, load(moved, first), load(source, first))
        store(moved, first, neighbours)
        result = fma(hops, neighbours, result)
        levelled = fma(old_levels, load(older, first), fma(levels, load(now, first), nothing))
        store(older, first, fma(load(diagonal, first), levelled, result))


@compiled
def _sweep_plainly(
    diagonal: F64, now: F64, older: F64, moved: F64, source: F64,
    level: float, hop: float, old_level: float, old_hop: float, mover: int,
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
        result = source[number] + old_hop * moved[number] + hop * neighbours
        moved[number] = neighbours
        older[number] = result + diagonal[number] * (level * now[number] + old_level * older[number])


@compiled
def _copy(source: F64, target: F64) -> None:
    """target <- source: assigning to a slice does the same and compiles seconds longer."""
    for number in range(len(source)):
        target[number] = source[number]


@compiled
def _advance(diagonal: F64, mover: int, step: F64, rooms: F64, real: F64, imaginary: F64) -> None:
    """Take the state in ``real`` and ``imaginary`` through one step; ``rooms`` is workspace free of nan."""
    size, stride = len(diagonal), _stride(len(diagonal))
    real_now, imaginary_now = rooms[:size], rooms[stride:][:size]
    real_older, imaginary_older = rooms[2 * stride :][:size], rooms[3 * stride :][:size]
    real_moved, imaginary_moved = rooms[4 * stride :][:size], rooms[5 * stride :][:size]
    _copy(real, real_now)
    _copy(imaginary, imaginary_now)
    length = step[END] - step[BEGIN]
    hop, level = -length * step[A_END], length * step[B_END]
    hop_back, level_back = -length * (step[A_BEGIN] - step[A_END]), length * (step[B_BEGIN] - step[B_END])
    last = int(step[PASSES]) - 1
    for term in range(last, -1, -1):
        share, old_share = 1.0 / (term + 1), 1.0 / (term + 2) if term < last else 0.0
        for turn in range(2):
            sign = 1.0 if turn == 0 else -1.0
            now, older = (imaginary_now, imaginary_older) if turn == 0 else (real_now, real_older)
            moved, source = (imaginary_moved, real) if turn == 0 else (real_moved, imaginary)
            weights = (
                sign * share * level, sign * share * hop, sign * old_share * level_back, sign * old_share * hop_back
            )  # fmt: skip
            if mover == HYPERCUBE and size >= WIDTH:
                _sweep(diagonal, now, older, moved, source, *weights)
            else:
                _sweep_plainly(diagonal, now, older, moved, source, *weights, mover)
        real_now, imaginary_now, real_older, imaginary_older = imaginary_older, real_older, real_now, imaginary_now
    _copy(real_now, real)
    _copy(imaginary_now, imaginary)


@compiled
def _passes(reach: float, reach_back: float, length: float, neglected: float, peak: F64) -> int:
    """Terms after which the rest of the series is below ``neglected``; ``peak`` receives its largest term.

    The norms of its terms are at most those of exp(reach * s + reach_back * s^2 / (2 length)) at s = length.
    """
    earlier, here = 0.0, 1.0
    peak[0] = 1.0
    term = 0
    while term < 10_000:
        later = length * (reach * here + reach_back * earlier) / (term + 1)
        if later < 0.5 * here and 2.0 * later < neglected:
            break
        earlier, here = here, later
        peak[0] = max(peak[0], later)
        term += 1
    return max(1, term)


@compiled
def _progress(curve: float, knots: F64, share: float) -> float:
    """How far from its beginning to its end a leg's drive is after this share of its time, both from 0 to 1.

    ``knots`` f64 (K, 3) holds shares, progress and slopes of a curve made of cubic pieces.
    """
    if curve == 0.0:
        return share
    if curve > 0.0:
        return 0.5 + 0.5 * math.tan(curve * (2.0 * share - 1.0)) / math.tan(curve)
    low, high = 0, len(knots) - 1
    while high - low > 1:
        middle = (low + high) // 2
        if knots[middle, 0] <= share:
            low = middle
        else:
            high = middle
    width = knots[high, 0] - knots[low, 0]
    u = (share - knots[low, 0]) / width
    rise = knots[high, 1] - knots[low, 1]
    begin, end = knots[low, 2] * width, knots[high, 2] * width
    return knots[low, 1] + u * (begin + u * (3.0 * rise - 2.0 * begin - end + u * (begin + end - 2.0 * rise)))


@compiled
def _straighten(leg: F64, knots: F64, begin: float, end: float, step: F64) -> None:
    """Write the step from ``begin`` to ``end`` whose straight drives have the mean and first moment of the leg's."""
    duration = leg[END] - leg[BEGIN]
    first, last = (begin - leg[BEGIN]) / duration, (end - leg[BEGIN]) / duration
    if leg[CURVE] != 0.0:  # three-point Gauss quadrature: no worse than sixth order
        middle, half = 0.5 * (first + last), 0.5 * (last - first)
        node = math.sqrt(0.6)
        before = _progress(leg[CURVE], knots, middle - node * half)
        centre = _progress(leg[CURVE], knots, middle)
        after = _progress(leg[CURVE], knots, middle + node * half)
        mean = (5.0 * before + 8.0 * centre + 5.0 * after) / 18.0
        rise = (after - before) * 5.0 * node / 6.0
        first, last = mean - rise, mean + rise
    step[BEGIN], step[END] = begin, end
    for drive in (A_BEGIN, B_BEGIN):
        change = leg[drive + 1] - leg[drive]
        step[drive] = leg[drive] + first * change
        step[drive + 1] = leg[drive] + last * change
    if first == 0.0 and leg[CURVE] == 0.0:
        step[A_BEGIN], step[B_BEGIN] = leg[A_BEGIN], leg[B_BEGIN]
    if last == 1.0 and leg[CURVE] == 0.0:
        step[A_END], step[B_END] = leg[A_END], leg[B_END]


@compiled
def _most_change(diagonal: F64, mover: int, changes: F64) -> None:
    """Norms of the nested commutators [mover, [mover, D]] and [D, [mover, D]] on the worst configuration.

    The diagonal is centred.
    """
    size = len(diagonal)
    changes[0] = changes[1] = 0.0
    if mover == COMPLETE:
        mean, square, widest = 0.0, 0.0, 0.0
        for level in diagonal:
            mean += level / size
            widest = max(widest, 2.0 * abs(level))
        for level in diagonal:
            square += (level - mean) ** 2
        deviation = math.sqrt(square * size)
        changes[0], changes[1] = size * deviation, widest * deviation
        return
    for number in range(size):
        linear, fourth = 0.0, 0.0
        distance = 1
        while distance < size:
            change = abs(diagonal[number ^ distance] - diagonal[number])
            linear += change
            fourth += change**4
            second = 1
            while mover == PAIRS and second < distance:
                change = abs(diagonal[number ^ distance ^ second] - diagonal[number])
                linear += change
                fourth += change**4
                second *= 2
            distance *= 2
        changes[0] = max(changes[0], 2.0 * linear)
        changes[1] = max(changes[1], math.sqrt(fourth))


@compiled
def _bend_error(leg: F64, knots: F64, begin: float, end: float, changes: F64) -> float:
    """Leading term of the error that one straightened step makes: h^5/720 |[H, [H, H'']]|.

    The second derivative is the larger of those in the two halves of the step: at a turn of the bend one alone, about
    the middle, would be zero.
    """
    duration = leg[END] - leg[BEGIN]
    first, width = (begin - leg[BEGIN]) / duration, (end - begin) / duration
    at_quarters = np.empty(5)
    for quarter in range(5):
        at_quarters[quarter] = _progress(leg[CURVE], knots, first + 0.25 * quarter * width)
    middle = at_quarters[2]
    bend = 16.0 * max(
        abs(at_quarters[0] - 2.0 * at_quarters[1] + middle), abs(middle - 2.0 * at_quarters[3] + at_quarters[4])
    )
    turn = abs(leg[B_BEGIN] * (leg[A_END] - leg[A_BEGIN]) - leg[A_BEGIN] * (leg[B_END] - leg[B_BEGIN]))
    a = abs(leg[A_BEGIN] + middle * (leg[A_END] - leg[A_BEGIN]))
    b = abs(leg[B_BEGIN] + middle * (leg[B_END] - leg[B_BEGIN]))
    return (end - begin) ** 3 / 720.0 * bend * turn * (a * changes[0] + b * changes[1])


@compiled
def _reach(a: float, b: float, moving: float, half_width: float) -> float:
    return abs(a) * moving + abs(b) * half_width


@compiled
def _moving(size: int, mover: int) -> float:
    """The norm of the mover, which is its largest eigenvalue."""
    spins = 0
    while 1 << spins < size:
        spins += 1
    _, largest = driver_range(mover, spins)
    return largest


@compiled
def plan_steps(
    diagonal: F64, half_width: float, size: int, mover: int, legs: F64, knots: F64,
    tolerance: float, neglected: float, most_steps: int, report: F64,
) -> F64:  # fmt: skip
    """The steps (S, 7) through all legs.

    ``diagonal`` f64 (N,) may be empty, in which case changes under a flip are taken for ``half_width / 2``: a forecast
    from the spread alone. ``neglected`` is what all series together may leave out. Curved legs get at most
    ``most_steps`` steps each by the wish for accuracy. ``report`` receives an estimate of the error of the final
    state, of which the total variation of the law is at most as large, and the passes in all.
    """
    moving = _moving(size, mover)
    total = legs[-1, END] - legs[0, BEGIN]
    changes, peak = np.zeros(2), np.empty(1)
    steps = np.empty((16, 7))
    count = 0
    report[0] = report[1] = 0.0
    for number in range(len(legs)):
        leg = legs[number]
        duration = leg[END] - leg[BEGIN]
        if duration <= 0.0:
            continue
        strongest = max(
            _reach(leg[A_BEGIN], leg[B_BEGIN], moving, half_width), _reach(leg[A_END], leg[B_END], moving, half_width)
        )
        curved = leg[CURVE] != 0.0
        if curved and changes[1] == 0.0:
            if len(diagonal) > 0:
                _most_change(diagonal, mover, changes)
            else:
                changes[0], changes[1] = moving * half_width, 0.25 * math.sqrt(moving) * half_width**2
        room = max(1.0, min(LONGEST_CURVED if curved else LONGEST_STRAIGHT, _longest(tolerance, strongest * total)))
        pieces = max(1, math.ceil(strongest * duration / room))
        length = duration / pieces
        shortest = min(length, duration / most_steps)
        begin = leg[BEGIN]
        done = 0
        while done < pieces:
            if curved:
                length = min(length, leg[END] - begin)
                for _ in range(60):
                    allowed = 0.5 * tolerance * (length / total)
                    excess = _bend_error(leg, knots, begin, begin + length, changes) / allowed
                    if excess <= 1.0 or length <= shortest:
                        break
                    length = max(shortest, length * max(0.25, 0.9 * excess**-0.25))
                end = begin + length
                if end >= leg[END] - 1e-9 * duration:
                    end, done = leg[END], pieces
                report[0] += _bend_error(leg, knots, begin, end, changes)
                following = min(duration / pieces, 2.0 * length)
            else:
                done += 1
                end = leg[END] if done == pieces else leg[BEGIN] + done * length
                following = length
            if count == len(steps):
                grown = np.empty((2 * count, 7))
                for earlier in range(count):
                    _copy(steps[earlier], grown[earlier])
                steps = grown
            step = steps[count]
            _straighten(leg, knots, begin, end, step)
            report[1] += _count_passes(step, moving, half_width, neglected * ((end - begin) / total), peak)
            report[0] += neglected * ((end - begin) / total) + ROUNDING * (peak[0] + step[PASSES])
            count += 1
            begin, length = end, following
    return steps[:count]


@compiled
def _longest(tolerance: float, exposure: float) -> float:
    """Norm of H times the step at which all steps together round off a quarter of the tolerance."""
    return math.log(max(1.0, 0.25 * tolerance / (ROUNDING * max(1.0, exposure))))


@compiled
def _count_passes(step: F64, moving: float, half_width: float, neglected: float, peak: F64) -> int:
    """Write and return the terms that a step's series needs."""
    late = _reach(step[A_END], step[B_END], moving, half_width)
    back = _reach(step[A_BEGIN] - step[A_END], step[B_BEGIN] - step[B_END], moving, half_width)
    passes = _passes(late, back, step[END] - step[BEGIN], neglected, peak)
    step[PASSES] = passes
    return passes


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
def _leg_at(legs: F64, time: float) -> int:
    for number in range(len(legs)):
        if time < legs[number, END]:
            return number
    return len(legs) - 1


@compiled
def follow_steps(
    centred: F64, half_width: float, mover: int, legs: F64, knots: F64, steps: F64, neglected: float, start: int,
    times: F64, rooms: F64, real: F64, imaginary: F64,
) -> int:  # fmt: skip
    """Amplitudes f64 (M, N), real and imaginary, at every one of ``times`` (M,), which rise; returns the passes made.

    The global phase is that of the centred diagonal. A time within a step is reached by a shorter step from where
    that one begins, so that asking for it changes nothing at other times.
    """
    size = len(centred)
    moving = _moving(size, mover)
    peak, partial = np.empty(1), np.empty(7)
    stride = _stride(size)
    here_real, here_imaginary = rooms[6 * stride :][:size], rooms[7 * stride :][:size]
    here_imaginary[:] = 0.0
    if start < 0:
        here_real[:] = math.sqrt(1.0 / size)
    else:
        here_real[:] = 0.0
        here_real[start] = 1.0
    done, passes = 0, 0
    for row in range(len(times)):
        while done < len(steps) and steps[done, END] <= times[row]:
            _advance(centred, mover, steps[done], rooms, here_real, here_imaginary)
            passes += int(steps[done, PASSES])
            done += 1
        _copy(here_real, real[row])
        _copy(here_imaginary, imaginary[row])
        if done < len(steps) and steps[done, BEGIN] < times[row]:
            leg = legs[_leg_at(legs, steps[done, BEGIN])]
            _straighten(leg, knots, steps[done, BEGIN], times[row], partial)
            passes += _count_passes(partial, moving, half_width, neglected, peak)
            _advance(centred, mover, partial, rooms, real[row], imaginary[row])
    return passes
