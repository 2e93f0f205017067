"""The noise of a device: each kind against something computed in another way, and what it leaves of detailed balance.

Counts are judged by a chi-square test that calls a true law false with probability ``FALSE_ALARM``; seeds are fixed.
"""

from __future__ import annotations

import math
import tracemalloc
from dataclasses import replace
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from scipy.linalg import expm
from scipy.stats import chi2, kstest, norm

from patchwalk.subsolvers import ClusterBatch, make_subsolver
from patchwalk.subsolvers.conformance import check
from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.density import MATRIX_SPINS
from patchwalk.subsolvers.draws import next_below, seed_for
from patchwalk.subsolvers.drivers import DRIVERS, driver_matrix, heuristic_hopping, level_spread
from patchwalk.subsolvers.hamiltonian import aligned, padded
from patchwalk.subsolvers.noise import CONTROL
from patchwalk.subsolvers.precision import SINGLE_FROM
from patchwalk.subsolvers.propagate import new_workspace, scale_spectrum
from patchwalk.subsolvers.trajectories import follow_trajectory, next_jump
from patchwalk.subsolvers.walk import Walk

FALSE_ALARM = 1e-6

Complex = npt.NDArray[np.complex128]


def batch_of(fields: F64, couplings: F64, spins: npt.ArrayLike, seeds: npt.ArrayLike) -> ClusterBatch:
    """Calls at temperature 1."""
    incumbents, numbers = np.asarray(spins, np.int8), np.asarray(seeds, np.uint64)
    return ClusterBatch(fields, incumbents, np.ones(len(fields)), numbers, couplings)


def glasses(rows: int, size: int, seed: int = 3) -> ClusterBatch:
    """Fully connected glasses with fields and couplings N(0,1)."""
    draw = np.random.default_rng(seed)
    upper = np.triu(draw.normal(size=(rows, size, size)), 1)
    fields, spins = draw.normal(size=(rows, size)), draw.choice([-1, 1], (rows, size))
    return batch_of(fields, upper + upper.transpose(0, 2, 1), spins, draw.integers(0, 2**63, rows, dtype=np.uint64))


def copies(batch: ClusterBatch, spins: npt.ArrayLike, seeds: npt.NDArray[np.uint64]) -> ClusterBatch:
    """The first cluster with other incumbents and seeds."""
    assert batch.couplings is not None
    rows = len(seeds)
    return batch_of(np.repeat(batch.fields[:1], rows, 0), np.repeat(batch.couplings[:1], rows, 0), spins, seeds)


def repeated(batch: ClusterBatch, count: int) -> ClusterBatch:
    """The first call so many times, with seeds of their own."""
    seeds = np.random.default_rng(8).integers(0, 2**63, count, dtype=np.uint64)
    return copies(batch, np.repeat(batch.spins[:1], count, 0), seeds)


def from_everywhere(batch: ClusterBatch) -> ClusterBatch:
    """The first call from every configuration, always with its own seed."""
    numbers = np.arange(1 << batch.size)
    spins = 1 - 2 * (numbers[:, None] >> np.arange(batch.size) & 1)
    return copies(batch, spins, np.full(len(numbers), batch.seeds[0]))


def numbers_of(spins: npt.NDArray[np.int8]) -> npt.NDArray[np.int64]:
    return (spins < 0).astype(np.int64) @ (1 << np.arange(spins.shape[-1]))


def energies_of(fields: F64, couplings: F64) -> F64:
    """All energies of one cluster, term by term."""
    spins = 1 - 2 * (np.arange(1 << len(fields))[:, None] >> np.arange(len(fields)) & 1)
    return spins @ fields + 0.5 * np.einsum("xi,ij,xj->x", spins, couplings, spins)


def levels(batch: ClusterBatch, row: int = 0) -> F64:
    assert batch.couplings is not None
    return energies_of(batch.fields[row], batch.couplings[row])


def hop_rate(batch: ClusterBatch) -> float:
    """The heuristic hopping rate of the first cluster, on the hypercube."""
    assert batch.couplings is not None
    rates = np.empty(len(batch))
    heuristic_hopping(batch.fields, batch.couplings, level_spread(batch.size), rates)
    return float(rates[0])


