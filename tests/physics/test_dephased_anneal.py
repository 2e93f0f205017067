"""Dephased anneals: trajectories against the master equation, and what they leave of detailed balance.

Counts are judged by a chi-square test that calls a true law false with probability ``FALSE_ALARM``; seeds are fixed.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace
from itertools import pairwise
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from scipy.integrate import solve_ivp
from scipy.linalg import expm
from scipy.stats import chi2

from patchwalk.subsolvers import ClusterBatch, make_subsolver
from patchwalk.subsolvers.anneal_calls import Anneal
from patchwalk.subsolvers.anneal_rows import NEGLECTED, scaled_legs, steps_of_row
from patchwalk.subsolvers.anneal_trajectories import follow_anneal_trajectory, follow_pieces
from patchwalk.subsolvers.conformance import check
from patchwalk.subsolvers.contract import F64, U64
from patchwalk.subsolvers.density import MATRIX_SPINS
from patchwalk.subsolvers.draws import next_below
from patchwalk.subsolvers.drivers import DRIVERS, driver_matrix
from patchwalk.subsolvers.ramp import make_rooms, start_from
from patchwalk.subsolvers.schedules import legs_array
from patchwalk.subsolvers.trajectories import next_jump

FALSE_ALARM = 1e-6
RATE, DURATION = 0.8, 1.6
"""A hopping rate in energy units, and a duration in units of 1/energy."""

Complex = npt.NDArray[np.complex128]
Drive = Callable[[float], tuple[float, float]]

ANNEALS: list[tuple[str, dict[str, Any], list[float], Drive]] = [
    ("forward", {}, [0.0, 1.6], lambda t: (RATE * (1 - t / 1.6), t / 1.6)),
    (
        "reverse",
        {"turning_point": 0.3, "pause": 0.4},
        [0.0, 0.8, 1.2, 2.0],
        lambda t: (RATE * 0.7 * min(t / 0.8, 1, (2 - t) / 0.8), 1 - 0.7 * min(t / 0.8, 1, (2 - t) / 0.8)),
    ),
    ("blend", {"mix": 0.5}, [0.0, 1.6], lambda t: (RATE * (1 - 0.5 * t / 1.6), 0.5 + 0.5 * t / 1.6)),
]
"""Name, parameters, times between which the drive is smooth, and the drive (A, B)."""


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


def copies(batch: ClusterBatch, spins: npt.ArrayLike, seeds: U64) -> ClusterBatch:
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


def levels(batch: ClusterBatch, row: int = 0) -> F64:
    """All energies of one cluster, term by term."""
    assert batch.couplings is not None
    spins = 1 - 2 * (np.arange(1 << batch.size)[:, None] >> np.arange(batch.size) & 1)
    energies: F64 = spins @ batch.fields[row] + 0.5 * np.einsum("xi,ij,xj->x", spins, batch.couplings[row], spins)
    return energies


def z_matrices(spins: int) -> list[F64]:
    return [np.diag(1.0 - 2.0 * (np.arange(1 << spins) >> spin & 1)) for spin in range(spins)]


def distances(spins: int) -> npt.NDArray[np.int64]:
    numbers = np.arange(1 << spins)
    differing: npt.NDArray[np.int64] = numbers[:, None] ^ numbers[None, :]
    return (differing[:, :, None] >> np.arange(spins) & 1).sum(axis=2)


def hop_of(driver: str, spins: int) -> float:
    """Hops in a unit of time: the rate over 2k / (width of the driver's spectrum)."""
    values = np.linalg.eigvalsh(driver_matrix(driver, spins))
    return float(RATE * (values[-1] - values[0]) / (2 * spins))


def start_vector(batch: ClusterBatch, name: str) -> F64:
    size = 1 << batch.size
    return np.eye(size)[numbers_of(batch.spins)[0]] if name == "reverse" else np.full(size, size**-0.5)


def made(name: str, **parameters: Any) -> Anneal:
    subsolver = make_subsolver(name, **parameters)
    assert isinstance(subsolver, Anneal)
    return subsolver


def assert_drawn_from(law: F64, outcomes: npt.NDArray[np.int8]) -> None:
    """Chi-square over all configurations expected at least 5 times, the others together."""
    counts = np.bincount(numbers_of(outcomes.reshape(-1, outcomes.shape[-1])), minlength=len(law))
    expected = law * counts.sum()
    rare = expected < 5
    seen, wanted = np.append(counts[~rare], counts[rare].sum()), np.append(expected[~rare], expected[rare].sum())
    seen, wanted = seen[wanted > 0], wanted[wanted > 0]
    assert ((seen - wanted) ** 2 / wanted).sum() < chi2.isf(FALSE_ALARM, len(seen) - 1)


# the law


@pytest.mark.parametrize(("name", "parameters", "times", "drive"), ANNEALS)
@pytest.mark.parametrize(("size", "driver"), [(1, "hypercube"), (3, "hypercube"), (3, "complete"), (4, "pairs")])
def test_dephasing_is_that_of_the_master_equation(
    size: int, driver: str, name: str, parameters: dict[str, Any], times: list[float], drive: Drive
) -> None:
    qutip = pytest.importorskip("qutip")
    batch, jumps = glasses(1, size), 0.6
    anneal = made(
        name, driver=driver, hopping=RATE, duration=DURATION, shots=50, tolerance=1e-9, dephasing=jumps, **parameters
    )
    parts = [qutip.Qobj(driver_matrix(driver, size)), qutip.Qobj(np.diag(levels(batch)))]
    moving = qutip.QobjEvo([[parts[0], lambda t: -drive(t)[0]], [parts[1], lambda t: drive(t)[1]]])
    strikes = [math.sqrt(jumps * hop_of(driver, size)) * qutip.Qobj(matrix) for matrix in z_matrices(size)]
    options = {"rtol": 1e-9, "atol": 1e-11, "nsteps": 100_000}
    start = qutip.Qobj(start_vector(batch, name)[:, None])
    law = qutip.mesolve(moving, start, times, strikes, options=options).states[-1].full().diagonal().real
    np.testing.assert_allclose(anneal.noisy_distribution(batch)[0], law, rtol=0, atol=1e-8)
    answer = anneal.propose(repeated(batch, 1000))
    assert_drawn_from(law, answer.outcomes)
    assert answer.hit_probability is not None
    assert answer.noiseless_hit is not None
    minimum = levels(batch).argmin()
    np.testing.assert_allclose(answer.hit_probability, law[minimum], rtol=0, atol=1e-8)
    np.testing.assert_allclose(answer.noiseless_hit, anneal.distribution(batch)[0, minimum], rtol=0, atol=1e-9)


def by_integration(
    batch: ClusterBatch, driver: str, times: list[float], drive: Drive, jump_rate: float, rho: Complex
) -> F64:
    """The diagonal at the end, by an eighth-order Runge-Kutta method on the matrix (Dormand & Prince)."""
    energies, matrix, fade = levels(batch), driver_matrix(driver, batch.size), 2 * jump_rate * distances(batch.size)

    def slope(time: float, flat: Complex) -> Complex:
        state = flat.reshape(rho.shape)
        a, b = drive(time)
        product = b * energies[:, None] * state - a * (matrix @ state)
        turned: Complex = -1j * (product - product.conj().T) - fade * state
        return turned.ravel()

    for begin, end in pairwise(times):
        solved = solve_ivp(slope, (begin, end), rho.ravel(), method="DOP853", rtol=1e-9, atol=1e-11)
        rho = solved.y[:, -1].reshape(rho.shape)
    law: F64 = rho.diagonal().real
    return law


@pytest.mark.parametrize(("name", "parameters", "times", "drive"), ANNEALS)
def test_trajectories_of_more_spins_follow_the_master_equation(
    name: str, parameters: dict[str, Any], times: list[float], drive: Drive
) -> None:
    size, jumps = MATRIX_SPINS + 1, 0.5
    batch = glasses(1, size, seed=5)
    anneal = made(name, hopping=RATE, duration=DURATION, dephasing=jumps, **parameters)
    start = start_vector(batch, name)
    law = by_integration(batch, "hypercube", times, drive, jumps * RATE, np.outer(start, start).astype(complex))
    answer = anneal.propose(repeated(batch, 20_000))
    assert answer.hit_probability is None
    assert answer.noiseless_hit is not None
    assert_drawn_from(law, answer.outcomes)
    assert np.abs(law - anneal.distribution(batch)[0]).max() > 0.01
    with pytest.raises(ValueError, match=f"{size} dephased spins is only sampled"):
        anneal.noisy_distribution(batch)


def test_dephasing_along_a_curve() -> None:
    """The search curve in closed form, at the tolerance asked for."""
    batch, root = glasses(1, 3), math.sqrt(7)

    def drive(time: float) -> tuple[float, float]:
        progress = 0.5 + math.tan((2 * time / DURATION - 1) * math.atan(root)) / (2 * root)
        return RATE * (1 - progress), progress

    start = start_vector(batch, "forward")
    law = by_integration(batch, "hypercube", [0.0, DURATION], drive, 0.7 * RATE, np.outer(start, start).astype(complex))
    for tolerance in (1e-4, 1e-8):
        anneal = made(
            "forward", schedule="search", hopping=RATE, duration=DURATION, dephasing=0.7, tolerance=tolerance, shots=30
        )
        assert 0.5 * np.abs(anneal.noisy_distribution(batch)[0] - law).sum() < tolerance
    assert_drawn_from(law, anneal.propose(repeated(batch, 500)).outcomes)


@pytest.mark.parametrize("name", ["forward", "reverse", "blend"])
def test_without_a_jump_the_noiseless_anneal_remains(name: str) -> None:
    for size in (3, 7):
        batch = glasses(20, size)
        quiet, rare = made(name, shots=2), made(name, shots=2, dephasing=1e-13)
        one, other = quiet.propose(batch), rare.propose(batch)
        assert one.times is not None
        assert other.times is not None
        assert one.times.tobytes() == other.times.tobytes()
        assert one.outcomes.tobytes() == other.outcomes.tobytes()
        assert quiet.estimated_errors(batch) == pytest.approx(rare.estimated_errors(batch), rel=1e-4)
    few = glasses(10, MATRIX_SPINS)
    np.testing.assert_allclose(rare.noisy_distribution(few), quiet.distribution(few), rtol=0, atol=1e-9)


@pytest.mark.parametrize("name", ["forward", "reverse", "blend"])
def test_strong_dephasing_of_a_free_cluster_forgets_the_start(name: str) -> None:
    """Where nothing distinguishes configurations, classical hopping ends in the uniform law."""
    free = batch_of(np.zeros((1, 3)), np.zeros((1, 3, 3)), [[1, -1, 1]], [4])
    law = made(name, duration_in_hops=200.0, dephasing=0.5).noisy_distribution(free)
    np.testing.assert_allclose(law, 1 / 8, rtol=0, atol=1e-6)


# one trajectory


class Row:
    """The first call of a batch, ready for the kernels."""

    def __init__(self, anneal: Anneal, batch: ClusterBatch) -> None:
        schedule, time_scale, a_scale = anneal.scaled_schedule(batch)
        self.energies, self.shape, self.report = levels(batch), np.empty(5), np.empty(3)
        self.legs = scaled_legs(legs_array(schedule), time_scale[0], a_scale[0])
        self.spins, self.mover, self.knots = batch.size, anneal.mover, np.zeros((2, 3))
        self.rooms, self.neglected = make_rooms(1 << batch.size), NEGLECTED * anneal.tolerance
        self.half_width, self.steps = steps_of_row(
            self.energies, 0.0, self.shape, self.mover, self.spins, self.legs, self.knots, anneal.tolerance,
            anneal.most_steps, self.rooms, self.report,
        )  # fmt: skip

    def trajectory(self, start: int, jump_rate: float, seed: int) -> tuple[Complex, float]:
        """The last state, and the error that its law may have."""
        real, imaginary, cost = np.empty(1 << self.spins), np.empty(1 << self.spins), np.empty(2)
        follow_anneal_trajectory(
            self.energies, self.half_width, self.shape, self.spins, self.mover, self.legs, self.knots, self.steps,
            self.neglected, start, jump_rate, np.array([seed], np.uint64), self.rooms, real, imaginary, cost,
        )  # fmt: skip
        return real + 1j * imaginary, self.report[2] + cost[0]

    def matrix(self, jumps: list[tuple[float, int]]) -> Complex:
        """The whole evolution with these strikes (time, spin), a column for every start."""
        size, cost, columns = 1 << self.spins, np.zeros(2), []
        for start in range(size):
            real, imaginary, here, place = np.empty(size), np.empty(size), 0.0, 0
            start_from(start, real, imaginary)
            for time, spin in [*jumps, (self.legs[-1, 1], -1)]:
                place = follow_pieces(
                    self.energies, self.half_width, self.shape, size, self.mover, self.legs, self.knots, self.steps,
                    self.neglected, place, here, time, self.rooms, real, imaginary, cost,
                )  # fmt: skip
                if spin >= 0:
                    signs = z_matrices(self.spins)[spin].diagonal()
                    real, imaginary = real * signs, imaginary * signs
                here = time
            columns.append(real + 1j * imaginary)
        return np.array(columns).T


@pytest.mark.parametrize("driver", DRIVERS)
@pytest.mark.parametrize(("name", "parameters", "times", "drive"), ANNEALS)
def test_a_trajectory_is_the_product_of_its_pieces(
    name: str, parameters: dict[str, Any], times: list[float], drive: Drive, driver: str
) -> None:
    """Between strikes two dense exponentials a step (Blanes & Moan, 2006); the strikes are those of the same stream."""
    size, rate = 6, 0.6
    batch = glasses(1, size, seed=9)
    row = Row(made(name, hopping=RATE, duration=DURATION, driver=driver, tolerance=1e-9, **parameters), batch)
    stream, here, strikes = np.array([77], np.uint64), 0.0, []
    while (here := next_jump(stream, size * rate, here)) < times[-1]:
        strikes.append((here, next_below(stream, size)))
    assert strikes
    state, energies, matrix = np.eye(64, dtype=complex)[5], row.energies, driver_matrix(driver, size)
    node, near, far = math.sqrt(3) / 6, 0.25 + math.sqrt(3) / 6, 0.25 - math.sqrt(3) / 6
    stops = dict(strikes)
    edges = sorted({*times, *stops})
    for begin, end in pairwise(edges):
        count = math.ceil((end - begin) / (0.02 if driver == "hypercube" else 0.005))
        length = (end - begin) / count
        for index in range(count):
            middle = begin + (index + 0.5) * length
            early, late = drive(middle - node * length), drive(middle + node * length)
            for first, second in ((near, far), (far, near)):
                a, b = (first * early[part] + second * late[part] for part in range(2))
                values, vectors = np.linalg.eigh(np.diag(b * energies) - a * matrix)
                state = vectors @ (np.exp(-1j * length * values) * (vectors.T @ state))
        if end in stops:
            state = z_matrices(size)[stops[end]] @ state
    followed, _ = row.trajectory(5, rate, 77)
    assert np.vdot(followed, followed).real == pytest.approx(1.0, abs=1e-8)
    assert abs(np.vdot(state, followed)) == pytest.approx(1.0, abs=1e-8)


@pytest.mark.parametrize(
    ("name", "parameters"), [("forward", {"schedule": "search"}), ("forward", {}), ("reverse", {"turning_point": 0.2})]
)
def test_the_estimate_holds_given_the_jumps(name: str, parameters: dict[str, Any]) -> None:
    batch = glasses(1, 6)
    finest = Row(made(name, tolerance=1e-11, **parameters), batch)
    for tolerance in (1e-3, 1e-6):
        row = Row(made(name, tolerance=tolerance, **parameters), batch)
        for seed in range(8):
            rough, estimate = row.trajectory(1, 1.5, seed)
            exact, _ = finest.trajectory(1, 1.5, seed)
            assert 0.5 * np.abs(np.abs(rough) ** 2 - np.abs(exact) ** 2).sum() <= estimate <= tolerance


# what is left of detailed balance


@pytest.mark.parametrize("driver", DRIVERS)
@pytest.mark.parametrize("pause", [0.0, 0.7])
def test_mirrored_jumps_make_the_transposed_matrix(pause: float, driver: str) -> None:
    """Exactly, however much the series leave out: so the sum over all jumps is as symmetric as rounding allows."""
    anneal = made("reverse", turning_point=0.3, pause=pause, duration=4.0, tolerance=1e-2, driver=driver)
    row = Row(anneal, glasses(1, 5))
    end = row.legs[-1, 1]
    jumps = [(0.11 * end, 3), (0.47 * end, 0), (0.52 * end, 2), (0.83 * end, 3)]
    there, back = row.matrix(jumps), row.matrix([(end - time, spin) for time, spin in reversed(jumps)])
    assert np.abs(back - there.T).max() < 1e-12
    assert np.abs(there - there.T).max() > 1e-3
    exact = Row(replace(anneal, tolerance=1e-11), glasses(1, 5))
    assert np.abs(exact.matrix(jumps) - there).max() > 1e-8


def exact_proposal(batch: ClusterBatch, driver: str, times: list[float], drive: Drive, jump_rate: float) -> F64:
    """Proposal matrix from exponentials of the superoperator, fourth order in steps that mirror one another."""
    size, identity, matrix = 1 << batch.size, np.eye(1 << batch.size), driver_matrix(driver, batch.size)
    fade = np.diag(-2.0 * jump_rate * distances(batch.size).ravel())
    channel: Complex = np.eye(size**2, dtype=complex)
    node, near, far = math.sqrt(3) / 6, 0.25 + math.sqrt(3) / 6, 0.25 - math.sqrt(3) / 6
    for begin, end in pairwise(times):
        length = (end - begin) / 40
        for index in range(40):
            middle = begin + (index + 0.5) * length
            early, late = drive(middle - node * length), drive(middle + node * length)
            for first, second in ((near, far), (far, near)):
                a, b = (first * early[part] + second * late[part] for part in range(2))
                h = np.diag(b * levels(batch)) - a * matrix
                generator = -1j * (np.kron(h, identity) - np.kron(identity, h)) + (first + second) * fade
                channel = expm(length * generator) @ channel
    places = np.arange(size) * (size + 1)
    proposal: F64 = channel[np.ix_(places, places)].real.T
    return proposal


@pytest.mark.parametrize("driver", DRIVERS)
def test_a_dephased_palindrome_is_symmetric(driver: str) -> None:
    batch, (name, parameters, times, drive) = glasses(1, 3, seed=21), ANNEALS[1]
    anneal = made(name, driver=driver, hopping=RATE, duration=DURATION, dephasing=0.4, **parameters)
    exact = exact_proposal(batch, driver, times, drive, 0.4 * hop_of(driver, 3))
    matrix = anneal.noisy_distribution(from_everywhere(batch))
    assert anneal.balance == "symmetric"
    assert np.abs(exact - exact.T).max() < 1e-12
    assert np.abs(matrix - matrix.T).max() < 1e-12
    np.testing.assert_allclose(matrix, exact, rtol=0, atol=1e-6)
    assert np.abs(matrix - np.eye(8)).max() > 0.1


def drift(proposal: F64, energies: F64) -> float:
    """How far a step of the accepted chain takes the Boltzmann law from itself."""
    law = np.exp(energies.min() - energies)
    law /= law.sum()
    chain = proposal * np.minimum(1.0, np.exp(energies[:, None] - energies[None, :]))
    np.fill_diagonal(chain, 0.0)
    np.fill_diagonal(chain, 1.0 - chain.sum(axis=1))
    return float(np.abs(law @ chain - law).max())


@pytest.mark.parametrize("size", [2, 3, 4])
@pytest.mark.parametrize("more", [{}, {"control_error": 0.1, "precision_bits": 4}])
def test_the_accepted_chain_keeps_the_boltzmann_law(size: int, more: dict[str, Any]) -> None:
    batch = glasses(1, size, seed=6)
    anneal = made("reverse", turning_point=0.3, pause=0.3, dephasing=0.4, **more)
    matrix = anneal.noisy_distribution(from_everywhere(batch))
    assert anneal.balance == "symmetric"
    assert np.abs(matrix - matrix.T).max() < 1e-12
    assert drift(matrix, levels(batch)) < 1e-12


@pytest.mark.parametrize("broken", [{"leg_ratio": 4.0}, {"readout_flip": 0.1}])
def test_the_same_test_catches_what_breaks_it(broken: dict[str, Any]) -> None:
    batch = glasses(1, 3, seed=6)
    anneal = made("reverse", turning_point=0.3, dephasing=0.1, **broken)
    matrix = anneal.noisy_distribution(from_everywhere(batch))
    assert anneal.balance == "none"
    assert np.abs(matrix - matrix.T).max() > 1e-4
    assert drift(matrix, levels(batch)) > 1e-5
    assert made("forward", dephasing=0.1).balance == made("blend", dephasing=0.1).balance == "none"
    assert made("reverse", dephasing=0.1, shots=2).balance == "none"


@pytest.mark.parametrize("name", ["forward", "reverse"])
def test_a_stranger_would_find_every_promise_kept(name: str) -> None:
    verdicts = check(make_subsolver(name, dephasing=0.3))
    assert [verdict for verdict in verdicts if verdict.outcome == "broken"] == []


# bits, forecasts, worth


@pytest.mark.parametrize("size", [MATRIX_SPINS, 7])
@pytest.mark.parametrize(("name", "parameters"), [("forward", {"schedule": "gap"}), ("reverse", {}), ("blend", {})])
def test_rows_stay_independent_and_units_do_not_matter(name: str, parameters: dict[str, Any], size: int) -> None:
    batch, anneal = glasses(4, size), made(name, shots=2, dephasing=0.5, control_error=0.1, **parameters)
    assert batch.couplings is not None
    scaled = replace(batch, fields=batch.fields * 2.0**20, couplings=batch.couplings * 2.0**20)
    whole, again, other = anneal.propose(batch), anneal.propose(batch), anneal.propose(scaled)
    for key in ("outcomes", "hit_probability", "noiseless_hit"):
        if getattr(whole, key) is not None:
            rows = [getattr(anneal.propose(batch.rows(row, row + 1)), key) for row in range(len(batch))]
            assert np.concatenate(rows).tobytes() == getattr(whole, key).tobytes(), key
            assert getattr(other, key).tobytes() == getattr(whole, key).tobytes(), key
            assert getattr(again, key).tobytes() == getattr(whole, key).tobytes(), key


@pytest.mark.parametrize("size", [MATRIX_SPINS, 8])
@pytest.mark.parametrize("name", ["forward", "reverse", "blend"])
def test_the_forecast_counts_the_pieces(name: str, size: int) -> None:
    """From the expected spread of the levels: within a third of what was done, and more with every jump and shot."""
    batch, quiet = glasses(6, size), made(name).forecast(glasses(6, size)).work.amplitude_updates
    assert quiet is not None
    seen = [quiet]
    for parameters in ({"dephasing": 0.3}, {"dephasing": 3.0}, {"dephasing": 3.0, "shots": 3}):
        anneal = made(name, **parameters)
        expected, done = anneal.forecast(batch), anneal.propose(batch).work
        assert expected.work.amplitude_updates is not None
        assert done.amplitude_updates is not None
        ratio = expected.work.amplitude_updates / done.amplitude_updates
        assert np.all((ratio > 2 / 3) & (ratio < 3 / 2))
        assert expected.bytes > made(name).forecast(batch).bytes
        assert np.all(expected.work.amplitude_updates > seen[-1])
        seen.append(expected.work.amplitude_updates)


def test_dephasing_means_fewer_hits_and_the_call_says_what_it_would_have_been() -> None:
    batch = glasses(2000, 5, seed=12)
    lowest = np.array([levels(batch, row).argmin() for row in range(len(batch))])
    quiet, noisy = made("forward", shots=4).propose(batch), made("forward", shots=4, dephasing=0.3).propose(batch)
    success, less = ((numbers_of(answer.outcomes) == lowest[:, None]).mean() for answer in (quiet, noisy))
    assert less < success - 0.05
    assert quiet.hit_probability is not None
    assert noisy.noiseless_hit is not None
    assert noisy.noiseless_hit.tobytes() == quiet.hit_probability.tobytes()
