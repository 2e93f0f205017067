"""The walk as a subsolver: its laws, its draws, its precision, its balance and what is known of walks on glasses."""

from __future__ import annotations

import math
import tracemalloc
from dataclasses import replace
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from scipy.linalg import expm
from scipy.stats import chi2

from patchwalk.subsolvers import ClusterBatch, Status
from patchwalk.subsolvers.calibration import FACTORS
from patchwalk.subsolvers.coefficients import SINGLE_DECAY
from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.drivers import DRIVERS, driver_matrix, driver_range, heuristic_hopping, level_spread
from patchwalk.subsolvers.precision import SINGLE_FROM
from patchwalk.subsolvers.propagate import new_workspace, walk_law
from patchwalk.subsolvers.registry import spelled, subsolver_from
from patchwalk.subsolvers.spectrum import cluster_energies, configuration_number
from patchwalk.subsolvers.walk import Walk


def batch_of(fields: npt.ArrayLike, couplings: npt.ArrayLike, spins: npt.ArrayLike, seed: int = 0) -> ClusterBatch:
    rows = len(np.asarray(fields))
    seeds = np.random.default_rng(seed).integers(0, 2**63, rows, dtype=np.uint64)
    return ClusterBatch(np.asarray(fields), np.asarray(spins), np.ones(rows), seeds, np.asarray(couplings))


def glasses(rows: int, size: int, seed: int) -> ClusterBatch:
    """Fully connected glasses with fields and couplings N(0,1) and random incumbents."""
    draw = np.random.default_rng(seed)
    upper = np.triu(draw.normal(size=(rows, size, size)), 1)
    spins = draw.choice([-1, 1], (rows, size))
    return batch_of(draw.normal(size=(rows, size)), upper + upper.transpose(0, 2, 1), spins, seed)


def repeated(batch: ClusterBatch, count: int, spins: npt.ArrayLike | None = None) -> ClusterBatch:
    """The first cluster so many times, each call with a seed of its own."""
    assert batch.couplings is not None
    incumbents = np.repeat(batch.spins[:1], count, axis=0) if spins is None else spins
    return batch_of(np.repeat(batch.fields[:1], count, 0), np.repeat(batch.couplings[:1], count, 0), incumbents, 7)


def from_every_configuration(batch: ClusterBatch) -> ClusterBatch:
    """The first cluster with every configuration as incumbent in turn."""
    numbers = np.arange(1 << batch.size)
    return repeated(batch, len(numbers), 1 - 2 * (numbers[:, None] >> np.arange(batch.size) & 1))


def energies_of(batch: ClusterBatch, row: int = 0) -> F64:
    assert batch.couplings is not None
    energies = np.empty(1 << batch.size)
    cluster_energies(batch.fields[row], batch.couplings[row], energies)
    return energies


def numbers_of(outcomes: npt.NDArray[np.int8]) -> npt.NDArray[np.int64]:
    return (outcomes < 0).astype(np.int64) @ (1 << np.arange(outcomes.shape[-1]))


def dense_laws(batch: ClusterBatch, walk: Walk, hopping: float, times: F64) -> F64:
    """Laws (M, N) of the first row by matrix exponentials."""
    matrix = np.diag(energies_of(batch)) - hopping * driver_matrix(walk.driver, batch.size)
    start = np.full(1 << batch.size, 2.0 ** (-batch.size / 2))
    if walk.start == "incumbent":
        start = np.eye(1 << batch.size)[configuration_number(batch.spins[0])]
    return np.array([np.abs(expm(-1j * time * matrix) @ start) ** 2 for time in times])


def heuristic(batch: ClusterBatch, driver: str) -> float:
    """The rate as drivers.py words it: a spectrum as wide as the hypercube's at its own rate."""
    assert batch.couplings is not None
    rates = np.empty(len(batch))
    heuristic_hopping(batch.fields, batch.couplings, level_spread(batch.size), rates)
    lowest, highest = driver_range(DRIVERS.index(driver), batch.size)
    return float(rates[0]) * 2 * batch.size / (highest - lowest)


def one_hop(batch: ClusterBatch) -> float:
    return 1.0 / heuristic(batch, "hypercube")