def z_matrices(spins: int) -> list[F64]:
    return [np.diag(1.0 - 2.0 * (np.arange(1 << spins) >> spin & 1)) for spin in range(spins)]


def hamiltonian(energies: F64, driver: str, hopping: float) -> F64:
    return np.diag(energies) - hopping * driver_matrix(driver, len(energies).bit_length() - 1)


def start_vector(batch: ClusterBatch, start: str) -> F64:
    size = 1 << batch.size
    return np.full(size, size**-0.5) if start == "uniform" else np.eye(size)[numbers_of(batch.spins)[0]]


def assert_drawn_from(law: F64, outcomes: npt.NDArray[np.int8]) -> None:
    """Chi-square over all configurations expected at least 5 times, the others together."""
    counts = np.bincount(numbers_of(outcomes.reshape(-1, outcomes.shape[-1])), minlength=len(law))
    expected = law * counts.sum()
    rare = expected < 5
    seen = np.append(counts[~rare], counts[rare].sum())
    wanted = np.append(expected[~rare], expected[rare].sum())
    seen, wanted = seen[wanted > 0], wanted[wanted > 0]
    assert ((seen - wanted) ** 2 / wanted).sum() < chi2.isf(FALSE_ALARM, len(seen) - 1)


# dephasing


@pytest.mark.parametrize("driver", DRIVERS)
@pytest.mark.parametrize(("size", "start"), [(1, "incumbent"), (2, "uniform"), (3, "incumbent"), (4, "uniform")])
def test_dephasing_is_that_of_the_master_equation(size: int, start: Any, driver: Any) -> None:
    qutip = pytest.importorskip("qutip")
    batch, hopping, jumps = glasses(1, size), 0.8, 0.6
    walk = Walk(start=start, driver=driver, hopping=hopping, time=0.9, shots=50, dephasing=jumps)
    hop = hopping / {"hypercube": 1, "complete": size / 2 ** (size - 1), "pairs": 4 * size / _pairs_width(size)}[driver]
    state = qutip.Qobj(start_vector(batch, start)[:, None])
    strikes = [math.sqrt(jumps * hop) * qutip.Qobj(matrix) for matrix in z_matrices(size)]
    options = {"rtol": 1e-10, "atol": 1e-12, "nsteps": 100_000}
    ends = qutip.mesolve(
        qutip.Qobj(hamiltonian(levels(batch), driver, hopping)), state, [0.0, 0.9], strikes, options=options
    )
    law = ends.states[-1].full().diagonal().real
    np.testing.assert_allclose(walk.noisy_distribution(batch)[0], law, rtol=0, atol=1e-8)
    answer = walk.propose(repeated(batch, 1000))
    assert_drawn_from(law, answer.outcomes)
    assert answer.hit_probability is not None
    assert answer.noiseless_hit is not None
    minimum = levels(batch).argmin()
    np.testing.assert_allclose(answer.hit_probability, law[minimum], rtol=0, atol=1e-8)
    np.testing.assert_allclose(answer.noiseless_hit, walk.distribution(batch)[0, minimum], rtol=0, atol=1e-9)


def _pairs_width(spins: int) -> int:
    """Twice the width of the spectrum of M (M + 2) / 2 over M = -k, -k + 2, ..., k."""
    values = [total * (total + 2) for total in range(-spins, spins + 1, 2)]
    return max(values) - min(values)


