"""exp(-iHt) without a matrix, for H = -hopping * sum_i X_i + diag(diagonal) on k spins (hbar = 1).

Chebyshev propagation (Tal-Ezer & Kosloff, J. Chem. Phys. 81 (1984) 3967). With the spectrum inside
``centre +- half_width`` and ``x = half_width * t``,

    exp(-iHt) = exp(-i centre t) sum_m (2 - [m=0]) (-i)^m J_m(x) T_m((H - centre) / half_width).

H and the start are real, and so are the vectors ``T_m |start>``: the even ones add up to the real part, the odd ones
to the imaginary part, and any number of measuring times are sums over the same vectors. Two vectors are held, each
overwritten by the next but one. Of every four passes the last two add two vectors each to the sums, while these are
in registers anyway. Only ``_advanced`` and ``_advance_few`` know that the moving part of H flips single spins.

Every decision rests on this diagonal, hopping and list of times alone, through products that a common power of two
leaves unchanged to the last bit. A measuring time is answered with the same bits whatever other times are asked for.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I64
from patchwalk.subsolvers.lanes import CACHE_LINE, WIDTH, Block, add, fma, fms, load, prefetch, splat, store, swap

UNIFORM = -1
"""The ``start`` that stands for the uniform superposition."""

NEGLECTED = 28.0
"""The series ends where its Bessel functions have fallen below exp(-NEGLECTED), about 1e-12, by a generous bound."""

VANISHED = 74.0
"""The downward recurrence for the Bessel functions begins where they have fallen below exp(-VANISHED)."""

TINY_ARGUMENT = 1e-9
"""Up to here J_0(x) = 1 and J_1(x) = x/2 to machine precision, and nothing else counts."""

SUMS_BYTES = 1 << 27
"""Memory for the sums of one recursion; more measuring times than fit are split over several recursions."""


@compiled
def _order_reaching(x: float, decay: float) -> int:
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
def _terms(x: float) -> int:
    """Chebyshev vectors needed, T_0 included: a multiple of four, as four passes make one round of summing."""
    return (_order_reaching(x, NEGLECTED) + 4) // 4 * 4


@compiled
def expected_applications(span_of_diagonal: float, spins: int, hopping: float, longest_time: float) -> int:
    """Applications of H in one recursion, from the span of the diagonal (largest minus smallest entry).

    Up to :func:`times_together` measuring times share one recursion.
    """
    half_width = 0.5 * span_of_diagonal + spins * abs(hopping)
    return _terms(half_width * abs(longest_time)) - 1


@compiled
def times_together(spins: int, times: int) -> int:
    """How many of so many measuring times share one recursion: all of them, unless 2^spins is very large."""
    return max(1, min(times, SUMS_BYTES // (16 << spins)))


@compiled
def _padded(size: int) -> int:
    """Distance between vectors: whole cache lines, but no multiple of a page, where they would evict one another."""
    return (size + CACHE_LINE - 1) // CACHE_LINE * CACHE_LINE + 9 * CACHE_LINE


@compiled
def workspace_bytes(spins: int, times: int) -> int:
    """Memory that :func:`walk_law` holds for itself, beside its arguments and the table of coefficients."""
    return 8 * (CACHE_LINE + (3 + 2 * times_together(spins, times)) * _padded(1 << spins))


@compiled
def _fill_bessel(x: float, values: F64) -> None:
    """values[m] = J_m(x) for x >= 0, by downward recurrence, normalised by J_0 + 2 J_2 + 2 J_4 + ... = 1."""
    if x <= TINY_ARGUMENT:
        values[:] = 0.0
        values[0] = 1.0
        values[1] = 0.5 * x
        return
    top = max(_order_reaching(x, VANISHED), len(values))
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
def _coefficients(half_width: float, times: F64, terms: I64) -> F64:
    """What each Chebyshev vector (column) adds to each time's sums (row), signs included.

    ``terms`` (M,) is filled with the number of columns that count in each row; the others are zero.
    """
    for row in range(len(times)):
        terms[row] = _terms(half_width * abs(times[row]))
    table = np.zeros((len(times), terms.max()))
    for row in range(len(times)):
        x = half_width * times[row]
        _fill_bessel(abs(x), table[row, : terms[row]])
        for term in range(1, terms[row]):
            # (-i)^m runs through 1, -i, -1, i; odd orders change sign with x
            table[row, term] *= 2.0 if (term + 1) % 4 < 2 else -2.0
            if x < 0.0 and term % 2 == 1:
                table[row, term] = -table[row, term]
    return table


@compiled
def _advanced(diagonal: F64, pull: float, now: F64, earlier: Block, first: int) -> Block:
    """One block of 2 H now - earlier: near neighbours from registers, far ones loaded.

    Far neighbours go in turn to an addition and to a multiply-add, which have separate units in the processor.
    """
    hop = splat(-pull)
    here = load(now, first)
    result = fms(load(diagonal, first), here, earlier)
    near = add(add(swap(here, 1), swap(here, 2)), swap(here, 4))
    neighbours = add(add(near, swap(here, 32)), add(swap(here, 8), swap(here, 16)))
    distance = WIDTH
    while distance < len(diagonal):
        neighbours = add(neighbours, load(now, first ^ distance))
        distance *= 2
        if distance < len(diagonal):
            result = fma(hop, load(now, first ^ distance), result)
            distance *= 2
    return fma(hop, neighbours, result)


@compiled
def _advance(diagonal: F64, pull: float, now: F64, earlier: F64) -> None:
    """Overwrite ``earlier`` by 2 H now - earlier; ``diagonal`` and ``pull`` are doubled already."""
    for first in range(0, len(diagonal), WIDTH):
        store(earlier, first, _advanced(diagonal, pull, now, load(earlier, first), first))


@compiled
def _advance_and_sum(
    diagonal: F64, pull: float, now: F64, earlier: F64, sums: F64, weights: F64, term: int, rows: int
) -> None:
    """The same, adding ``earlier`` (T_{term-2}) and its successor (T_term) to the first ``rows`` sums on the way.

    ``sums`` is flat, one padded vector a row, and uninitialised in the first round.
    """
    stride = _padded(len(diagonal))
    for first in range(0, len(diagonal), WIDTH):
        old = load(earlier, first)
        new = _advanced(diagonal, pull, now, old, first)
        store(earlier, first, new)
        for row in range(rows):
            place = row * stride + first
            prefetch(sums, place + WIDTH)
            total = load(sums, place) if term >= 4 else splat(0.0)
            total = fma(splat(weights[row, term - 2]), old, total)
            store(sums, place, fma(splat(weights[row, term]), new, total))


@compiled
def _advance_few(
    diagonal: F64, pull: float, now: F64, earlier: F64, sums: F64, weights: F64, term: int, rows: int
) -> None:
    """Both of the above for vectors shorter than one block."""
    size = len(diagonal)
    for number in range(size):
        neighbours = 0.0
        distance = 1
        while distance < size:
            neighbours += now[number ^ distance]
            distance *= 2
        old = earlier[number]
        earlier[number] = diagonal[number] * now[number] - old - pull * neighbours
        for row in range(rows):
            place = row * _padded(size) + number
            total = sums[place] if term >= 4 else 0.0
            sums[place] = total + weights[row, term - 2] * old + weights[row, term] * earlier[number]


@compiled
def _sum_series(diagonal: F64, pull: float, now: F64, earlier: F64, sums: F64, weights: F64, terms: I64) -> None:
    """Run the recursion from T_0 in ``now``. The real sums of all rows come first in ``sums``, then the imaginary ones.

    Rows are ordered with the longest series first, so that the shorter ones drop out from the end.
    """
    imaginary = sums[len(sums) // 2 :]
    earlier[:] = 0.0
    active = len(terms)
    for term in range(1, terms[0]):
        while terms[active - 1] <= term:
            active -= 1
        part = imaginary if term % 2 == 1 else sums
        rows = active if term % 4 >= 2 else 0
        if len(diagonal) < WIDTH:
            _advance_few(diagonal, pull, now, earlier, part, weights, term, rows)
        elif rows > 0:
            _advance_and_sum(diagonal, pull, now, earlier, part, weights, term, rows)
        else:
            _advance(diagonal, pull, now, earlier)
        if term == 1:
            earlier *= 0.5  # T_1 = H T_0, without the factor of two
        now, earlier = earlier, now


@compiled
def _longest_first(times: F64) -> I64:
    """The order of the times by falling length; equal ones stay in line."""
    order = np.empty(len(times), np.int64)
    for index in range(len(times)):
        place = index
        while place > 0 and abs(times[order[place - 1]]) < abs(times[index]):
            order[place] = order[place - 1]
            place -= 1
        order[place] = index
    return order


@compiled
def _aligned(size: int) -> F64:
    """An uninitialised vector that begins on a cache line."""
    memory = np.empty(size + CACHE_LINE)
    shift = (-(memory.ctypes.data // 8)) % CACHE_LINE
    return memory[shift : shift + size]


@compiled
def _centre_and_half_width(diagonal: F64, reach: float) -> tuple[float, float]:
    """An interval that holds the whole spectrum; ``reach`` bounds the moving part of H."""
    lowest = highest = diagonal[0]
    for level in diagonal:
        lowest = min(lowest, level)
        highest = max(highest, level)
    return 0.5 * lowest + 0.5 * highest, 0.5 * highest - 0.5 * lowest + reach


@compiled
def _write(even: F64, odd: F64, phase: float, real: F64, imaginary: F64, law_only: bool) -> None:
    """Turn the two sums of one time into its law, or into its amplitudes times exp(-i phase)."""
    if law_only:
        for number in range(len(even)):
            real[number] = even[number] * even[number] + odd[number] * odd[number]
        return
    cosine, sine = math.cos(phase), math.sin(phase)
    for number in range(len(even)):
        real[number] = even[number] * cosine + odd[number] * sine
        imaginary[number] = odd[number] * cosine - even[number] * sine


@compiled
def _propagate(diagonal: F64, hopping: float, start: int, times: F64, real: F64, imaginary: F64, law_only: bool) -> int:
    """Fill ``real`` with the law, or both parts with the amplitudes; returns the applications of H."""
    size, spins = len(diagonal), 0
    while 1 << spins < size:
        spins += 1
    centre, half_width = _centre_and_half_width(diagonal, spins * abs(hopping))
    twice = 2.0 / half_width if half_width > 0.0 else 0.0

    stride = _padded(size)
    together = times_together(spins, len(times))
    workspace = _aligned((3 + 2 * together) * stride)
    scaled, now, other = workspace[:size], workspace[stride:][:size], workspace[2 * stride :][:size]
    for number in range(size):
        scaled[number] = (diagonal[number] - centre) * twice

    order = _longest_first(times)
    applications = 0
    for begin in range(0, len(times), together):
        group = order[begin : begin + together]
        terms = np.empty(len(group), np.int64)
        weights = _coefficients(half_width, times[group], terms)
        applications += terms[0] - 1
        if start < 0:
            now[:] = math.sqrt(1.0 / size)
        else:
            now[:] = 0.0
            now[start] = 1.0
        even = workspace[3 * stride :][: 2 * len(group) * stride]
        odd = even[len(group) * stride :]
        _sum_series(scaled, hopping * twice, now, other, even, weights, terms)
        for row in range(len(group)):
            target, place = group[row], row * stride
            phase = centre * times[target]
            _write(even[place:][:size], odd[place:][:size], phase, real[target], imaginary[target], law_only)
    return applications


@compiled
def walk_law(diagonal: F64, hopping: float, start: int, times: F64, law: F64) -> int:
    """Outcome probabilities of a walk: law[m, x] = |<x| exp(-iHt_m) |start>|^2.

    ``diagonal`` f64 (N,) with N = 2^k and ``hopping`` are energies; ``start`` is the number of a configuration, or -1
    for the uniform superposition; ``times`` f64 (M,) are in units of 1/energy, in any order; ``law`` is f64 (M, N).
    Returns the number of applications of H. Nothing is checked: see :func:`evolve`.
    """
    return _propagate(diagonal, hopping, start, times, law, law, True)


@compiled
def walk_amplitudes(diagonal: F64, hopping: float, start: int, times: F64, real: F64, imaginary: F64) -> int:
    """Amplitudes of exp(-iHt_m)|start>, global phase included, into ``real`` and ``imaginary`` f64 (M, N).

    Other arguments and the result as for :func:`walk_law`.
    """
    return _propagate(diagonal, hopping, start, times, real, imaginary, False)


def evolve(
    diagonal: npt.ArrayLike, hopping: float, times: npt.ArrayLike, start: int | None = None
) -> npt.NDArray[np.complex128]:
    """Amplitudes complex (M, N) of exp(-iHt)|start> for H = -hopping * sum_i X_i + diag(diagonal).

    ``diagonal`` (N,) with N = 2^k and ``hopping`` are energies, ``times`` (M,) or a single time in units of 1/energy;
    ``start`` is the number of a configuration, or None for the uniform superposition. Raises ``ValueError`` for a
    diagonal whose length is no power of two, for values that are not finite and for a start outside the diagonal.

    A spin in a transverse field turns over in half a period:

    >>> import math, numpy
    >>> amplitudes = evolve([0.0, 0.0], hopping=1.0, times=[math.pi / 2], start=0)
    >>> bool(numpy.allclose(amplitudes, [[0, 1j]]))
    True
    """
    levels = np.ascontiguousarray(diagonal, np.float64)
    moments = np.atleast_1d(np.ascontiguousarray(times, np.float64))
    size = levels.size
    if levels.ndim != 1 or size < 2 or size & (size - 1):
        raise ValueError(f"diagonal has shape {levels.shape}; give one entry for each of 2, 4, 8, ... configurations")
    if moments.ndim != 1 or not moments.size:
        raise ValueError(f"times has shape {moments.shape}; give one time or a list of times")
    for name, values in (("diagonal", levels), ("hopping", np.float64(hopping)), ("times", moments)):
        if not np.isfinite(values).all():
            raise ValueError(f"{name} holds nan or infinity; give finite numbers")
    if start is not None and not 0 <= start < size:
        raise ValueError(f"start is {start}; give a configuration number from 0 to {size - 1}, or None")
    real = np.empty((len(moments), size))
    imaginary = np.empty_like(real)
    walk_amplitudes(levels, float(hopping), UNIFORM if start is None else start, moments, real, imaginary)
    return real + 1j * imaginary