TIME_KINDS: dict[str, dict[str, Any]] = {
    "fixed": {"time": 1.7},
    "interval": {"time": [0.4, 3.0], "times": 5},
    "hops": {"time_in_hops": 0.9},
    "default": {},
    "infinite": {"time": "infinite"},
}


@pytest.mark.parametrize("tolerance", [1e-6, 1e-11])
@pytest.mark.parametrize("kind", TIME_KINDS)
@pytest.mark.parametrize("driver", DRIVERS)
@pytest.mark.parametrize("start", ["uniform", "incumbent"])
def test_every_law_is_that_of_the_dense_matrix(start: Any, driver: Any, kind: str, tolerance: float) -> None:
    batch = glasses(1, 6, seed=21)
    walk = Walk(start=start, driver=driver, tolerance=tolerance, **TIME_KINDS[kind])
    law = walk.distribution(batch)[0]
    hop, rate = one_hop(batch), heuristic(batch, driver)
    times = {
        "fixed": np.array([1.7]), "interval": np.linspace(0.4, 3.0, 5), "hops": np.array([0.9 * hop]),
        "default": np.linspace(0.65, 1.05, 8) * hop, "infinite": np.linspace(0.0, 3e4 * hop, 3001),
    }[kind]  # fmt: skip
    bound = 1e-9
    if kind == "infinite":  # an average over finitely many times: within its own error, some 1/sqrt(times)
        matrix = np.diag(energies_of(batch)) - rate * driver_matrix(driver, 6)
        step, vector = expm(-1j * times[1] * matrix), np.full(64, 0.125, complex)
        if start == "incumbent":
            vector = np.eye(64, dtype=complex)[configuration_number(batch.spins[0])]
        expected = np.zeros(64)
        for _ in times:
            expected += np.abs(vector) ** 2 / len(times)
            vector = step @ vector
        bound = 0.03
    else:
        expected = dense_laws(batch, walk, rate, times).mean(axis=0)
        np.testing.assert_allclose(walk.laws(batch, times)[0], dense_laws(batch, walk, rate, times), rtol=0, atol=1e-9)
    assert law.sum() == pytest.approx(1.0, abs=1e-10)
    assert 0.5 * np.abs(law - expected).sum() < bound
    uniform = np.full(64, 1 / 64)
    assert 0.5 * np.abs(law - uniform).sum() > 0.1
    proposals = walk.propose(batch)
    minimum = energies_of(batch).argmin()
    assert proposals.hit_probability is not None
    assert proposals.hit_probability[0] == pytest.approx(law[minimum], abs=1e-9)


@pytest.mark.parametrize("size", range(1, 9))
def test_default_laws_to_a_billionth(size: int) -> None:
    batch = glasses(1, size, seed=size)
    for start in ("uniform", "incumbent"):
        walk = Walk(start=start)
        times = np.linspace(0.65, 1.05, 8) * one_hop(batch)
        expected = dense_laws(batch, walk, heuristic(batch, "hypercube"), times).mean(axis=0)
        assert np.abs(walk.distribution(batch)[0] - expected).sum() < 1e-9


@pytest.mark.parametrize("spins", [1, 3, 6])
def test_endless_free_walk_with_all_its_degenerate_levels(spins: int) -> None:
    """The mean of cos^2(n-d) sin^2d is (2(n-d)-1)!! (2d-1)!! / (2n)!!; amplitudes as in Moore & Russell 2002."""

    def double_factorial(number: int) -> int:
        return math.prod(range(number, 0, -2))

    batch = batch_of(np.zeros((1, spins)), np.zeros((1, spins, spins)), np.ones((1, spins)))
    law = Walk(start="incumbent", time="infinite").distribution(batch)[0]
    for number in range(1 << spins):
        apart = number.bit_count()
        paths = double_factorial(2 * (spins - apart) - 1) * double_factorial(2 * apart - 1)
        assert law[number] == pytest.approx(paths / double_factorial(2 * spins), abs=1e-12)