@pytest.mark.parametrize("size", [MATRIX_SPINS + 1, 6])
def test_trajectories_of_more_spins_follow_the_master_equation(size: int) -> None:
    """The generator in the interaction-free form of matrices, by small fourth-order steps."""
    batch, hopping, jumps = glasses(1, size, seed=5), 0.7, 0.5
    walk = Walk(start="incumbent", hopping=hopping, time=1.1, dephasing=jumps)
    h, distance = hamiltonian(levels(batch), "hypercube", hopping), _distances(size)
    rho = np.outer(start_vector(batch, "incumbent"), start_vector(batch, "incumbent")).astype(complex)

    def slope(state: Complex) -> Complex:
        turned: Complex = -1j * (h @ state - state @ h) - 2 * jumps * hopping * distance * state
        return turned

    steps = 2000
    for _ in range(steps):
        length = 1.1 / steps
        one = slope(rho)
        two = slope(rho + length / 2 * one)
        three = slope(rho + length / 2 * two)
        rho = rho + length / 6 * (one + 2 * two + 2 * three + slope(rho + length * three))
    answer = walk.propose(repeated(batch, 20_000))
    assert answer.hit_probability is None
    assert answer.noiseless_hit is not None
    assert_drawn_from(rho.diagonal().real, answer.outcomes)
    with pytest.raises(ValueError, match=f"{size} dephased spins is only sampled"):
        walk.noisy_distribution(batch)


def _distances(spins: int) -> npt.NDArray[np.int64]:
    numbers = np.arange(1 << spins)
    differing: npt.NDArray[np.int64] = numbers[:, None] ^ numbers[None, :]
    return (differing[:, :, None] >> np.arange(spins) & 1).sum(axis=2)


@pytest.mark.parametrize("jumps", [0.3, 1.9, 50.0])
def test_a_lone_spin_is_a_damped_oscillator(jumps: float) -> None:
    """z'' + 2 r z' + 4 g^2 z = 0 for H = -g X and Z jumps at rate r: the units of ``dephasing``."""
    batch = batch_of(np.zeros((1, 1)), np.zeros((1, 1, 1)), [[1]], [4])
    hopping, time, rate = 1.3, 0.7, jumps * 1.3
    turning = np.sqrt(complex(4 * hopping**2 - rate**2))
    z = math.exp(-rate * time) * (np.cos(turning * time) + rate / turning * np.sin(turning * time)).real
    law = Walk(start="incumbent", hopping=hopping, time=time, dephasing=jumps).noisy_distribution(batch)[0]
    np.testing.assert_allclose(law, [(1 + z) / 2, (1 - z) / 2], rtol=0, atol=1e-12)


@pytest.mark.parametrize("driver", DRIVERS)
@pytest.mark.parametrize("size", [1, 2, 3, 6])
def test_a_trajectory_is_the_product_of_its_pieces(size: int, driver: str) -> None:
    """Between strikes, matrix exponentials; the strikes are those of the same stream."""
    energies, hopping, kind = levels(glasses(1, size, seed=9)), 0.6, DRIVERS.index(driver)
    workspace = aligned(new_workspace(kind, size, 1))
    stride = padded(1 << size, 8)
    _, half_width, pull = scale_spectrum(energies, kind, hopping, workspace[:stride])
    real, imaginary, aside = np.empty((3, 1 << size))
    time, rate = 2.5, 1.0
    follow_trajectory(
        kind, workspace[:stride], pull, half_width, 1, time, rate, np.array([77], np.uint64), real, imaginary, aside,
        workspace[stride:],
    )  # fmt: skip
    stream, state, here, strikes = np.array([77], np.uint64), np.eye(1 << size)[1].astype(complex), 0.0, 0
    while here < time:
        there = next_jump(stream, size * rate, here)
        state = expm(-1j * (min(there, time) - here) * hamiltonian(energies, driver, hopping)) @ state
        if there < time:
            state = z_matrices(size)[next_below(stream, size)] @ state
            strikes += 1
        here = there
    assert strikes > 0
    assert abs(np.vdot(state, real + 1j * imaginary)) == pytest.approx(1.0, abs=1e-12)
    assert np.vdot(real, real) + np.vdot(imaginary, imaginary) == pytest.approx(1.0, abs=1e-12)


def test_jumps_come_at_their_rate() -> None:
    stream, here, waits = np.array([5], np.uint64), 0.0, []
    for _ in range(20_000):
        there = next_jump(stream, 3.0, here)
        waits.append(there - here)
        here = there
    assert kstest(waits, "expon", args=(0, 1 / 3)).pvalue > FALSE_ALARM
    assert next_jump(stream, 0.0, 1.0) == math.inf


