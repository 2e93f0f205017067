"""The order of elimination that adds the fewest couplings at every step: minimum fill.

The usual greedy rule for irregular graphs. Rows of the coupling graph are words of bits, so that common neighbours are
counted 64 at a time.
"""

from __future__ import annotations

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import I32, I64, U64


@compiled
def fill_least(starts: I64, neighbours: I32, limit: int, budget: float, order: I32) -> bool:
    """The order that adds the fewest couplings at every step, the spin of lowest degree first among several.

    Returns False, and no order, beyond ``limit`` or ``budget`` table entries.
    """
    size = len(order)
    links = np.zeros((size, (size + 63) // 64), np.uint64)
    for spin in range(size):
        for edge in range(starts[spin], starts[spin + 1]):
            links[spin, neighbours[edge] >> 6] |= _bit(neighbours[edge])
    left, scope, around = np.arange(size).astype(np.int32), np.empty(size, np.int32), np.empty(size, np.int32)
    price, met_by = np.empty(size, np.int64), np.full(size, -1, np.int64)
    for spin in range(size):
        price[spin] = _price(links, spin, limit, around)
    entries = 0.0
    for rank in range(size):
        place = 0
        for other in range(1, size - rank):
            if price[left[other]] < price[left[place]]:
                place = other
        spin = left[place]
        left[place] = left[size - rank - 1]
        degree = _list_bits(links[spin], scope)
        entries += 2.0**degree
        if degree > limit or entries >= budget:
            return False
        order[rank] = spin
        for other in scope[:degree]:
            for word in range(links.shape[1]):
                links[other, word] |= links[spin, word]
            links[other, other >> 6] &= ~_bit(other)
            links[other, spin >> 6] &= ~_bit(spin)
            met_by[other] = size + rank
        for other in scope[:degree]:
            price[other] = _price(links, other, limit, around)
            for neighbour in around[: _list_bits(links[other], around)]:
                if met_by[neighbour] == rank:  # next to both ends of what may be a new coupling
                    price[neighbour] = -1
                elif met_by[neighbour] < size:
                    met_by[neighbour] = rank
        for other in left[: size - rank - 1]:
            if price[other] < 0:
                price[other] = _price(links, other, limit, around)
    return True


@compiled
def _price(links: U64, spin: int, limit: int, around: I32) -> int:
    """What minimum fill orders spins by: couplings that eliminating one would add, then its degree."""
    degree = _list_bits(links[spin], around)
    if degree > limit:
        return len(links) ** 3 + degree
    missing = degree * (degree - 1)
    for word in range(links.shape[1]):
        own = links[spin, word]
        if own != 0:
            for other in around[:degree]:
                missing -= _ones(own & links[other, word])
    return missing * len(links) + degree


@compiled
def _bit(spin: int) -> np.uint64:
    return np.uint64(1) << np.uint64(spin & 63)


@compiled
def _ones(word: np.uint64) -> int:
    """How many bits are set, added up in pairs, then fours, then bytes."""
    word -= (word >> np.uint64(1)) & np.uint64(0x5555555555555555)
    word = (word & np.uint64(0x3333333333333333)) + ((word >> np.uint64(2)) & np.uint64(0x3333333333333333))
    word = (word + (word >> np.uint64(4))) & np.uint64(0x0F0F0F0F0F0F0F0F)
    return int((word * np.uint64(0x0101010101010101)) >> np.uint64(56))


@compiled
def _list_bits(row: U64, members: I32) -> int:
    """Write the numbers of the bits set in a row of words into ``members``; returns how many there are."""
    count = 0
    for word in range(len(row)):
        bits = row[word]
        while bits != 0:
            lowest = bits & (~bits + np.uint64(1))
            members[count] = 64 * word + _ones(lowest - np.uint64(1))
            count += 1
            bits ^= lowest
    return count