# Draws --------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("size", "parameters"),
    [
        (4, {}),
        (4, {"start": "incumbent", "driver": "pairs"}),
        (4, {"time": "infinite"}),
        (5, {"driver": "complete", "time": [0.0, 2.0], "times": 3}),
        (SINGLE_FROM, {}),
        (SINGLE_FROM, {"start": "incumbent"}),
    ],
)
@pytest.mark.parametrize("together", [False, True])
def test_frequencies_follow_the_law(size: int, parameters: dict[str, Any], together: bool) -> None:
    """Chi-square on at most 32 classes of about equal weight; each case fails by chance once in a million."""
    batch = glasses(1, size, seed=3)
    count = 20_000 if together else 4_000
    walk = Walk(**parameters, shots=count if together else 1)
    proposals = walk.propose(batch if together else repeated(batch, count))
    law = replace(walk, shots=1).distribution(batch)[0]
    order = np.argsort(law)
    classes = np.empty(len(law), np.int64)
    classes[order] = np.minimum((np.cumsum(law[order]) * 32).astype(np.int64), 31)
    expected = np.bincount(classes, law) * count
    seen = np.bincount(classes[numbers_of(proposals.outcomes).ravel()], minlength=len(expected))
    assert seen.sum() == count
    kept = expected > 5
    assert seen[~kept].sum() <= 60
    statistic = ((seen[kept] - expected[kept]) ** 2 / expected[kept]).sum()
    assert statistic < chi2.isf(1e-6, kept.sum())


def test_times_are_drawn_evenly_and_recorded() -> None:
    batch = glasses(1, 3, seed=1)
    drawn = Walk(time=[1.0, 2.0], times=5, shots=10_000).propose(batch).times
    assert drawn is not None
    values, counts = np.unique(drawn, return_counts=True)
    np.testing.assert_allclose(values, [1.0, 1.25, 1.5, 1.75, 2.0], rtol=1e-15)
    assert np.abs(counts - 2000).max() < 5 * math.sqrt(2000)
    endless = Walk(time="infinite").propose(batch).times
    assert endless is not None
    assert np.isposinf(endless).all()


@pytest.mark.parametrize("size", [3, 7, 11])
@pytest.mark.parametrize("shots", [1, 40])
def test_hit_probability_is_the_mean_law_of_the_minima(size: int, shots: int) -> None:
    """One minimum, several (no field), many (one bond) and all (nothing at all)."""
    glass, zero = glasses(1, size, seed=size), np.zeros((1, size))
    assert glass.couplings is not None
    bond = np.zeros((1, size, size))
    bond[0, 0, 1] = bond[0, 1, 0] = 1.0
    for fields, couplings in ((glass.fields, glass.couplings), (zero, glass.couplings), (zero, bond), (zero, 0 * bond)):
        batch = batch_of(fields, couplings, glass.spins)
        energies = energies_of(batch)
        minima = energies <= energies.min() + 1e-9
        for parameters in ({}, {"start": "incumbent", "driver": "pairs"}, {"time_in_hops": 3.0}):
            walk = Walk(**parameters, shots=shots)  # type: ignore[arg-type]
            hit = walk.propose(batch).hit_probability
            assert hit is not None
            expected = walk.distribution(batch)[0][minima].sum()
            assert hit[0] == pytest.approx(expected, abs=1e-9 if size < SINGLE_FROM else 1e-6)


# Balance ------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("driver", DRIVERS)
@pytest.mark.parametrize("parameters", [{}, {"time": 2.0}, {"time": "infinite"}])
def test_walks_from_the_incumbent_propose_symmetrically(driver: Any, parameters: dict[str, Any]) -> None:
    """Constant H: Layden et al., Nature 619 (2023) 282."""
    for size in (3, 5):
        walk = Walk(start="incumbent", driver=driver, **parameters)
        assert walk.balance == "symmetric"
        proposal = walk.distribution(from_every_configuration(glasses(1, size, seed=size)))
        np.testing.assert_allclose(proposal, proposal.T, rtol=0, atol=1e-12)
        np.testing.assert_allclose(proposal.sum(axis=1), 1.0, rtol=0, atol=1e-12)