@pytest.mark.parametrize("start", ["uniform", "incumbent"])
def test_without_a_jump_the_noiseless_walk_remains(start: Any) -> None:
    for size in (3, 8):
        batch = glasses(50, size)
        quiet, rare = Walk(start=start, shots=2), Walk(start=start, shots=2, dephasing=1e-12)
        one, other = quiet.propose(batch), rare.propose(batch)
        assert one.times is not None
        assert other.times is not None
        assert one.times.tobytes() == other.times.tobytes()
        assert one.outcomes.tobytes() == other.outcomes.tobytes()
    few = glasses(10, MATRIX_SPINS)
    np.testing.assert_allclose(rare.noisy_distribution(few), quiet.distribution(few), rtol=0, atol=1e-11)


def test_strong_dephasing_freezes_and_in_the_end_mixes() -> None:
    """Free spins under strong dephasing flip like coins at the rate hopping / dephasing."""
    free = batch_of(np.zeros((1, 3)), np.zeros((1, 3, 3)), [[1, -1, 1]], [4])
    frozen = Walk(start="incumbent", time_in_hops=1.0, dephasing=300.0, shots=100)
    stays = ((1 + math.exp(-2 / 300)) / 2) ** 3
    assert frozen.noisy_distribution(free)[0, 2] == pytest.approx(stays, abs=1e-4)
    still = (frozen.propose(repeated(free, 20)).outcomes == free.spins[0]).all(axis=2).mean()
    assert abs(still - stays) < 5 * math.sqrt(stays * (1 - stays) / 2000)
    mixed = Walk(start="incumbent", time_in_hops=400.0, dephasing=0.5)
    np.testing.assert_allclose(mixed.noisy_distribution(glasses(4, 3)), 1 / 8, rtol=0, atol=1e-9)
    mixed = Walk(start="incumbent", time_in_hops=100.0, dephasing=0.5)
    assert_drawn_from(np.full(32, 1 / 32), mixed.propose(repeated(glasses(1, 5), 300)).outcomes)


# misread spins


@pytest.mark.parametrize("start", ["uniform", "incumbent"])
@pytest.mark.parametrize("flip", [0.03, 0.5])
def test_misread_spins_mix_the_law_by_the_confusion_matrix(start: Any, flip: float) -> None:
    batch, distance = glasses(1, 4), _distances(4)
    confusion = flip**distance * (1 - flip) ** (4 - distance)
    walk = Walk(start=start, shots=5, readout_flip=flip)
    law = confusion @ walk.distribution(batch)[0]
    np.testing.assert_allclose(walk.noisy_distribution(batch)[0], law, rtol=0, atol=1e-14)
    answer = walk.propose(repeated(batch, 4000))
    assert_drawn_from(law, answer.outcomes)
    assert answer.hit_probability is not None
    np.testing.assert_allclose(answer.hit_probability, law[levels(batch).argmin()], rtol=0, atol=1e-9)


def test_spins_are_misread_one_by_one() -> None:
    batch = glasses(4000, 10)
    quiet, noisy = Walk(shots=2).propose(batch), Walk(shots=2, readout_flip=0.07).propose(batch)
    turned = quiet.outcomes != noisy.outcomes
    assert_drawn_from(
        np.array([0.93**d * 0.07 ** (10 - d) for d in map(int.bit_count, range(1024))])[::-1],
        np.where(turned, -1, 1).astype(np.int8),
    )
    assert quiet.hit_probability is not None
    assert noisy.noiseless_hit is not None
    assert noisy.noiseless_hit.tobytes() == quiet.hit_probability.tobytes()


# imperfect controls


