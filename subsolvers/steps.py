"""How an evolution is cut into steps: where straight drives stand for curved ones, and how long each series is.

A step's straight drives share the mean and the first moment of the leg's own. Legs that are straight already are cut
into equal steps, as long as rounding allows. Curved ones are cut by the leading term of the error that straightening
makes. All of it rests on the drive and the diagonal alone, never on the state.
"""

from __future__ import annotations

import math

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.drivers import COMPLETE, PAIRS, driver_range

BEGIN, END, A_BEGIN, A_END, B_BEGIN, B_END, CURVE = range(7)
"""Columns of a leg: its times, A and B at its ends, and how A and B go from one end to the other.

``CURVE`` is 0 for a straight line, -1 for the curve tabulated in ``knots``, and otherwise the angle of a tangent.
"""

PASSES = 6
"""The column that steps have in the place of ``CURVE``: terms of their series."""

LONGEST_STRAIGHT = 14.0
"""Norm of H times the step on straight legs: more passes save less than rounding costs."""

LONGEST_CURVED = 4.0
"""The same on curved legs, where the error of the straightened drive is taken from its leading term."""

USUAL_SHAPE = (1.0, 0.81, 0.73, 0.81, 1.0)
"""What that bound comes to on glasses, see :func:`norm_shape`: for forecasts."""

ROUNDING = 2.2e-16


@compiled
def copy_into(source: F64, target: F64) -> None:
    """target <- source: assigning to a slice does the same and compiles seconds longer."""
    for number in range(len(source)):
        target[number] = source[number]


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
def straighten(leg: F64, knots: F64, begin: float, end: float, step: F64) -> None:
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
def moving_norm(size: int, mover: int) -> float:
    """The norm of the mover, which is its largest eigenvalue."""
    spins = 0
    while 1 << spins < size:
        spins += 1
    _, largest = driver_range(mover, spins)
    return largest


@compiled
def norm_bound(a: float, b: float, moving: float, half_width: float, shape: F64) -> float:
    """A bound of the norm of -a * mover + b * diagonal."""
    total = abs(a) * moving + abs(b) * half_width
    if total == 0.0:
        return 0.0
    place = 4.0 * (abs(a) * moving / total)
    low = min(3, int(place))
    return total * (shape[low] + (place - low) * (shape[low + 1] - shape[low]))


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
def series_passes(reach: float, reach_back: float, length: float, neglected: float, peak: F64) -> int:
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
def count_passes(
    step: F64, adding_up: bool, moving: float, half_width: float, shape: F64, neglected: float, peak: F64
) -> int:
    """Write and return the terms that a step's series needs."""
    near = (
        norm_bound(step[A_BEGIN], step[B_BEGIN], moving, half_width, shape)
        if adding_up
        else norm_bound(step[A_END], step[B_END], moving, half_width, shape)
    )
    change = norm_bound(step[A_BEGIN] - step[A_END], step[B_BEGIN] - step[B_END], moving, half_width, shape)
    passes = series_passes(near, change, step[END] - step[BEGIN], neglected, peak)
    step[PASSES] = passes
    return passes


@compiled
def adds_up(step: F64, legs: F64) -> bool:
    """Whether a step lies in the first half of the time, where series are added up term by term."""
    return step[BEGIN] + step[END] < legs[0, BEGIN] + legs[-1, END]


@compiled
def _longest(neglected: float, exposure: float) -> float:
    """Norm of H times the step at which rounding may come to what the series leave out, in all steps."""
    return math.log(max(1.0, neglected / (ROUNDING * max(1.0, exposure))))


@compiled
def plan_steps(
    diagonal: F64, half_width: float, shape: F64, size: int, mover: int, legs: F64, knots: F64,
    tolerance: float, neglected: float, most_steps: int, report: F64,
) -> F64:  # fmt: skip
    """The steps (S, 7) through all legs.

    ``diagonal`` f64 (N,) may be empty, in which case changes under a flip are taken for ``half_width / 2``: a forecast
    from the spread alone. ``neglected`` is what all series together may leave out. Curved legs get at most
    ``most_steps`` steps each by the wish for accuracy. ``report`` receives an estimate of the error of the final
    state, of which the total variation of the law is at most as large, the passes in all, and the part of the error
    that straightened curves make.
    """
    moving = moving_norm(size, mover)
    total = legs[-1, END] - legs[0, BEGIN]
    changes, peak = np.zeros(2), np.empty(1)
    steps = np.empty((16, 7))
    count = 0
    report[0] = report[1] = report[2] = 0.0
    for number in range(len(legs)):
        leg = legs[number]
        duration = leg[END] - leg[BEGIN]
        if duration <= 0.0:
            continue
        strongest = max(
            norm_bound(leg[A_BEGIN], leg[B_BEGIN], moving, half_width, shape),
            norm_bound(leg[A_END], leg[B_END], moving, half_width, shape),
        )
        curved = leg[CURVE] != 0.0
        if curved and changes[1] == 0.0:
            if len(diagonal) > 0:
                _most_change(diagonal, mover, changes)
            else:
                changes[0], changes[1] = moving * half_width, 0.25 * math.sqrt(moving) * half_width**2
        room = max(1.0, min(LONGEST_CURVED if curved else LONGEST_STRAIGHT, _longest(neglected, strongest * total)))
        pieces = max(1, math.ceil(strongest * duration / room))
        change = norm_bound(leg[A_END] - leg[A_BEGIN], leg[B_END] - leg[B_BEGIN], moving, half_width, shape)
        pieces = max(1, math.ceil((strongest + 0.5 * change / pieces) * duration / room))
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
                report[2] += _bend_error(leg, knots, begin, end, changes)
                following = min(duration / pieces, 2.0 * length)
            else:
                done += 1
                end = leg[END] if done == pieces else leg[BEGIN] + done * length
                following = length
            if count == len(steps):
                grown = np.empty((2 * count, 7))
                for earlier in range(count):
                    copy_into(steps[earlier], grown[earlier])
                steps = grown
            step = steps[count]
            straighten(leg, knots, begin, end, step)
            left_out = neglected * ((end - begin) / total)
            report[1] += count_passes(step, adds_up(step, legs), moving, half_width, shape, left_out, peak)
            report[0] += left_out + ROUNDING * (peak[0] + step[PASSES])
            count += 1
            begin, length = end, following
    report[0] += report[2]
    return steps[:count]