def accepted_chain(proposal: F64, ratio: F64, energies: F64, temperature: float) -> F64:
    """The transition matrix of Metropolis and Hastings: accept with min(1, exp(-dE/T + log_ratio))."""
    exponent = -(energies[None, :] - energies[:, None]) / temperature + ratio
    chain = proposal * np.exp(np.minimum(exponent, 0.0))
    np.fill_diagonal(chain, 0.0)
    np.fill_diagonal(chain, 1.0 - chain.sum(axis=1))
    return chain


@pytest.mark.parametrize("size", [2, 3, 5])
@pytest.mark.parametrize("driver", DRIVERS)
def test_the_accepted_chain_keeps_the_boltzmann_law(size: int, driver: Any) -> None:
    """pi P = pi, for the walk from the incumbent as it is, and from the uniform start with its ratio, time by time."""
    batch, temperature = from_every_configuration(glasses(1, size, seed=size)), 2.0
    energies = energies_of(batch)
    boltzmann = np.exp(-(energies - energies.min()) / temperature)
    boltzmann /= boltzmann.sum()
    incumbent = Walk(start="incumbent", driver=driver)
    chain = accepted_chain(incumbent.distribution(batch), np.zeros((len(energies),) * 2), energies, temperature)
    np.testing.assert_allclose(boltzmann @ chain, boltzmann, rtol=0, atol=1e-12)

    uniform = Walk(driver=driver)
    times = np.linspace(0.65, 1.05, 8) * one_hop(batch)
    for law in uniform.laws(batch.rows(0, 1), times)[0]:
        proposal = np.repeat(law[None, :], len(law), axis=0)
        ratio = np.log(law[:, None]) - np.log(law[None, :])
        chain = accepted_chain(proposal, ratio, energies, temperature)
        np.testing.assert_allclose(boltzmann @ chain, boltzmann, rtol=0, atol=1e-12)
        forgotten = accepted_chain(proposal, 0.0 * ratio, energies, temperature)
        assert np.abs(boltzmann @ forgotten - boltzmann).max() > 1e-3


@pytest.mark.parametrize("size", [5, SINGLE_FROM])
def test_log_ratio_is_that_of_the_law_at_the_drawn_time(size: int) -> None:
    batch = glasses(30, size, seed=8)
    walk = Walk()
    proposals = walk.propose(batch)
    assert walk.balance == "ratio"
    assert proposals.log_ratio is not None
    assert proposals.times is not None
    for row in range(30):
        law = walk.laws(batch.rows(row, row + 1), proposals.times[row])[0, 0]
        before, after = configuration_number(batch.spins[row]), numbers_of(proposals.outcomes[row, 0])
        expected = math.log(law[before]) - math.log(law[after])
        assert proposals.log_ratio[row] == pytest.approx(expected, abs=1e-8 if size < SINGLE_FROM else 5e-2)
    assert Walk(shots=2).balance == "none"
    assert Walk(shots=2).propose(batch).log_ratio is None


def test_log_ratio_stays_finite_where_the_law_vanishes() -> None:
    """One spin with field = hopping turns from the uniform start exactly into -1 at pi / (2 sqrt 2)."""
    batch = batch_of([[1.0]], [[[0.0]]], [[1]])
    proposals = Walk(hopping=1.0, time=math.pi / (2 * math.sqrt(2))).propose(batch)
    assert proposals.outcomes.tolist() == [[[-1]]]
    assert proposals.log_ratio is not None
    assert -700 < proposals.log_ratio[0] < -60
    assert Walk(start="incumbent").balance == "symmetric"


# Precision ----------------------------------------------------------------------------------------------------------


def hard_clusters(size: int, seed: int) -> ClusterBatch:
    """Clusters on which rounding adds up differently: glass, ferromagnet, chain, free spins, one huge field, none."""
    draw = np.random.default_rng(seed)
    nothing, fields = np.zeros((size, size)), draw.normal(size=size)
    chain = np.diag(draw.choice([-1.0, 1.0], size - 1), 1)
    glass = np.triu(draw.normal(size=(size, size)), 1)
    huge = fields.copy()
    huge[0] = 1000.0
    ferromagnet = -np.triu(np.ones((size, size)), 1)
    cases = [(fields, glass), (0 * fields, ferromagnet), (0 * fields, chain), (fields, nothing), (huge, glass),
             (0 * fields + 1 / 3, nothing), (0 * fields, nothing)]  # fmt: skip
    couplings = np.array([upper + upper.T for _, upper in cases])
    return batch_of(np.array([h for h, _ in cases]), couplings, draw.choice([-1, 1], (len(cases), size)), seed)