def disturbed_by_hand(batch: ClusterBatch, error: float, bits: int | None = None) -> tuple[F64, F64]:
    """Fields and couplings of the first row, by the published generator and Box & Muller's formula, in plain Python."""
    assert batch.couplings is not None
    fields, couplings = batch.fields[0].copy(), batch.couplings[0].copy()
    if bits is not None:
        step = max(np.abs(fields).max(), np.abs(couplings).max()) / 2 ** (bits - 1)
        fields, couplings = step * np.round(fields / step), step * np.round(couplings / step)
    state = seed_for(int(batch.seeds[0]), int(CONTROL))

    def unit() -> float:
        nonlocal state
        state = (state + 0x9E3779B97F4A7C15) % 2**64
        z = (state ^ state >> 30) * 0xBF58476D1CE4E5B9 % 2**64
        z = (z ^ z >> 27) * 0x94D049BB133111EB % 2**64
        return ((z ^ z >> 31) >> 11) * 2.0**-53

    def factor() -> float:
        radius = math.sqrt(-2 * math.log(1 - unit()))
        return 1 + error * radius * math.cos(2 * math.pi * unit())

    for i in range(batch.size):
        fields[i] *= factor()
        for j in range(i):
            couplings[i, j] *= factor()
            couplings[j, i] = couplings[i, j]
    return fields, couplings


@pytest.mark.parametrize("parameters", [{"control_error": 0.2}, {"control_error": 0.1, "precision_bits": 3}])
@pytest.mark.parametrize("start", ["uniform", "incumbent"])
@pytest.mark.parametrize("driver", DRIVERS)
def test_controls_act_as_the_disturbed_cluster(driver: Any, start: Any, parameters: dict[str, Any]) -> None:
    batch, time, hopping = glasses(1, 4, seed=11), 1.2, 0.9
    fields, couplings = disturbed_by_hand(batch, parameters["control_error"], parameters.get("precision_bits"))
    acting = hamiltonian(energies_of(fields, couplings), driver, hopping)
    law = np.abs(expm(-1j * time * acting) @ start_vector(batch, start)) ** 2
    walk = Walk(start=start, driver=driver, hopping=hopping, time=time, shots=20_000, **parameters)
    np.testing.assert_allclose(walk.noisy_distribution(batch)[0], law, rtol=0, atol=1e-11)
    answer = walk.propose(batch)
    assert_drawn_from(law, answer.outcomes)
    minimum = levels(batch).argmin()
    assert answer.hit_probability is not None
    assert answer.noiseless_hit is not None
    assert answer.hit_probability[0] == pytest.approx(law[minimum], abs=1e-10)
    assert answer.noiseless_hit[0] == pytest.approx(walk.distribution(batch)[0, minimum], abs=1e-9)
    assert abs(walk.distribution(batch)[0] - law).max() > 1e-3


def test_rate_and_times_are_those_of_the_cluster_as_meant() -> None:
    batch, walk = glasses(1, 5, seed=2), Walk(control_error=0.3, time_in_hops=[0.4, 1.2], times=3)
    fields, couplings = disturbed_by_hand(batch, 0.3)
    acting, rate = hamiltonian(energies_of(fields, couplings), "hypercube", hop_rate(batch)), hop_rate(batch)
    states = [expm(-1j * hops / rate * acting) @ start_vector(batch, "uniform") for hops in (0.4, 0.8, 1.2)]
    law = np.mean([np.abs(state) ** 2 for state in states], axis=0)
    np.testing.assert_allclose(walk.noisy_distribution(batch)[0], law, rtol=0, atol=1e-11)


def test_control_errors_are_relative_gaussian_and_independent() -> None:
    batch = glasses(400, 6)
    assert batch.couplings is not None
    acting = Walk(control_error=0.05).noise.disturbed(batch)
    assert acting.couplings is not None
    np.testing.assert_array_equal(acting.couplings, acting.couplings.transpose(0, 2, 1))
    above = np.triu_indices(6, 1)
    ratios = [acting.fields / batch.fields, acting.couplings[:, *above] / batch.couplings[:, *above]]
    errors = (np.concatenate(ratios, axis=1) - 1) / 0.05
    assert kstest(errors.ravel(), norm.cdf).pvalue > FALSE_ALARM
    correlations = np.corrcoef(errors, rowvar=False) - np.eye(errors.shape[1])
    assert np.abs(correlations).max() < 5.5 / math.sqrt(len(errors))


