"""All 2^k energies of a cluster, and the numbering of its configurations.

``E(s) = sum_i h_i s_i + sum_{i<j} J_ij s_i s_j``. Configuration ``x`` has ``s_i = +1`` where bit ``i`` of ``x`` (least
significant first) is 0, and ``s_i = -1`` where it is 1. A constant offset is left to the pipeline.
"""

from __future__ import annotations

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I64
from patchwalk.subsolvers.fused import plus_product

TIE_SHARE = 1e-9
"""Two energies of a cluster are tied when they differ by at most this share of the sum of all absolute weights."""

LANES = 64
"""Numbers side by side in loops that reduce many to one: enough for any vector unit."""


@compiled
def cluster_energies(fields: F64, couplings: F64, energies: F64) -> None:
    """Fill ``energies`` f64 (2^k,) with the energy of every configuration.

    ``fields`` f64 (k,); ``couplings`` f64 (k, k), of which only the part above the diagonal is read. Spins join one
    after the other. The pull of the spins present on the newcomer is tabulated in the half of ``energies`` that the
    newcomer adds, and then becomes both halves' energies: three additions an entry, and no second table.
    """
    energies[0] = 0.0
    for spin in range(len(fields)):
        present = 1 << spin
        here = energies[:present]
        pull = energies[present : 2 * present]
        pull[0] = fields[spin]
        for other in range(spin):
            pull[0] += couplings[other, spin]
        for other in range(spin):
            known = 1 << other
            flipped = -2.0 * couplings[other, spin]
            for number in range(known):
                pull[known + number] = pull[number] + flipped
        for number in range(present):
            energy = here[number]
            change = pull[number]
            here[number] = energy + change
            pull[number] = energy - change


@compiled
def tie_tolerance(fields: F64, couplings: F64) -> float:
    """The energy difference below which two configurations of this cluster are tied, in energy units."""
    total = 0.0
    for spin in range(len(fields)):
        total += abs(fields[spin])
        for other in range(spin):
            total += abs(couplings[other, spin])
    return TIE_SHARE * total


@compiled
def lowest_of(energies: F64) -> float:
    """The lowest of 2^k energies."""
    lanes = energies[: min(LANES, len(energies))].copy()
    for first in range(len(lanes), len(energies), len(lanes)):
        here = energies[first : first + len(lanes)]
        for x in range(len(lanes)):
            lanes[x] = here[x] if here[x] < lanes[x] else lanes[x]
    return float(lanes.min())


@compiled
def count_ties(energies: F64, ceiling: float, ties: I64) -> None:
    """Fill ``ties`` i64 (B,) with how many energies of each of B equal parts are at or below ``ceiling``."""
    part = len(energies) // len(ties)
    for index in range(len(ties)):
        count = 0
        for energy in energies[index * part : (index + 1) * part]:
            count += 1 if energy <= ceiling else 0
        ties[index] = count


@compiled
def boltzmann_factor(exponent: float) -> float:
    """exp(-exponent) for exponent >= 0, to 3e-16 of itself, and zero from 708 on.

    The library's exponential keeps a loop from being vectorised; this one does not. The exponent is a multiple n of
    ln 2, split in two so that the product is exact, and a rest below 0.35 for the power series; adding ``shift``
    rounds to n and leaves it in the low bits of the sum, from where it is moved to the exponent of the result.
    """
    shift = 6755399441055744.0
    capped = exponent if exponent < 708.0 else 708.0
    shifted = np.float64(capped * -1.4426950408889634 + shift)
    n = shifted - shift
    rest = -capped - n * 0.693145751953125 - n * 1.4286068203094172e-06
    series = plus_product(1.0 / 479001600.0, rest, 1.0 / 6227020800.0)
    series = plus_product(1.0 / 39916800.0, rest, series)
    series = plus_product(1.0 / 3628800.0, rest, series)
    series = plus_product(1.0 / 362880.0, rest, series)
    series = plus_product(1.0 / 40320.0, rest, series)
    series = plus_product(1.0 / 5040.0, rest, series)
    series = plus_product(1.0 / 720.0, rest, series)
    series = plus_product(1.0 / 120.0, rest, series)
    series = plus_product(1.0 / 24.0, rest, series)
    series = plus_product(1.0 / 6.0, rest, series)
    series = plus_product(1.0 / 2.0, rest, series)
    series = plus_product(1.0, rest, series)
    series = plus_product(1.0, rest, series)
    power_of_two = np.int64((shifted.view(np.int64) + 1023) << 52).view(np.float64)
    return series * power_of_two if exponent < 708.0 else 0.0


@compiled
def configuration_number(spins: I8) -> int:
    """The number of a configuration given as spins (k,) in {+1, -1}."""
    number = 0
    for spin in range(len(spins)):
        if spins[spin] < 0:
            number |= 1 << spin
    return number


@compiled
def write_configuration(number: int, spins: I8) -> None:
    """Write the configuration with this number into ``spins`` (k,)."""
    for spin in range(len(spins)):
        spins[spin] = 1 - 2 * ((number >> spin) & 1)