def single_law(walk: Walk, batch: ClusterBatch, row: int) -> F64:
    """The law at the one measuring time, in single precision as calls draw from it: up to its sum."""
    plan = walk.plan(batch)
    law, workspace = np.empty((1, 1 << batch.size)), new_workspace(plan.driver, batch.size, 1, single=True)
    start = -1 if walk.start == "uniform" else configuration_number(batch.spins[row])
    energies, rate = energies_of(batch, row), plan.rates[row]
    walk_law(energies, rate, start, plan.times[row], law, plan.driver, workspace, SINGLE_DECAY)
    return law[0] / law[0].sum()


@pytest.mark.parametrize("start", ["uniform", "incumbent"])
@pytest.mark.parametrize("factor", [0.1, 1.0, 3.0])
def test_single_precision_is_as_good_as_it_says(start: Any, factor: float) -> None:
    used = 0
    for size in (10, 13):
        batch = hard_clusters(size, seed=size)
        for tolerance, hops in ((1e-6, 0.8), (1e-6, 2.0), (3e-6, 12.0)):
            walk = Walk(start=start, hopping_factor=factor, time_in_hops=hops, tolerance=tolerance)
            errors, plan = walk.errors(batch), walk.plan(batch, exact_spans=True)
            assert np.all(errors <= tolerance)
            for row in np.flatnonzero(plan.single):
                law, exact = single_law(walk, batch, row), walk.distribution(batch.rows(row, row + 1))[0]
                assert 0.5 * np.abs(law - exact).sum() < 0.9 * errors[row], (size, row, hops)
                used += 1
    assert used >= 12


@pytest.mark.parametrize("driver", DRIVERS)
def test_double_precision_is_as_good_as_it_says_on_long_walks(driver: Any) -> None:
    batch = hard_clusters(5, seed=1)
    walk = Walk(driver=driver, time_in_hops=2000.0)
    errors = walk.errors(batch)
    for row in range(len(batch)):
        one = batch.rows(row, row + 1)
        assert one.couplings is not None
        levels, vectors = np.linalg.eigh(
            np.diag(energies_of(one)) - heuristic(one, driver) * driver_matrix(driver, batch.size)
        )
        time = 2000.0 * one_hop(one)
        start = vectors.T @ np.full(32, 32**-0.5)
        exact = np.abs(vectors @ (np.exp(-1j * time * levels) * start)) ** 2
        # the reference's own phases are good to time * width * 1e-16 or so
        assert 0.5 * np.abs(walk.distribution(one)[0] - exact).sum() < errors[row] + 4e-16 * time * np.ptp(levels)


def test_a_tight_tolerance_means_double_precision() -> None:
    batch = glasses(6, 11, seed=4)
    loose, tight = Walk().propose(batch), Walk(tolerance=1e-9).propose(batch)
    assert loose.hit_probability is not None
    assert tight.hit_probability is not None
    difference = np.abs(loose.hit_probability - tight.hit_probability)
    assert 0.0 < difference.max() < 1e-6
    exact = [Walk().distribution(batch.rows(row, row + 1))[0][energies_of(batch, row).argmin()] for row in range(6)]
    np.testing.assert_allclose(tight.hit_probability, exact, rtol=0, atol=1e-11)


def test_rows_of_both_precisions_stay_independent() -> None:
    batch = hard_clusters(10, seed=2)
    walk = Walk(time_in_hops=6.0, hopping_factor=0.7, shots=3)
    single = walk.plan(batch, exact_spans=True).single
    assert single.any()
    assert not single.all()
    whole = walk.propose(batch)
    for row in range(len(batch)):
        alone = walk.propose(batch.rows(row, row + 1))
        assert alone.outcomes.tobytes() == whole.outcomes[row : row + 1].tobytes()
        assert alone.hit_probability is not None
        assert whole.hit_probability is not None
        assert alone.hit_probability[0] == whole.hit_probability[row]


