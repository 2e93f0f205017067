"""Kernels of the cluster bound: growing overlapping clusters, their minima, and the smoothed dual over their shares."""

from __future__ import annotations

import math

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I32, I64
from patchwalk.subsolvers.spectrum import boltzmann_factor, cluster_energies, lowest_of


@compiled
def grow_clusters(starts: I64, neighbours: I32, size: int, overlap: int) -> tuple[I64, I32]:
    """Clusters of at most ``size`` spins: ``member_starts`` i64 (C+1,) and the members, rising, one after the other.

    A cluster takes in, one by one, the spin with the most neighbours in it, the first found among equals. Every spin in
    turn is a centre unless it is in ``overlap`` clusters already; afterwards every coupling that is in none yet becomes
    the beginning of one.
    """
    count = len(starts) - 1
    member_starts, members = [0], [np.int32(0) for _ in range(0)]
    times, links, inside = np.zeros(count, np.int64), np.zeros(count, np.int64), np.zeros(count, np.bool_)
    covered = np.zeros(len(neighbours), np.bool_)
    found, cluster = np.empty(count, np.int32), np.empty(size, np.int32)
    for phase in range(2):
        for centre in range(count):
            for place in range(starts[centre], starts[centre + 1]):
                wanted = (not covered[place]) if phase else (place == starts[centre] and times[centre] < overlap)
                if not wanted:
                    continue
                taken, seen = 0, 0
                newcomer = centre
                while True:
                    cluster[taken] = newcomer
                    inside[newcomer] = True
                    taken += 1
                    for step in range(starts[newcomer], starts[newcomer + 1]):
                        other = neighbours[step]
                        if links[other] == 0:
                            found[seen] = other
                            seen += 1
                        links[other] += 1
                    if taken == size:
                        break
                    newcomer = neighbours[place] if phase and taken == 1 else -1
                    for step in range(seen):
                        other = found[step]
                        if newcomer == neighbours[place] and phase and taken == 1:
                            break
                        if not inside[other] and (newcomer < 0 or links[other] > links[newcomer]):
                            newcomer = other
                    if newcomer < 0:
                        break
                for member in np.sort(cluster[:taken]):
                    members.append(member)
                    times[member] += 1
                    for step in range(starts[member], starts[member + 1]):
                        covered[step] |= inside[neighbours[step]]
                member_starts.append(len(members))
                for step in range(seen):
                    links[found[step]] = 0
                for step in range(taken):
                    inside[cluster[step]] = False
    return np.array(member_starts), np.array(members)


@compiled
def list_cluster_pairs(starts: I64, neighbours: I32, member_starts: I64, members: I32) -> tuple[I64, I32, I32, I64]:
    """The couplings inside each cluster: ``pair_starts`` i64 (C+1,), local indices first < second, and their place in
    ``neighbours``, of the direction from the lower spin to the higher.
    """
    place_in = np.full(len(starts) - 1, -1, np.int32)
    pair_starts = [0]
    firsts, seconds, places = [np.int32(0) for _ in range(0)], [np.int32(0) for _ in range(0)], [0 for _ in range(0)]
    for cluster in range(len(member_starts) - 1):
        own = members[member_starts[cluster] : member_starts[cluster + 1]]
        for i in range(len(own)):
            place_in[own[i]] = i
        for i in range(len(own)):
            for place in range(starts[own[i]], starts[own[i] + 1]):
                if place_in[neighbours[place]] > i:
                    firsts.append(np.int32(i))
                    seconds.append(place_in[neighbours[place]])
                    places.append(place)
        pair_starts.append(len(places))
        for i in range(len(own)):
            place_in[own[i]] = -1
    return np.array(pair_starts), np.array(firsts), np.array(seconds), np.array(places)


@compiled
def write_energies(
    cluster: int,
    member_starts: I64,
    pair_starts: I64,
    firsts: I32,
    seconds: I32,
    shares: F64,
    couplings: F64,
    table: F64,
) -> None:
    """Fill ``table`` (2^k,) with the energies of one cluster; ``couplings`` (k, k) is scratch.

    ``shares`` holds the fields of all members first, then the couplings of all pairs.
    """
    size = member_starts[cluster + 1] - member_starts[cluster]
    couplings[:size, :size] = 0.0
    for pair in range(pair_starts[cluster], pair_starts[cluster + 1]):
        couplings[firsts[pair], seconds[pair]] = shares[member_starts[-1] + pair]
    fields = shares[member_starts[cluster] : member_starts[cluster + 1]]
    cluster_energies(fields, couplings[:size, :size], table)


@compiled
def cluster_minima(member_starts: I64, pair_starts: I64, firsts: I32, seconds: I32, shares: F64, minima: F64) -> None:
    """Fill ``minima`` (C,) with the lowest energy of every cluster."""
    largest = np.max(member_starts[1:] - member_starts[:-1])
    table, couplings = np.empty(1 << largest), np.empty((largest, largest))
    for cluster in range(len(minima)):
        own = table[: 1 << (member_starts[cluster + 1] - member_starts[cluster])]
        write_energies(cluster, member_starts, pair_starts, firsts, seconds, shares, couplings, own)
        minima[cluster] = lowest_of(own)


@compiled
def smoothed_minima(
    member_starts: I64,
    pair_starts: I64,
    firsts: I32,
    seconds: I32,
    shares: F64,
    temperature: float,
    slope: F64,
) -> tuple[float, float]:
    """The sum over clusters of -T ln sum_x exp(-E(x)/T), and the sum of their minima.

    Fills ``slope`` with the derivatives by the shares: the mean spins and mean products of the Boltzmann law, all at
    once by a Walsh-Hadamard transform.
    """
    largest = np.max(member_starts[1:] - member_starts[:-1])
    table, couplings = np.empty(1 << largest), np.empty((largest, largest))
    smooth, sharp = 0.0, 0.0
    for cluster in range(len(member_starts) - 1):
        start, stop = member_starts[cluster], member_starts[cluster + 1]
        own = table[: 1 << (stop - start)]
        write_energies(cluster, member_starts, pair_starts, firsts, seconds, shares, couplings, own)
        lowest = lowest_of(own)
        for x in range(len(own)):
            own[x] = boltzmann_factor((own[x] - lowest) / temperature)
        transform(own)
        sharp += lowest
        smooth += lowest - temperature * math.log(own[0])
        for i in range(stop - start):
            slope[start + i] = own[1 << i] / own[0]
        for pair in range(pair_starts[cluster], pair_starts[cluster + 1]):
            slope[member_starts[-1] + pair] = own[(1 << firsts[pair]) | (1 << seconds[pair])] / own[0]
    return smooth, sharp


@compiled
def transform(table: F64) -> None:
    """Walsh and Hadamard's transform in place: entry m becomes sum_x table[x] (-1)^(bits that x and m share)."""
    half = 1
    while half < len(table):
        for block in range(0, len(table), 2 * half):
            left, right = table[block : block + half], table[block + half : block + 2 * half]
            for x in range(half):
                total, difference = left[x] + right[x], left[x] - right[x]
                left[x], right[x] = total, difference
        half *= 2


@compiled
def center(keys: I64, counts: I64, values: F64, sums: F64) -> None:
    """Take off every value the mean of all that have the same key, so that moving along them keeps their sum."""
    sums[:] = 0.0
    for place in range(len(keys)):
        sums[keys[place]] += values[place]
    for place in range(len(keys)):
        values[place] -= sums[keys[place]] / counts[keys[place]]
