"""Noise on forward, reverse and blended anneals, against dense exponentials of what the device really has.

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
from scipy.interpolate import CubicHermiteSpline
from scipy.linalg import expm
from scipy.stats import chi2

from patchwalk.subsolvers import ClusterBatch, make_subsolver
from patchwalk.subsolvers.anneal_calls import Anneal
from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.draws import seed_for
from patchwalk.subsolvers.drivers import DRIVERS, driver_matrix
from patchwalk.subsolvers.noise import CONTROL
from patchwalk.subsolvers.schedules import gap_knots

FALSE_ALARM = 1e-6
RATE, DURATION = 0.8, 1.6
Drive = Callable[[float], tuple[float, float]]

ANNEALS: list[tuple[str, dict[str, Any], list[tuple[float, float, Drive]]]] = [
    ("forward", {}, [(0.0, 1.6, lambda t: (RATE * (1 - t / 1.6), t / 1.6))]),
    (
        "reverse",
        {"turning_point": 0.3, "pause": 0.4},
        [
            (0.0, 0.8, lambda t: (RATE * 0.7 * t / 0.8, 1 - 0.7 * t / 0.8)),
            (0.8, 1.2, lambda _: (RATE * 0.7, 0.3)),
            (1.2, 2.0, lambda t: (RATE * 0.7 * (2.0 - t) / 0.8, 1 - 0.7 * (2.0 - t) / 0.8)),
        ],
    ),
    ("blend", {"mix": 0.5}, [(0.0, 1.6, lambda t: (RATE * (1 - 0.5 * t / 1.6), 0.5 + 0.5 * t / 1.6))]),
]
DISTURBED: list[dict[str, Any]] = [
    {"control_error": 0.2},
    {"precision_bits": 2},
    {"control_error": 0.1, "precision_bits": 3},
]
IMPERFECT = [*DISTURBED, {"readout_flip": 0.05}, {"control_error": 0.1, "precision_bits": 4, "readout_flip": 0.1}]


def glass(spins: int, seed: int = 3) -> ClusterBatch:
    """One fully connected glass with fields and couplings N(0,1), at temperature 1."""
    draw = np.random.default_rng(seed)
    upper = np.triu(draw.normal(size=(1, spins, spins)), 1)
    return ClusterBatch(
        fields=draw.normal(size=(1, spins)),
        spins=draw.choice(np.array([-1, 1], np.int8), size=(1, spins)),
        temperature=np.ones(1),
        seeds=draw.integers(0, 2**63, 1, dtype=np.uint64),
        couplings=upper + upper.transpose(0, 2, 1),
    )


def from_everywhere(batch: ClusterBatch) -> ClusterBatch:
    """The call from every configuration, always with its own seed."""
    assert batch.couplings is not None
    count = 1 << batch.size
    spins = (1 - 2 * (np.arange(count)[:, None] >> np.arange(batch.size) & 1)).astype(np.int8)
    return ClusterBatch(
        np.repeat(batch.fields, count, 0), spins, np.ones(count), np.repeat(batch.seeds, count),
        np.repeat(batch.couplings, count, 0),
    )  # fmt: skip


def made(name: str, **parameters: Any) -> Anneal:
    subsolver = make_subsolver(name, **parameters)
    assert isinstance(subsolver, Anneal)
    return subsolver


def numbers_of(spins: npt.NDArray[np.int8]) -> npt.NDArray[np.int64]:
    return (spins < 0).astype(np.int64) @ (1 << np.arange(spins.shape[-1]))


def energies_of(fields: F64, couplings: F64) -> F64:
    """All energies of one cluster, term by term."""
    spins = 1 - 2 * (np.arange(1 << len(fields))[:, None] >> np.arange(len(fields)) & 1)
    energies: F64 = spins @ fields + 0.5 * np.einsum("xi,ij,xj->x", spins, couplings, spins)
    return energies


def as_the_device_has_it(batch: ClusterBatch, control_error: float = 0.0, precision_bits: int | None = None) -> F64:
    """Energies of the disturbed cluster: rounded, then off by Box & Muller's Gaussians of the call's stream."""
    assert batch.couplings is not None
    fields, couplings = batch.fields[0].copy(), batch.couplings[0].copy()
    if precision_bits is not None:
        step = max(np.abs(fields).max(), np.abs(couplings).max()) / 2 ** (precision_bits - 1)
        fields, couplings = step * np.round(fields / step), step * np.round(couplings / step)
    state = seed_for(int(batch.seeds[0]), int(CONTROL))

    def unit() -> float:
        nonlocal state
        state = (state + 0x9E3779B97F4A7C15) % 2**64
        z = (state ^ state >> 30) * 0xBF58476D1CE4E5B9 % 2**64
        z = (z ^ z >> 27) * 0x94D049BB133111EB % 2**64
        return ((z ^ z >> 31) >> 11) * 2.0**-53

    for i in range(batch.size if control_error else 0):
        for weights, place in ((fields, (i,)), *((couplings, (i, j)) for j in range(i))):
            radius = math.sqrt(-2 * math.log(1 - unit()))
            weights[place] *= 1 + control_error * radius * math.cos(2 * math.pi * unit())
            if weights is couplings:
                couplings[place[::-1]] = couplings[place]
    return energies_of(fields, couplings)


def propagator(
    energies: F64, driver: str, pieces: list[tuple[float, float, Drive]], steps: int = 200
) -> npt.NDArray[np.complex128]:
    """The whole evolution by two dense exponentials a step (Blanes & Moan, Appl. Numer. Math. 56 (2006) 1519)."""
    matrix = driver_matrix(driver, len(energies).bit_length() - 1)
    whole = np.eye(len(energies), dtype=complex)
    node, near, far = math.sqrt(3) / 6, 0.25 + math.sqrt(3) / 6, 0.25 - math.sqrt(3) / 6
    for begin, end, drive in pieces:
        length = (end - begin) / steps
        for index in range(steps):
            middle = begin + (index + 0.5) * length
            early, late = drive(middle - node * length), drive(middle + node * length)
            for first, second in ((near, far), (far, near)):
                a, b = (first * early[part] + second * late[part] for part in range(2))
                whole = expm(-1j * length * (np.diag(b * energies) - a * matrix)) @ whole
    return whole


def confusion(spins: int, flip: float) -> F64:
    """flip^d (1 - flip)^(k - d), d the Hamming distance."""
    numbers = np.arange(1 << spins)
    distance = ((numbers[:, None] ^ numbers)[:, :, None] >> np.arange(spins) & 1).sum(axis=2)
    matrix: F64 = flip**distance * (1 - flip) ** (spins - distance)
    return matrix


def assert_drawn_from(law: F64, outcomes: npt.NDArray[np.int8]) -> None:
    """Chi-square over all configurations expected at least 5 times, the others together."""
    counts = np.bincount(numbers_of(outcomes.reshape(-1, outcomes.shape[-1])), minlength=len(law))
    expected = law * counts.sum()
    rare = expected < 5
    seen, wanted = np.append(counts[~rare], counts[rare].sum()), np.append(expected[~rare], expected[rare].sum())
    seen, wanted = seen[wanted > 0], wanted[wanted > 0]
    assert ((seen - wanted) ** 2 / wanted).sum() < chi2.isf(FALSE_ALARM, len(seen) - 1)


@pytest.mark.parametrize("parameters", IMPERFECT)
@pytest.mark.parametrize(("name", "schedule", "pieces"), ANNEALS)
@pytest.mark.parametrize("driver", DRIVERS)
def test_the_law_is_that_of_the_device(
    driver: str,
    name: str,
    schedule: dict[str, Any],
    pieces: list[tuple[float, float, Drive]],
    parameters: dict[str, Any],
) -> None:
    batch = glass(3, seed=11)
    controls = {key: value for key, value in parameters.items() if key != "readout_flip"}
    evolved = propagator(as_the_device_has_it(batch, **controls), driver, pieces)
    start = np.eye(8)[numbers_of(batch.spins)[0]] if name == "reverse" else np.full(8, 8**-0.5)
    law = confusion(3, parameters.get("readout_flip", 0.0)) @ np.abs(evolved @ start) ** 2
    anneal = made(
        name, driver=driver, hopping=RATE, duration=DURATION, shots=20_000, tolerance=1e-9, **schedule, **parameters
    )
    np.testing.assert_allclose(anneal.noisy_distribution(batch)[0], law, rtol=0, atol=1e-8)
    answer, quiet = anneal.propose(batch), anneal.distribution(batch)[0]
    assert_drawn_from(law, answer.outcomes)
    assert answer.hit_probability is not None
    assert answer.noiseless_hit is not None
    assert batch.couplings is not None
    minimum = energies_of(batch.fields[0], batch.couplings[0]).argmin()
    assert answer.hit_probability[0] == pytest.approx(law[minimum], abs=1e-8)
    assert answer.noiseless_hit[0] == pytest.approx(quiet[minimum], abs=1e-9)
    assert np.abs(quiet - law).max() > 1e-3


@pytest.mark.parametrize("schedule", ["linear", "search", "gap"])
def test_rate_and_schedule_are_those_of_the_cluster_as_meant(schedule: str) -> None:
    """One-bit controls of a cluster whose weights are all alike change nothing; of any other, only what acts."""
    batch = glass(4)
    assert batch.couplings is not None
    alike = replace(batch, fields=np.sign(batch.fields), couplings=np.sign(batch.couplings))
    quiet, rounded = made("forward", schedule=schedule), made("forward", schedule=schedule, precision_bits=1)
    assert quiet.distribution(alike).tobytes() == rounded.noisy_distribution(alike).tobytes()
    answer, noiseless = rounded.propose(batch), quiet.propose(batch)
    assert answer.times is not None
    assert noiseless.times is not None
    assert answer.times.tobytes() == noiseless.times.tobytes()
    assert np.abs(quiet.distribution(batch) - rounded.noisy_distribution(batch)).max() > 1e-3


def test_the_speed_follows_the_gap_of_the_cluster_as_meant() -> None:
    batch = glass(3, seed=11)
    assert batch.couplings is not None
    meant = energies_of(batch.fields[0], batch.couplings[0])
    knots = gap_knots(meant, RATE, driver_matrix("hypercube", 3))
    curve = CubicHermiteSpline(knots[:, 0], knots[:, 1], knots[:, 2])

    def drive(t: float) -> tuple[float, float]:
        progress = float(curve(t / DURATION))
        return RATE * (1 - progress), progress

    pieces: list[tuple[float, float, Drive]] = [
        (begin, end, drive) for begin, end in pairwise((DURATION * knots[:, 0]).tolist())
    ]
    evolved = propagator(as_the_device_has_it(batch, control_error=0.3), "hypercube", pieces, steps=5)
    anneal = made("forward", schedule="gap", hopping=RATE, duration=DURATION, control_error=0.3)
    law = np.abs(evolved @ np.full(8, 8**-0.5)) ** 2
    np.testing.assert_allclose(anneal.noisy_distribution(batch)[0], law, rtol=0, atol=1e-6)


@pytest.mark.parametrize("name", ["forward", "reverse", "blend"])
def test_misread_spins_leave_everything_else_alone(name: str) -> None:
    batch = from_everywhere(glass(5))
    quiet, noisy = made(name, shots=3).propose(batch), made(name, shots=3, readout_flip=0.1).propose(batch)
    assert quiet.hit_probability is not None
    assert noisy.noiseless_hit is not None
    assert noisy.noiseless_hit.tobytes() == quiet.hit_probability.tobytes()
    turned = (quiet.outcomes != noisy.outcomes)[0]
    assert 0 < turned.sum() < turned.size
    assert quiet.work.amplitude_updates is not None
    assert noisy.work.amplitude_updates is not None
    assert quiet.work.amplitude_updates.tobytes() == noisy.work.amplitude_updates.tobytes()


@pytest.mark.parametrize("parameters", DISTURBED)
@pytest.mark.parametrize("size", [2, 3])
def test_a_disturbed_palindrome_keeps_the_boltzmann_law(size: int, parameters: dict[str, Any]) -> None:
    """Symmetric for every seed, by the exact evolution and by ours, so that Metropolis acceptance keeps pi."""
    batch = glass(size, seed=21)
    schedule, pieces = ANNEALS[1][1:]
    anneal = made("reverse", hopping=RATE, duration=DURATION, tolerance=1e-9, **schedule, **parameters)
    exact = np.abs(propagator(as_the_device_has_it(batch, **parameters), "hypercube", pieces)) ** 2
    matrix = anneal.noisy_distribution(from_everywhere(batch))
    assert anneal.balance == "symmetric"
    assert np.abs(exact - exact.T).max() < 1e-12
    np.testing.assert_allclose(matrix, exact, rtol=0, atol=1e-8)
    assert np.abs(matrix - matrix.T).max() < 1e-12
    assert np.abs(matrix - np.diag(np.diag(matrix))).max() > 0.05
    assert drift(matrix, batch) < 1e-12


def test_misread_spins_and_lopsided_legs_break_it() -> None:
    batch = glass(3, seed=21)
    broken: list[dict[str, Any]] = [{"readout_flip": 0.1}, {"leg_ratio": 4.0, "control_error": 0.1}]
    for parameters in broken:
        anneal = made("reverse", turning_point=0.3, **parameters)
        matrix = anneal.noisy_distribution(from_everywhere(batch))
        assert anneal.balance == "none"
        assert np.abs(matrix - matrix.T).max() > 1e-3
        assert drift(matrix, batch) > 1e-4


def drift(proposal: F64, batch: ClusterBatch) -> float:
    """How far a step of the accepted chain takes the Boltzmann law of the cluster as meant from itself."""
    assert batch.couplings is not None
    energies = energies_of(batch.fields[0], batch.couplings[0])
    law = np.exp(energies.min() - energies)
    law /= law.sum()
    chain = proposal * np.minimum(1.0, np.exp(energies[:, None] - energies[None, :]))
    np.fill_diagonal(chain, 0.0)
    np.fill_diagonal(chain, 1.0 - chain.sum(axis=1))
    return float(np.abs(law @ chain - law).max())


@pytest.mark.parametrize("name", ["forward", "reverse", "blend"])
def test_what_cannot_be_is_refused_before_any_work(name: str) -> None:
    refused: list[tuple[dict[str, Any], str]] = [
        ({"dephasing": -1.0}, f"{name}: dephasing is -1.0"),
        ({"control_error": 2.0}, "control_error is 2.0"),
        ({"precision_bits": 0}, "precision_bits is 0"),
        ({"readout_flip": 0.6}, "readout_flip is 0.6"),
    ]
    for parameters, words in refused:
        with pytest.raises(ValueError, match=words):
            make_subsolver(name, **parameters)
    noisy = made(name, control_error=0.1)
    spins, seeds = np.ones((1, 23), np.int8), np.zeros(1, np.uint64)
    empty = ClusterBatch(np.zeros((1, 23)), spins, np.zeros(1), seeds, np.zeros((1, 23, 23)))
    for ask in (noisy.propose, noisy.forecast, noisy.noisy_distribution):
        with pytest.raises(ValueError, match=r"23 spins.*stops at 22"):
            ask(empty)


def test_the_estimate_is_that_of_what_acts_and_the_forecast_counts_both_evolutions() -> None:
    batch = glass(6)
    quiet, noisy = made("forward", schedule="search"), made("forward", schedule="search", control_error=0.3)
    assert noisy.estimated_errors(batch) != quiet.estimated_errors(batch)
    alone, both = quiet.forecast(batch), noisy.forecast(batch)
    assert alone.work.amplitude_updates is not None
    assert both.work.amplitude_updates is not None
    np.testing.assert_array_equal(both.work.amplitude_updates, 2 * alone.work.amplitude_updates)
    assert both.bytes > alone.bytes