@pytest.mark.parametrize("power", [20, -30])
def test_single_precision_ignores_a_common_power_of_two(power: int) -> None:
    batch = hard_clusters(10, seed=3)
    assert batch.couplings is not None
    scaled = batch_of(batch.fields * 2.0**power, batch.couplings * 2.0**power, batch.spins, 3)
    one, other = Walk().propose(batch), Walk().propose(scaled)
    assert Walk().plan(batch).single.any()
    assert one.outcomes.tobytes() == other.outcomes.tobytes()
    for name in ("hit_probability", "log_ratio"):
        assert getattr(one, name).tobytes() == getattr(other, name).tobytes()


def test_a_missed_tolerance_is_said_so() -> None:
    batch = glasses(2, 3, seed=1)
    proposals = Walk(time=1e5, tolerance=1e-11).propose(batch)
    assert proposals.status.tolist() == [Status.TRUNCATED] * 2
    assert all("above the tolerance 1e-11" in message for message in proposals.messages)
    assert Walk(time=1e5).propose(batch).status.tolist() == [Status.OK] * 2


# Calibration --------------------------------------------------------------------------------------------------------


def test_calibration_lowers_the_mean_energy_and_then_rests() -> None:
    sample = glasses(6, 5, seed=2)
    energies = np.array([energies_of(sample, row) for row in range(6)])
    assert sample.couplings is not None
    weights = np.abs(sample.fields).sum(axis=1) + np.abs(sample.couplings).sum(axis=(1, 2)) / 2

    def mean_energy(walk: Walk) -> float:
        return float(((walk.distribution(sample) * energies).sum(axis=1) / weights).mean())

    walk = Walk(hopping="calibrated", time_in_hops=1.0)
    ready = walk.prepare(sample)
    assert ready.hopping == "heuristic"
    assert ready.hopping_factor in FACTORS
    rivals = [mean_energy(replace(ready, hopping_factor=factor)) for factor in FACTORS]
    assert mean_energy(ready) <= min(rivals) + 1e-9
    assert max(rivals) - min(rivals) > 0.01
    assert ready.prepare(glasses(3, 5, seed=9)) == ready == walk.prepare(sample)
    assert subsolver_from(spelled(ready)) == ready
    assert spelled(walk) == "walk,hopping=calibrated,time_in_hops=[1.0, 1.0]"


def test_calibration_on_clusters_without_energies_keeps_the_heuristic() -> None:
    sample = batch_of(np.zeros((3, 4)), np.zeros((3, 4, 4)), np.ones((3, 4)))
    assert Walk(hopping="calibrated").prepare(sample) == Walk()


# What is known of walks on glasses ----------------------------------------------------------------------------------

SIZES = np.arange(4, 10)
LONG = {"time_in_hops": [20, 200], "times": 100}
"""Times that stand for endless ones, without a diagonalisation."""


def mean_success(rows: int, **parameters: Any) -> F64:
    """Mean hit probability for every size, on the same glasses whatever the parameters."""
    hits = [Walk(**parameters).propose(glasses(rows, int(size), seed=100 + size)).hit_probability for size in SIZES]
    return np.array([np.mean(hit) for hit in hits])  # type: ignore[arg-type]


@pytest.fixture(scope="module")
def endless() -> F64:
    return mean_success(60, **LONG)


def slope(success: F64) -> float:
    return float(np.polyfit(SIZES, np.log2(success), 1)[0])


def test_success_falls_as_two_to_the_minus_041_n(endless: F64) -> None:
    """Walks on glasses with h and J both N(0,1): about 2^(-0.41 n), common practice; -0.414 and -0.412 computed for
    n = 4..9. The slope of 60 glasses a size has a standard error of 0.012 (bootstrap): five of them.
    """
    assert slope(endless) == pytest.approx(-0.41, abs=0.06)