@pytest.mark.parametrize("bits", [1, 2, 5])
def test_few_bits_mean_few_values(bits: int) -> None:
    batch = glasses(50, 6)
    assert batch.couplings is not None
    acting = Walk(precision_bits=bits).noise.disturbed(batch)
    assert acting.couplings is not None
    for row in range(len(batch)):
        meant = np.append(batch.fields[row], batch.couplings[row])
        step = np.abs(meant).max() * 2.0 ** (1 - bits)
        is_ = np.append(acting.fields[row], acting.couplings[row])
        assert len(np.unique(np.round(is_ / step))) <= 2**bits + 1
        np.testing.assert_allclose(is_ / step, np.round(is_ / step), rtol=0, atol=1e-12)
        assert np.abs(is_ - meant).max() <= step * (0.5 + 1e-12)


def test_equal_couplings_need_one_bit() -> None:
    batch = glasses(20, 6)
    assert batch.couplings is not None
    signs = batch_of(np.sign(batch.fields), np.sign(batch.couplings), batch.spins, batch.seeds)
    quiet, noisy = Walk().propose(signs), Walk(precision_bits=1).propose(signs)
    assert quiet.outcomes.tobytes() == noisy.outcomes.tobytes()


# what is left of detailed balance


SYMMETRIC: list[dict[str, Any]] = [
    {"dephasing": 0.4},
    {"control_error": 0.2},
    {"precision_bits": 2},
    {"dephasing": 0.3, "control_error": 0.1, "precision_bits": 4},
]


def exact_proposal(batch: ClusterBatch, walk: Walk, time: float, hopping: float, jumps: float) -> F64:
    """Proposal matrix of a dephased walk from the exponential of its superoperator."""
    size, identity = 1 << batch.size, np.eye(1 << batch.size)
    h = hamiltonian(levels(batch), walk.driver, hopping)
    generator = -1j * (np.kron(h, identity) - np.kron(identity, h))
    for z in z_matrices(batch.size):
        generator += jumps * (np.kron(z, z) - np.eye(size**2))
    channel = expm(time * generator)
    places = np.arange(size) * (size + 1)
    matrix: F64 = channel[np.ix_(places, places)].real
    return matrix.T


@pytest.mark.parametrize("driver", DRIVERS)
def test_a_dephased_proposal_is_symmetric(driver: Any) -> None:
    batch = glasses(1, 3, seed=21)
    walk = Walk(start="incumbent", driver=driver, hopping=0.7, time=1.1, dephasing=0.4)
    hop = 0.7 / {"hypercube": 1.0, "complete": 6 / 8, "pairs": 6 / 8}[driver]
    exact = exact_proposal(batch, walk, 1.1, 0.7, 0.4 * hop)
    assert np.abs(exact - exact.T).max() < 1e-12
    np.testing.assert_allclose(walk.noisy_distribution(from_everywhere(batch)), exact, rtol=0, atol=1e-11)


@pytest.mark.parametrize("parameters", SYMMETRIC)
def test_noise_that_keeps_a_proposal_symmetric(parameters: dict[str, Any]) -> None:
    walk = Walk(start="incumbent", **parameters)
    matrix = walk.noisy_distribution(from_everywhere(glasses(1, 3, seed=21)))
    assert walk.balance == "symmetric"
    assert np.abs(matrix - matrix.T).max() < 1e-12
    assert np.abs(matrix - np.eye(8)).max() > 0.1


def test_misread_spins_break_the_symmetry() -> None:
    walk = Walk(start="incumbent", readout_flip=0.1)
    matrix = walk.noisy_distribution(from_everywhere(glasses(1, 3, seed=21)))
    assert walk.balance == "none"
    assert np.abs(matrix - matrix.T).max() > 1e-3


def accepted_chain(proposal: F64, ratio: F64, energies: F64) -> F64:
    """Metropolis-Hastings at temperature 1."""
    accept = np.minimum(1.0, np.exp(energies[:, None] - energies[None, :] + ratio))
    chain: F64 = proposal * accept
    np.fill_diagonal(chain, 0.0)
    np.fill_diagonal(chain, 1.0 - chain.sum(axis=1))
    return chain


