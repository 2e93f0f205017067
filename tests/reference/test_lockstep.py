"""Chains side by side end as they do alone, and the numbers they decide by are exponentially distributed."""

from __future__ import annotations

from typing import Any, Literal

import numpy as np
import pytest
from scipy.stats import kstest

from patchwalk.subsolvers import ClusterBatch, Edges, make_subsolver
from patchwalk.subsolvers.allowances import draw_allowances, minus_log_of_unit, open_streams
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.draws import combine, next_word
from patchwalk.subsolvers.fused import plus_product
from patchwalk.subsolvers.lockstep import (
    LANES,
    add,
    add_product,
    anywhere,
    both,
    differ,
    either,
    load,
    multiply,
    not_above,
    room_for_packs,
    spread,
    store,
    where,
)
from patchwalk.subsolvers.metropolis import Metropolis


def clusters(rows: int, size: int, density: float, plus_minus: bool, seed: int = 4) -> ClusterBatch:
    rng = np.random.default_rng(seed)
    values = rng.choice([-1.0, 1.0], (rows, size, size)) if plus_minus else rng.normal(size=(rows, size, size))
    upper = np.triu(values * (rng.random((rows, size, size)) < density), 1)
    return ClusterBatch(
        fields=rng.integers(-1, 2, (rows, size)) if plus_minus else rng.normal(size=(rows, size)),
        spins=rng.choice([-1, 1], (rows, size)),
        temperature=rng.random(rows) * (np.arange(rows) % 4 > 0),
        seeds=rng.integers(0, 2**63, rows),
        couplings=upper + upper.transpose(0, 2, 1),
    )


@pytest.mark.parametrize("plus_minus", [False, True])
@pytest.mark.parametrize("draw", ["minimum", "boltzmann"])
@pytest.mark.parametrize(("size", "density", "shots"), [(1, 1.0, 1), (7, 1.0, 3), (12, 0.0, 1), (30, 0.1, 1)])
def test_eight_abreast_end_as_each_alone(
    size: int, density: float, shots: int, draw: Literal["minimum", "boltzmann"], plus_minus: bool
) -> None:
    """To the last bit, also the last group of eight that is not full, and whichever share is run alone."""
    batch = clusters(11, size, density, plus_minus)
    subsolver = Metropolis(draw=draw, sweeps=8, shots=shots)
    chains = 11 * shots
    outcomes, rises = subsolver._run(batch, 0)
    for alone in (chains, 4):
        others, other_rises = subsolver._run(batch, alone)
        assert outcomes.tobytes() == others.tobytes()
        np.testing.assert_array_equal(rises, other_rises)
    assert len(np.unique(outcomes)) == 2


def test_edges_in_any_order_are_the_same_clusters() -> None:
    batch = clusters(9, 16, 0.4, plus_minus=False)
    assert batch.couplings is not None
    rows, first, second = np.nonzero(np.triu(batch.couplings, 1))
    shuffled = np.lexsort((np.random.default_rng(1).random(len(rows)), rows))
    edges = Edges(
        np.searchsorted(rows, np.arange(10)), np.stack([first, second], axis=1)[shuffled],
        batch.couplings[rows, first, second][shuffled],
    )  # fmt: skip
    sparse = ClusterBatch(batch.fields, batch.spins, batch.temperature, batch.seeds, edges=edges)
    subsolver = make_subsolver("metropolis", draw="boltzmann", sweeps=6)
    one, other = subsolver.propose(batch), subsolver.propose(sparse)
    assert one.outcomes.tobytes() == other.outcomes.tobytes()
    np.testing.assert_array_equal(one.log_ratio, other.log_ratio)


@pytest.mark.parametrize("parameters", [{}, {"draw": "boltzmann"}])
def test_the_unit_of_energy_does_not_matter(parameters: dict[str, Any]) -> None:
    batch = clusters(10, 20, 0.3, plus_minus=False)
    assert batch.couplings is not None
    unit = 2.0**20
    scaled = ClusterBatch(
        unit * batch.fields, batch.spins, unit * batch.temperature, batch.seeds, unit * batch.couplings
    )
    for alone in (0, 10):
        subsolver = Metropolis(**parameters)
        assert subsolver._run(batch, alone)[0].tobytes() == subsolver._run(scaled, alone)[0].tobytes()


