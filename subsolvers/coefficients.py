"""What each Chebyshev vector contributes to exp(-iHt): how many are needed, and their Bessel coefficients.

With the spectrum of H inside ``centre +- half_width`` and ``x = half_width * t``,

    exp(-iHt) = exp(-i centre t) sum_m (2 - [m=0]) (-i)^m J_m(x) T_m((H - centre) / half_width).

Everything here rests on ``x`` alone, which a common power of two in energies and times leaves unchanged.
"""

from __future__ import annotations

import math

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I64

DOUBLE_DECAY = 30.0
"""In double precision the series ends where its Bessel functions have fallen below exp(-30), about 1e-13."""

SINGLE_DECAY = 18.0
"""In single precision they need only fall below exp(-18), about 1.5e-8, where rounding is coarser."""

VANISHED = 74.0
"""The downward recurrence for the Bessel functions begins where they have fallen below exp(-VANISHED)."""

TINY_ARGUMENT = 1e-9
"""Up to here J_0(x) = 1 and J_1(x) = x/2 to machine precision, and nothing else counts."""


@compiled
def order_reaching(x: float, decay: float) -> int:
    """An order beyond ``x`` from which on J_n(x) < exp(-decay).

    Debye's bound: J_n(x) < exp(-n (a - tanh a)) where n = x cosh a. The exponent is convex in n, so that Newton's
    iteration steps to the right of the root at once, and from there comes down without passing it.
    """
    if x <= TINY_ARGUMENT:
        return 2
    order = x + decay + 2.0
    for _ in range(50):
        angle = math.acosh(order / x)
        step = (order * angle - math.sqrt((order - x) * (order + x)) - decay) / angle
        order -= step
        if 0.0 <= step < 0.25:
            break
    return max(2, math.ceil(order))


@compiled
def series_terms(x: float, decay: float) -> int:
    """Chebyshev vectors needed, T_0 included: a multiple of four, as four passes make one round of summing."""
    return (order_reaching(x, decay) + 4) // 4 * 4


@compiled
def fill_bessel(x: float, values: F64) -> None:
    """values[m] = J_m(x) for x >= 0, by downward recurrence, normalised by J_0 + 2 J_2 + 2 J_4 + ... = 1."""
    if x <= TINY_ARGUMENT:
        values[:] = 0.0
        values[0] = 1.0
        values[1] = 0.5 * x
        return
    top = max(order_reaching(x, VANISHED), len(values))
    slope = 2.0 / x
    above, here, total = 0.0, 1e-60, 0.0
    for order in range(top, 0, -1):
        if order < len(values):
            values[order] = here
        if order % 2 == 0:
            total += 2.0 * here
        above, here = here, order * slope * here - above
    values[0] = here
    values /= total + here


@compiled
def series_coefficients(half_width: float, times: F64, decay: float, terms: I64) -> F64:
    """What each Chebyshev vector (row) adds to each time's sums (column), signs included: f64 (terms, M).

    Even rows belong to the real part, odd ones to the imaginary part. ``terms`` (M,) is filled with the number of
    rows that count in each column; the others are zero.
    """
    most = 0
    for column in range(len(times)):
        terms[column] = series_terms(half_width * abs(times[column]), decay)
        most = max(most, terms[column])
    table, bessel = np.zeros((most, len(times))), np.empty(most)
    for column in range(len(times)):
        x = half_width * times[column]
        count = terms[column]
        fill_bessel(abs(x), bessel[:count])
        table[0, column] = bessel[0]
        for term in range(1, count):
            # (-i)^m runs through 1, -i, -1, i; odd orders change sign with x
            positive = ((term + 1) % 4 < 2) != (x < 0.0 and term % 2 == 1)
            table[term, column] = 2.0 * bessel[term] if positive else -2.0 * bessel[term]
    return table
