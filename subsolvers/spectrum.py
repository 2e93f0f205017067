"""All 2^k energies of a cluster, and the numbering of its configurations.

``E(s) = sum_i h_i s_i + sum_{i<j} J_ij s_i s_j``. Configuration ``x`` has ``s_i = +1`` where bit ``i`` of ``x`` (least
significant first) is 0, and ``s_i = -1`` where it is 1. A constant offset is left to the pipeline.
"""

from __future__ import annotations

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8

TIE_SHARE = 1e-9
"""Two energies of a cluster are tied when they differ by at most this share of the sum of all absolute weights."""


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