def drift(chain: F64, energies: F64) -> float:
    """How far one step of the chain takes the Boltzmann law from itself."""
    law = np.exp(energies.min() - energies)
    law /= law.sum()
    return float(np.abs(law @ chain - law).max())


@pytest.mark.parametrize("size", [2, 3, 4])
@pytest.mark.parametrize("parameters", SYMMETRIC)
def test_the_accepted_noisy_chain_keeps_the_boltzmann_law(parameters: dict[str, Any], size: int) -> None:
    batch = from_everywhere(glasses(1, size, seed=6))
    law = Walk(start="incumbent", **parameters).noisy_distribution(batch)
    assert drift(accepted_chain(law, np.zeros_like(law), levels(batch)), levels(batch)) < 1e-12


def test_the_same_test_catches_misread_spins() -> None:
    batch = from_everywhere(glasses(1, 2, seed=6))
    law = Walk(start="incumbent", readout_flip=0.1).noisy_distribution(batch)
    assert drift(accepted_chain(law, np.zeros_like(law), levels(batch)), levels(batch)) > 1e-3


@pytest.mark.parametrize("parameters", [{"control_error": 0.2}, {"control_error": 0.1, "precision_bits": 3}])
def test_the_ratio_is_that_of_the_disturbed_law(parameters: dict[str, Any]) -> None:
    batch = from_everywhere(glasses(1, 4, seed=6))
    walk = Walk(time_in_hops=0.9, **parameters)
    law = walk.noisy_distribution(batch)
    ratio = np.log(law[0])[:, None] - np.log(law[0])[None, :]
    assert walk.balance == "ratio"
    assert drift(accepted_chain(law, ratio, levels(batch)), levels(batch)) < 1e-12
    answer = walk.propose(batch)
    assert answer.log_ratio is not None
    drawn = ratio[np.arange(16), numbers_of(answer.outcomes[:, 0])]
    np.testing.assert_allclose(answer.log_ratio, drawn, rtol=0, atol=1e-9)


@pytest.mark.parametrize(
    "parameters",
    [
        {"dephasing": 0.4},
        {"dephasing": 0.2, "start": "incumbent"},
        {"control_error": 0.1},
        {"precision_bits": 3, "start": "incumbent"},
        {"readout_flip": 0.05},
        {"readout_flip": 0.05, "dephasing": 0.1, "start": "incumbent", "shots": 2},
    ],
)
def test_a_stranger_would_find_every_promise_kept(parameters: dict[str, Any]) -> None:
    verdicts = check(make_subsolver("walk", **parameters))
    assert [verdict for verdict in verdicts if verdict.outcome == "broken"] == []


# switches, forecasts, mistakes


@pytest.mark.parametrize("size", [MATRIX_SPINS, SINGLE_FROM])
@pytest.mark.parametrize("parameters", [*SYMMETRIC, {"readout_flip": 0.1}])
def test_rows_stay_independent_and_units_do_not_matter(size: int, parameters: dict[str, Any]) -> None:
    batch, walk = glasses(6, size), Walk(shots=2, **parameters)
    assert batch.couplings is not None
    scaled = replace(batch, fields=batch.fields * 2.0**20, couplings=batch.couplings * 2.0**20)
    whole, other = walk.propose(batch), walk.propose(scaled)
    for name in ("outcomes", "hit_probability", "noiseless_hit"):
        if getattr(whole, name) is not None:
            rows = [getattr(walk.propose(batch.rows(row, row + 1)), name) for row in range(len(batch))]
            assert np.concatenate(rows).tobytes() == getattr(whole, name).tobytes(), name
            assert getattr(other, name).tobytes() == getattr(whole, name).tobytes(), name