def test_short_times_come_near_the_endless_average(endless: F64) -> None:
    """Common practice: short-time averages reach the infinite-time one quickly. Here 2 to 12 hops, within 5 %."""
    np.testing.assert_allclose(mean_success(60, time_in_hops=[2, 12], times=40), endless, rtol=0.05)
    for size in (4, 6, 8):
        batch = glasses(20, size, seed=size)
        long, truly = (Walk(**times).propose(batch).hit_probability for times in (LONG, {"time": "infinite"}))
        assert np.mean(long) == pytest.approx(np.mean(truly), rel=0.05)  # type: ignore[arg-type]


@pytest.mark.parametrize("factor", [0.85, 1.2])
def test_the_peak_over_the_hopping_rate_is_broad(endless: F64, factor: float) -> None:
    """Common practice; computed, a factor 0.85 changes success by less than 10 % on average."""
    change = mean_success(60, hopping_factor=factor, **LONG) / endless - 1
    assert abs(change.mean()) < 0.1
    assert np.abs(change).max() < 0.13


def test_the_advantage_is_lost_under_the_complete_graph(endless: F64) -> None:
    """Single flips match pairwise terms (common practice): any-to-any moves come close to guessing, 2^-n."""
    complete = mean_success(60, driver="complete", **LONG)
    assert slope(complete) < -0.85
    assert complete[-1] < 0.25 * endless[-1]


# Limits -------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("parameters", "words"),
    [
        ({"driver": "ladder"}, "hypercube, complete or pairs"),
        ({"time": [-1.0, 2.0]}, "time of at least 0"),
        ({"time": "forever"}, "time is 'forever'"),
        ({"time_in_hops": "infinite"}, "time_in_hops is 'infinite'"),
        ({"tolerance": 1e-14}, "double precision gives 1e-11 at best"),
        ({"tolerance": 1.0}, "tolerance is 1.0"),
        ({"hopping": "calibrate"}, "heuristic, calibrated or a positive rate"),
        ({"times": 0}, "times is 0"),
    ],
)
def test_mistakes_are_refused_before_any_work(parameters: dict[str, Any], words: str) -> None:
    with pytest.raises(ValueError, match=words):
        Walk(**parameters)


def test_laws_refuse_times_that_are_none() -> None:
    for times in ([-1.0], [math.inf], [math.nan]):
        with pytest.raises(ValueError, match="finite times of at least 0"):
            Walk().laws(glasses(1, 3, seed=1), times)


def test_an_endless_walk_stops_at_eleven_spins() -> None:
    walk, batch = Walk(time="infinite"), glasses(1, 12, seed=1)
    for ask in (walk.propose, walk.forecast, walk.distribution, walk.prepare):
        with pytest.raises(ValueError, match=r"12 spins, .*diagonalisation.* stops at 11"):
            ask(batch)


@pytest.mark.parametrize("driver", DRIVERS)
@pytest.mark.parametrize("parameters", [{}, {"shots": 30}, {"time": [0.0, 9.0], "times": 3}, {"tolerance": 1e-10}])
def test_the_forecast_understates_nothing(driver: Any, parameters: dict[str, Any]) -> None:
    for size in (2, 6, 11):
        batch = hard_clusters(size, seed=size)
        walk = Walk(driver=driver, **parameters)
        forecast, counted = walk.forecast(batch).work.amplitude_updates, walk.propose(batch).work.amplitude_updates
        assert forecast is not None
        assert counted is not None
        assert np.all(forecast >= counted)
        assert np.all(forecast <= 3 * counted)


def test_memory_is_forecast_and_stays_within_eight_vectors() -> None:
    batch = batch_of(np.ones((2, 22)), np.zeros((2, 22, 22)), np.ones((2, 22)))
    for driver in ("hypercube", "pairs"):
        assert Walk(driver=driver).forecast(batch).bytes < 8 * 8 << 22
    few, many = (Walk(shots=shots).forecast(batch).work.amplitude_updates for shots in (1, 100))
    assert few is not None
    assert many is not None
    assert many.tolist() == (8 * few).tolist()  # the sums of one time are all that fits
    batch = glasses(2, 16, seed=1)
    walk = Walk().prepare(batch)
    assert walk.plan(batch).single.all()
    tracemalloc.start()
    walk.propose(batch)
    seen = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert 4 << 16 < seen <= walk.forecast(batch).bytes
