"""Climbing a smooth concave function of which some variables must not be negative: a projected quasi-Newton method.

Variables at zero whose slope points below it stand still (Bertsekas, SIAM J. Control Optim. 20 (1982) 221); the second
derivative of the others is guessed from the last steps (Nocedal, Math. Comput. 35 (1980) 773; both from memory), whose
products are taken over the free variables alone: taken over all, the climb needs half as many rounds again (computed
here).
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import numpy.typing as npt

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64

MEMORY, MOST_TRIALS, SUFFICIENT = 12, 10, 1e-4


def ascend(
    look: Callable[[F64, F64], float], stop: Callable[[], bool], start: F64, signless: int, scale: float, steps: int
) -> F64:
    """The point reached from ``start`` after at most ``steps``, its first ``signless`` variables free of sign.

    ``look(point, slope)`` returns the value and fills the slope; ``stop()`` is asked after every look. The first step
    is ``scale`` times the slope.
    """
    point, slope = start.copy(), np.empty(len(start))
    moves, changes, kept = np.zeros((MEMORY, len(start))), np.zeros((MEMORY, len(start))), 0
    value = look(point, slope)
    for _ in range(steps):
        if stop():
            break
        free = (point > 0) | (slope > 0)
        free[:signless] = True
        ahead = direction(moves, changes, kept, free, slope, scale)
        length = 1.0
        for _ in range(MOST_TRIALS):
            trial, trial_slope = point + length * ahead, np.empty(len(start))
            np.maximum(trial[signless:], 0.0, out=trial[signless:])
            move = trial - point
            trial_value, expected = look(trial, trial_slope), float(slope @ move)
            if stop() or trial_value >= value + SUFFICIENT * expected:
                break
            # the top of the parabola through value, slope and the value met, kept within reason
            length *= min(0.5, max(0.1, 0.5 * expected / (expected + value - trial_value)))
        else:
            break
        if kept == MEMORY:
            moves[:-1], changes[:-1] = moves[1:].copy(), changes[1:].copy()
            kept -= 1
        moves[kept], changes[kept] = move, slope - trial_slope
        kept += 1
        point, value, slope = trial, trial_value, trial_slope
    return point


@compiled
def direction(moves: F64, changes: F64, kept: int, free: npt.NDArray[np.bool_], slope: F64, scale: float) -> F64:
    """The slope of the free variables times the inverse second derivative guessed from ``kept`` moves; 0 elsewhere."""
    size = len(slope)
    ahead = np.where(free, slope, 0.0)
    shares, products = np.zeros(kept), np.zeros(kept)
    for back in range(kept):
        k = kept - 1 - back
        along, square = 0.0, 0.0
        for i in range(size):
            if free[i]:
                products[k] += moves[k, i] * changes[k, i]
                along += moves[k, i] * ahead[i]
                square += changes[k, i] * changes[k, i]
        if products[k] <= 0.0:
            continue
        if np.all(products[k + 1 :] <= 0.0):
            scale = products[k] / square
        shares[k] = along / products[k]
        for i in range(size):
            if free[i]:
                ahead[i] -= shares[k] * changes[k, i]
    ahead *= scale
    for k in range(kept):
        if products[k] > 0.0:
            along = 0.0
            for i in range(size):
                if free[i]:
                    along += changes[k, i] * ahead[i]
            along /= products[k]
            for i in range(size):
                if free[i]:
                    ahead[i] += (shares[k] - along) * moves[k, i]
    return ahead