def test_allowances_are_logarithms_of_the_words_of_the_stream() -> None:
    """Update n of a chain takes word n of its splitmix64 stream, in whichever lane, sweep after sweep."""
    size, lanes, seed, shot = 5, 8, np.uint64(77), 2
    states, allowances = np.zeros(size * lanes, np.uint64), np.empty(size * lanes)
    open_streams(seed, shot, 3, lanes, states)
    stream = np.array([combine(seed, np.uint64(shot))], np.uint64)
    for _ in range(2):
        draw_allowances(states, size, allowances)
        expected = [minus_log_of_unit(np.uint64(next_word(stream))) for _ in range(size)]
        assert allowances[3::lanes].tolist() == expected


def test_the_logarithm_is_as_good_as_a_longer_one() -> None:
    """Against the library's in extended precision, within 4e-16 of itself, at random words and at both ends."""
    words = np.random.default_rng(2).integers(0, 2**64, 5000, dtype=np.uint64)
    ends = np.array([0, 1 << 12, 2**63 - 1, 2**63, 2**64 - (1 << 30), 2**64 - 1], np.uint64)
    for word in np.concatenate([words, ends]).tolist():
        below = np.longdouble(word >> 12) + np.longdouble(0.5)
        above = np.longdouble(2**52) - below
        exact = -np.log(below / 2**52) if word < 2**63 else -np.log1p(-above / 2**52)
        assert abs(minus_log_of_unit(np.uint64(word)) / exact - 1) < 4e-16


def test_allowances_follow_the_exponential_law() -> None:
    """Kolmogorov-Smirnov over 80,000 numbers; a false alarm with another seed: one in 10,000."""
    states, allowances = np.empty(80_000, np.uint64), np.empty(80_000)
    open_streams(np.uint64(5), 0, 0, 1, states)
    draw_allowances(states, 80_000, allowances)
    assert kstest(allowances, "expon").pvalue > 1e-4


@compiled
def every_operation(one: F64, other: F64, results: F64) -> int:
    left, right = load(one, 0), load(other, 0)
    below, unequal = not_above(left, right), differ(left, right)
    zero = spread(0.0)
    store(results, 0, add(left, right))
    store(results, 1, multiply(left, right))
    store(results, 2, add_product(left, left, right))
    store(results, 3, where(below, left, right))
    store(results, 4, where(both(below, unequal), left, zero))
    store(results, 5, where(either(below, unequal), left, zero))
    return 2 * anywhere(differ(left, left)) + anywhere(unequal)


def test_operations_on_packs_are_those_of_numpy() -> None:
    rng = np.random.default_rng(6)
    one, other, results = rng.normal(size=(1, LANES)), rng.normal(size=(1, LANES)), room_for_packs(6)
    assert results.ctypes.data % 64 == 0
    other[0, 2] = one[0, 2]
    assert every_operation(one, other, results) == 1
    a, b = one[0], other[0]
    fused = (a.astype(np.longdouble) + a.astype(np.longdouble) * b.astype(np.longdouble)).astype(float)
    expected = [a + b, a * b, fused, np.minimum(a, b), np.where(a < b, a, 0), np.where((a <= b) | (a != b), a, 0)]
    np.testing.assert_allclose(results, expected, rtol=2.0**-52, atol=0)
    assert every_operation(one, one, results) == 0


@compiled
def fused_both_ways(pairs: F64, results: F64) -> None:
    for x in range(len(results)):
        results[x] = plus_product(-1.0, pairs[0, x], pairs[1, x])


def test_products_and_sums_are_rounded_once() -> None:
    """(1 + e)(1 - e) - 1 = -e^2, which is lost where the product is rounded first; also in a vectorised loop."""
    small = 2.0 ** -np.arange(27.0, 52.0)
    pairs, results = np.stack([1 + small, 1 - small]), np.empty(len(small))
    fused_both_ways(pairs, results)
    np.testing.assert_array_equal(results, -(small**2))
    packs = room_for_packs(4)
    packs[0], packs[1], packs[2] = pairs[0, :LANES], pairs[1, :LANES], -1.0
    fuse_packs(packs)
    np.testing.assert_array_equal(packs[3], -(small[:LANES] ** 2))


@compiled
def fuse_packs(packs: F64) -> None:
    store(packs, 3, add_product(load(packs, 2), load(packs, 0), load(packs, 1)))
