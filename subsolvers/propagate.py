"""exp(-iHt) without a matrix, for H = -hopping * D + diag(diagonal) on k spins, D a driver of drivers.py (hbar = 1).

Chebyshev propagation (Tal-Ezer & Kosloff, J. Chem. Phys. 81 (1984) 3967): the series is in coefficients.py, one step
of it in hamiltonian.py. H and the start are real, and so are the vectors ``T_m |start>``: the even ones add up to the
real part, the odd ones to the imaginary part, and any number of measuring times are sums over the same vectors. Two
vectors are held, each overwritten by the next but one. Of every four steps the last two add two vectors each to the
sums, while these are in registers anyway. A time of which only a few amplitudes are wanted needs no sums over whole
vectors: these amplitudes are *watched* as the vectors go by.

The element type of the workspace decides the precision of the vectors. Every decision rests on this diagonal,
hopping and list of times alone, through products that a common power of two leaves unchanged to the last bit. A
measuring time is answered with the same bits whatever other times are asked for.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from patchwalk.subsolvers.coefficients import DOUBLE_DECAY, series_coefficients, series_terms
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I64
from patchwalk.subsolvers.drivers import DRIVERS, PAIRS, driver_range
from patchwalk.subsolvers.hamiltonian import (
    BYTE_STEP,
    Number,
    Vector,
    advance,
    advance_far,
    advance_few,
    aligned,
    diagonal_vectors,
    half_width_within,
    held_vectors,
    is_far,
    padded,
    spins_of,
    times_together,
    workspace_size,
)
from patchwalk.subsolvers.lanes import width_in
from patchwalk.subsolvers.spectrum import cluster_energies

UNIFORM = -1
"""The ``start`` that stands for the uniform superposition."""


@compiled
def expected_applications(x: float, decay: float) -> int:
    """Applications of H in one recursion that reaches ``x`` = half width times longest time."""
    return series_terms(x, decay) - 1


@compiled
def _watch(vector: Vector, watched: I64, weights: F64, term: int, amplitudes: F64) -> None:
    """Add the watched entries of T_term to amplitudes (2, W, M): even terms to the real part, odd ones to the other."""
    for place in range(len(watched)):
        value = float(vector[watched[place]])
        for column in range(weights.shape[1]):
            amplitudes[term % 2, place, column] += weights[term, column] * value


@compiled
def sum_series(
    driver: int, size: int, diagonal: Vector, pull: Number, start: int, vectors: Vector, weights: F64, terms: I64,
    columns: I64, watched: I64, amplitudes: F64,
) -> int:  # fmt: skip
    """One recursion: sums over whole vectors for ``columns``, single amplitudes of all columns for ``watched``.

    ``diagonal`` and ``pull`` are those of 2 (H - centre) / half_width on ``size`` configurations. ``vectors`` is flat,
    padded vectors one after the other: two for the recursion, one more for the pairs, then the real sums of all
    columns, then the imaginary ones. Columns are ordered with the longest series first, so that the shorter ones drop
    out from the end. ``amplitudes`` f64 (2, W, M), real and imaginary, starts from zero. Returns the applications of
    H.
    """
    stride = padded(size, diagonal.itemsize)
    now, earlier, spare = vectors[:size], vectors[stride:][:size], vectors[2 * stride :][:size]
    sums = vectors[held_vectors(driver) * stride :]
    earlier[:] = 0.0
    now[:] = math.sqrt(1.0 / size) if start == UNIFORM else 0.0
    if start != UNIFORM:
        now[start] = 1.0
    _watch(now, watched, weights, 0, amplitudes)
    last = len(weights) if len(watched) else terms[columns[0]]
    active, far = len(columns), is_far(driver, size, diagonal.itemsize)
    for term in range(1, last):
        while active and terms[columns[active - 1]] <= term:
            active -= 1
        base = (term % 2) * len(columns) * stride
        summed = active if term % 4 >= 2 else 0
        if size < width_in(now):
            advance_few(driver, diagonal, pull, now, spare, earlier, sums, base, weights, columns, summed, term)
        elif far:
            advance_far(diagonal, pull, now, earlier, sums, base, weights, columns, summed, term)
        else:
            advance(driver, diagonal, pull, now, spare, earlier, sums, base, weights, columns, summed, term)
        if term == 1:
            earlier *= diagonal.dtype.type(0.5)  # T_1 = H T_0, without the factor of two
        _watch(earlier, watched, weights, term, amplitudes)
        now, earlier = earlier, now
    return last - 1


@compiled
def longest_first(times: F64) -> I64:
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
def scale_spectrum(diagonal: F64, driver: int, hopping: float, scaled: Vector) -> tuple[float, float, float]:
    """Centre and half width of an interval that holds the spectrum of H, and the pull that goes with ``scaled``.

    ``scaled`` is filled with the diagonal of 2 (H - centre) / half_width, as :func:`sum_series` wants it.
    """
    lowest = highest = diagonal[0]
    for level in diagonal:
        lowest = min(lowest, level)
        highest = max(highest, level)
    spins = spins_of(len(diagonal))
    low, high = driver_range(driver, spins)
    downward, upward = (high, -low) if hopping >= 0.0 else (-low, high)
    centre = 0.5 * lowest + 0.5 * highest + 0.5 * (upward - downward) * abs(hopping)
    half_width = half_width_within(driver, spins, hopping, highest - lowest)
    if hopping != 0.0 and half_width > 0.0:  # a little wider, so that the pull is a number of this precision exactly
        half_width *= 1.0 + 2.0**-22
        half_width = 2.0 * hopping / float(scaled.dtype.type(2.0 * hopping / half_width))
    twice = 2.0 / half_width if half_width > 0.0 else 0.0
    pull = hopping * twice
    constant = 0.0
    if driver == PAIRS:
        pull *= 0.5
        constant = pull * spins
    behind, in_bytes = padded(len(diagonal), scaled.itemsize), scaled.view(np.int8)
    far = is_far(driver, len(diagonal), scaled.itemsize)
    for number in range(len(diagonal)):
        entry = (diagonal[number] - centre) * twice + constant
        scaled[number] = entry
        if scaled.itemsize == 4:
            rest = entry - float(scaled[number])
            if far:
                in_bytes[4 * behind + number] = np.int8(max(-127.0, min(127.0, np.rint(rest / BYTE_STEP))))
            else:
                scaled[behind + number] = rest
    return centre, half_width, pull


@compiled
def _propagate(
    diagonal: F64, driver: int, hopping: float, start: int, times: F64, decay: float, workspace: Vector, real: F64,
    imaginary: F64, law_only: bool,
) -> int:  # fmt: skip
    """Fill ``real`` (M, N) with the law, or both parts with the amplitudes; returns the applications of H."""
    size = len(diagonal)
    workspace = aligned(workspace)
    stride = padded(size, workspace.itemsize)
    behind = diagonal_vectors(workspace.itemsize) * stride
    scaled, vectors = workspace[:behind], workspace[behind:]
    centre, half_width, pull = scale_spectrum(diagonal, driver, hopping, scaled)
    terms = np.empty(len(times), np.int64)
    weights = series_coefficients(half_width, times, decay, terms)
    order, together = longest_first(times), times_together(spins_of(size), len(times), workspace.itemsize)
    nothing, nowhere = np.empty(0, np.int64), np.empty((2, 0, 0))
    applications = 0
    for begin in range(0, len(times), together):
        group = order[begin : begin + together]
        applications += sum_series(
            driver, size, scaled, scaled.dtype.type(pull), start, vectors, weights, terms, group, nothing, nowhere
        )
        even = vectors[held_vectors(driver) * stride :]
        odd = even[len(group) * stride :]
        for row in range(len(group)):
            target, place = group[row], row * stride
            phase = 0.0 if law_only else centre * times[target]
            cosine, sine = math.cos(phase), math.sin(phase)
            for number in range(size):
                here, there = float(even[place + number]), float(odd[place + number])
                if law_only:
                    real[target, number] = here * here + there * there
                else:
                    real[target, number] = here * cosine + there * sine
                    imaginary[target, number] = there * cosine - here * sine
    return applications


def new_workspace(driver: int, spins: int, times: int, single: bool = False) -> Vector:
    """Memory for the walks of clusters of one size, one after the other."""
    dtype = np.float32 if single else np.float64
    return np.empty(workspace_size(driver, spins, times, np.dtype(dtype).itemsize), dtype)


def level_table(fields: F64, couplings: F64) -> F64:
    """The diagonal of one cluster: all its energies, f64 (2^k,)."""
    energies = np.empty(1 << len(fields))
    cluster_energies(fields, couplings, energies)
    return energies


def walk_law(
    diagonal: F64,
    hopping: float,
    start: int,
    times: F64,
    law: F64,
    driver: int = 0,
    workspace: Vector | None = None,
    decay: float = DOUBLE_DECAY,
) -> int:
    """Outcome probabilities of a walk: law[m, x] = |<x| exp(-iHt_m) |start>|^2.

    ``diagonal`` f64 (N,) with N = 2^k and ``hopping`` are energies; ``start`` is the number of a configuration, or -1
    for the uniform superposition; ``times`` f64 (M,) are in units of 1/energy, in any order; ``law`` is f64 (M, N).
    Double precision, unless another ``workspace`` and ``decay`` of the series are given. Returns the number of
    applications of H. Nothing is checked: see :func:`evolve`.
    """
    if workspace is None:
        workspace = new_workspace(driver, len(diagonal).bit_length() - 1, len(times))
    return _propagate(diagonal, driver, hopping, start, times, decay, workspace, law, law, True)


def evolve(
    diagonal: npt.ArrayLike,
    hopping: float,
    times: npt.ArrayLike,
    start: int | None = None,
    driver: str = "hypercube",
) -> npt.NDArray[np.complex128]:
    """Amplitudes complex (M, N) of exp(-iHt)|start> for H = -hopping * D + diag(diagonal), in double precision.

    ``diagonal`` (N,) with N = 2^k and ``hopping`` are energies, ``times`` (M,) or a single time in units of 1/energy;
    ``start`` is the number of a configuration, or None for the uniform superposition; ``driver`` names D. Raises
    ``ValueError`` for a diagonal whose length is no power of two, for values that are not finite, for a start outside
    the diagonal and for an unknown driver.

    A spin in a transverse field turns over in half a period:

    >>> import math, numpy
    >>> amplitudes = evolve([0.0, 0.0], hopping=1.0, times=[math.pi / 2], start=0)
    >>> bool(numpy.allclose(amplitudes, [[0, 1j]]))
    True
    """
    levels = np.array(diagonal, np.float64)
    moments = np.atleast_1d(np.array(times, np.float64))
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
    if driver not in DRIVERS:
        raise ValueError(f"driver is {driver!r}; it is one of {', '.join(DRIVERS)}")
    kind, origin = DRIVERS.index(driver), UNIFORM if start is None else start
    real = np.empty((len(moments), size))
    imaginary = np.empty_like(real)
    workspace = new_workspace(kind, size.bit_length() - 1, len(moments))
    _propagate(levels, kind, float(hopping), origin, moments, DOUBLE_DECAY, workspace, real, imaginary, False)
    return real + 1j * imaginary