def test_single_precision_does_for_noisy_calls() -> None:
    """Hit probabilities come from laws in double precision, draws and ratios from whatever the tolerance allows."""
    batch = glasses(20, SINGLE_FROM)
    loose, tight = Walk(control_error=0.1), Walk(control_error=0.1, tolerance=1e-10)
    acting = loose.noise.disturbed(batch)
    assert loose.plan(batch, acting, exact_spans=True).single.any()
    assert not tight.plan(batch, acting, exact_spans=True).single.any()
    one, other = loose.propose(batch), tight.propose(batch)
    assert one.log_ratio is not None
    assert other.log_ratio is not None
    assert one.hit_probability is not None
    assert other.hit_probability is not None
    assert one.hit_probability.tobytes() == other.hit_probability.tobytes()
    same = (one.outcomes == other.outcomes).all(axis=(1, 2))
    assert same.mean() > 0.8
    np.testing.assert_allclose(one.log_ratio[same], other.log_ratio[same], rtol=0, atol=1e-3)


def test_noise_is_off_unless_asked_for() -> None:
    assert Walk().noise.off
    assert Walk(dephasing=0, control_error=0, readout_flip=0) == Walk()
    for on in ({"dephasing": 0.1}, {"control_error": 0.1}, {"precision_bits": 9}, {"readout_flip": 0.1}):
        assert not Walk(**on).noise.off


@pytest.mark.parametrize(
    "kinds", [("dephasing",), ("control_error",), ("readout_flip",), ("control_error", "dephasing")]
)
def test_more_noise_means_fewer_hits(kinds: tuple[str, ...]) -> None:
    """Averaged over clusters, from samples; and the call still says what it would have been worth without."""
    batch = glasses(3000, 5, seed=12)
    lowest = np.array([levels(batch, row).argmin() for row in range(len(batch))])
    quiet = Walk(shots=4).propose(batch)
    noisy = Walk(shots=4, **dict.fromkeys(kinds, 0.4)).propose(batch)  # type: ignore[arg-type]
    success, less = ((numbers_of(answer.outcomes) == lowest[:, None]).mean() for answer in (quiet, noisy))
    assert less < success - 0.02
    assert quiet.hit_probability is not None
    assert noisy.noiseless_hit is not None
    assert noisy.noiseless_hit.tobytes() == quiet.hit_probability.tobytes()


@pytest.mark.parametrize(
    "parameters",
    [
        {"control_error": 0.1},
        {"readout_flip": 0.1, "shots": 30},
        {"dephasing": 1.0, "shots": 10},
        {"dephasing": 1.0, "driver": "pairs"},
        {"precision_bits": 4, "time": "infinite"},
    ],
)
@pytest.mark.parametrize("size", [4, 9])
def test_the_forecast_understates_nothing(size: int, parameters: dict[str, Any]) -> None:
    walk, batch = Walk(**parameters).prepare(glasses(1, size)), glasses(3, size)
    forecast = walk.forecast(batch)
    tracemalloc.start()
    done = walk.propose(batch).work
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak <= forecast.bytes + 40_000  # small objects of Python
    assert done.amplitude_updates is not None
    assert forecast.work.amplitude_updates is not None
    assert np.all(done.amplitude_updates <= forecast.work.amplitude_updates)


@pytest.mark.parametrize(
    ("parameters", "words"),
    [
        ({"dephasing": -0.1}, "dephasing is -0.1; give a rate of at least 0"),
        ({"dephasing": math.inf}, "dephasing is inf"),
        ({"control_error": -1}, "control_error is -1; give a relative standard deviation from 0 to 1"),
        ({"control_error": 1.5}, "control_error is 1.5"),
        ({"control_error": math.nan}, "control_error is nan"),
        ({"precision_bits": 0}, "precision_bits is 0; give a whole number from 1 to 53"),
        ({"precision_bits": 2.5}, "precision_bits is 2.5"),
        ({"precision_bits": True}, "precision_bits is True"),
        ({"readout_flip": -0.1}, "readout_flip is -0.1"),
        ({"readout_flip": 0.51}, "readout_flip is 0.51; give a probability from 0 to 0.5"),
        ({"readout_flip": "often"}, "readout_flip is 'often'"),
        ({"dephasing": 0.1, "time": "infinite"}, "dephasing is 0.1 and time is .infinite.*finite time"),
    ],
)
def test_mistakes_are_refused_before_any_work(parameters: dict[str, Any], words: str) -> None:
    with pytest.raises(ValueError, match=words):
        make_subsolver("walk", **parameters)
