"""Every start, driver, schedule, kind of time and kind of noise together, against a dense reference at six spins.

Laws that are known are compared as they are; shots, and dephasing, of which there are only shots at this size, by a
chi-square test that calls a true law false with probability ``FALSE_ALARM``. Seeds are fixed. How fields and couplings
are disturbed is taken from noise.py, where test_noise.py checks it by hand.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import cache
from itertools import pairwise, product
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from scipy.integrate import solve_ivp
from scipy.interpolate import CubicHermiteSpline
from scipy.stats import chi2

from patchwalk.subsolvers import ClusterBatch, make_subsolver
from patchwalk.subsolvers.anneal_calls import Anneal
from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.drivers import DRIVERS, driver_matrix
from patchwalk.subsolvers.schedules import gap_knots
from patchwalk.subsolvers.walk import Walk

SPINS, SIZE = 6, 64
FALSE_ALARM = 1e-6
RATE, DURATION = 0.8, 1.6
"""A hopping rate in energy units, and a duration in units of 1/energy."""

NOISES: dict[str, dict[str, Any]] = {
    "quiet": {},
    "dephasing": {"dephasing": 0.4},
    "control": {"control_error": 0.2},
    "bits": {"precision_bits": 3},
    "readout": {"readout_flip": 0.05},
    "all": {"dephasing": 0.3, "control_error": 0.1, "precision_bits": 5, "readout_flip": 0.02},
}

Complex = npt.NDArray[np.complex128]


def two_glasses() -> ClusterBatch:
    """Two fully connected glasses with fields and couplings N(0,1), at temperature 1."""
    draw = np.random.default_rng(17)
    upper = np.triu(draw.normal(size=(2, SPINS, SPINS)), 1)
    return ClusterBatch(
        fields=draw.normal(size=(2, SPINS)),
        spins=draw.choice(np.array([-1, 1], np.int8), size=(2, SPINS)),
        temperature=np.ones(2),
        seeds=draw.integers(0, 2**63, 2, dtype=np.uint64),
        couplings=upper + upper.transpose(0, 2, 1),
    )


BATCH = two_glasses()
CONFIGURATIONS = 1 - 2 * (np.arange(SIZE)[:, None] >> np.arange(SPINS) & 1)
DISTANCES = (CONFIGURATIONS[:, None] != CONFIGURATIONS[None, :]).sum(axis=2)


def numbers_of(spins: npt.NDArray[np.int8]) -> npt.NDArray[np.int64]:
    return (spins < 0).astype(np.int64) @ (1 << np.arange(SPINS))


def levels(batch: ClusterBatch, row: int) -> F64:
    """All energies of one cluster, term by term."""
    assert batch.couplings is not None
    pairs = np.einsum("xi,ij,xj->x", CONFIGURATIONS, batch.couplings[row], CONFIGURATIONS)
    energies: F64 = CONFIGURATIONS @ batch.fields[row] + 0.5 * pairs
    return energies


def hop_rate(driver: str) -> float:
    """Hops in a unit of time: the rate over 2k / (width of the driver's spectrum)."""
    values = np.linalg.eigvalsh(driver_matrix(driver, SPINS))
    return float(RATE * (values[-1] - values[0]) / (2 * SPINS))


@dataclass(frozen=True)
class Drive:
    """A(t) and B(t), smooth between the given times."""

    times: tuple[float, ...]
    at: Callable[[float], tuple[float, float]]


def evolved(energies: F64, driver: str, drive: Drive, jump_rate: float, start: F64) -> F64:
    """The law after an evolution from a pure real state, by an eighth-order Runge-Kutta method (Dormand & Prince).

    Of the state, or with jumps of the density matrix.
    """
    matrix = driver_matrix(driver, SPINS)
    state: Complex = start.astype(complex) if jump_rate == 0.0 else np.outer(start, start).astype(complex)
    column = energies if jump_rate == 0.0 else energies[:, None]

    def slope(time: float, flat: Complex) -> Complex:
        a, b = drive.at(time)
        now = flat.reshape(state.shape)
        turned = b * column * now - a * (matrix @ now)
        if jump_rate > 0.0:
            turned = turned - turned.conj().T - 2j * jump_rate * DISTANCES * now
        change: Complex = -1j * turned.ravel()
        return change

    # jumps are judged by shots alone, which see no more
    exact: dict[str, Any] = {"rtol": 1e-10, "atol": 1e-12} if jump_rate == 0.0 else {"rtol": 1e-6, "atol": 1e-8}
    for begin, end in pairwise(drive.times):
        state = solve_ivp(slope, (begin, end), state.ravel(), method="DOP853", **exact).y[:, -1].reshape(state.shape)
    law: F64 = np.abs(state) ** 2 if jump_rate == 0.0 else state.diagonal().real
    return law


def walk_law(energies: F64, driver: str, times: tuple[float, ...], jump_rate: float, start: F64) -> F64:
    """The law averaged over the measuring times, of which inf stands for an endless interval."""
    if jump_rate > 0.0:
        constant = [Drive((0.0, time), lambda _: (RATE, 1.0)) for time in times]
        return np.mean([evolved(energies, driver, drive, jump_rate, start) for drive in constant], axis=0)
    values, vectors = np.linalg.eigh(np.diag(energies) - RATE * driver_matrix(driver, SPINS))
    overlaps = vectors.T @ start
    if times == (math.inf,):
        rounded = values.round(8)  # few bits make equal energies, and these stay equal under the complete driver
        parts = [vectors[:, rounded == value] @ overlaps[rounded == value] for value in np.unique(rounded)]
        return np.sum(np.square(parts), axis=0)
    return np.mean([np.abs(vectors @ (np.exp(-1j * time * values) * overlaps)) ** 2 for time in times], axis=0)


def starting(row: int, incumbent: bool) -> F64:
    return np.eye(SIZE)[numbers_of(BATCH.spins)[row]] if incumbent else np.full(SIZE, SIZE**-0.5)


def compare(
    subsolver: Walk | Anneal, reference: Callable[[ClusterBatch, int, float], F64], within: float = 1e-8
) -> None:
    """Hold laws, shots and hit probabilities against ``reference(cluster that acts, row, dephasing)``."""
    noise, answer = subsolver.noise, subsolver.propose(BATCH)
    acting, quiet = noise.disturbed(BATCH), subsolver.distribution(BATCH)
    confusion = noise.readout_flip**DISTANCES * (1 - noise.readout_flip) ** (SPINS - DISTANCES)
    assert not answer.status.any()
    assert answer.noiseless_hit is not None
    for row in range(len(BATCH)):
        lowest = levels(BATCH, row).argmin()
        noiseless, law = reference(BATCH, row, 0.0), confusion @ reference(acting, row, noise.dephasing)
        np.testing.assert_allclose(quiet[row], noiseless, rtol=0, atol=within)
        assert answer.noiseless_hit[row] == pytest.approx(noiseless[lowest], abs=within)
        if noise.dephasing == 0.0:
            np.testing.assert_allclose(subsolver.noisy_distribution(BATCH)[row], law, rtol=0, atol=within)
            assert answer.hit_probability is not None
            assert answer.hit_probability[row] == pytest.approx(law[lowest], abs=within)
        else:
            assert answer.hit_probability is None
        assert_drawn_from(law, answer.outcomes[row])
        assert noise.off or np.abs(law - noiseless).max() > 100 * within


def assert_drawn_from(law: F64, outcomes: npt.NDArray[np.int8]) -> None:
    """Chi-square over all configurations expected at least 5 times, the others together."""
    counts = np.bincount(numbers_of(outcomes), minlength=SIZE)
    expected = law * counts.sum()
    rare = expected < 5
    seen, wanted = np.append(counts[~rare], counts[rare].sum()), np.append(expected[~rare], expected[rare].sum())
    seen, wanted = seen[wanted > 1e-6], wanted[wanted > 1e-6]
    assert ((seen - wanted) ** 2 / wanted).sum() < chi2.isf(FALSE_ALARM, len(seen) - 1)


TIMES: dict[str, tuple[dict[str, Any], tuple[float, ...], bool]] = {
    "one": ({"time": 0.9}, (0.9,), False),
    "several": ({"time": [0.3, 0.9], "times": 3}, (0.3, 0.6, 0.9), False),
    "hops": ({"time_in_hops": 0.7}, (0.7,), True),
    "several hops": ({"time_in_hops": [0.4, 1.0], "times": 4}, (0.4, 0.6, 0.8, 1.0), True),
    "endless": ({"time": "infinite"}, (math.inf,), False),
}
"""Parameters, the measuring times they mean, and whether these are in hops."""


@pytest.mark.parametrize("noise", NOISES)
@pytest.mark.parametrize("time", TIMES)
@pytest.mark.parametrize("driver", DRIVERS)
@pytest.mark.parametrize("start", ["uniform", "incumbent"])
def test_walks(start: str, driver: str, time: str, noise: str) -> None:
    parameters, times, in_hops = TIMES[time]
    unit = hop_rate(driver) if in_hops else 1.0
    moments = tuple(time / unit for time in times)
    settings = {"start": start, "driver": driver, "hopping": RATE, "shots": 1500, **parameters, **NOISES[noise]}
    if "dephasing" in settings and time == "endless":
        with pytest.raises(ValueError, match=r"dephasing .* time is .infinite"):
            make_subsolver("walk", **settings)
        return
    walk = make_subsolver("walk", **settings)
    assert isinstance(walk, Walk)

    def reference(acting: ClusterBatch, row: int, dephasing: float) -> F64:
        origin = starting(row, start == "incumbent")
        return walk_law(levels(acting, row), driver, moments, dephasing * hop_rate(driver), origin)

    compare(walk, reference)


def linear(progress: Callable[[float], float]) -> Callable[[float], tuple[float, float]]:
    return lambda time: (RATE * (1 - progress(time)), progress(time))


def there_and_back(there: float, pause: float, back: float, turning: float) -> Drive:
    """B falls from 1 to ``turning`` and rises again, A is the rest."""
    times = (0.0, there, there + pause, there + pause + back)
    return Drive(times, linear(lambda time: float(np.interp(time, times, [1.0, turning, turning, 1.0]))))


def search_progress(time: float) -> float:
    """Roland & Cerf's curve for N = 64."""
    return 0.5 + math.tan((2 * time / DURATION - 1) * math.atan(math.sqrt(63))) / (2 * math.sqrt(63))


@cache
def gap_drive(driver: str, row: int) -> Drive:
    """The cubic through the knots of the cluster as it was meant; test_anneal.py looks at the knots themselves."""
    knots = gap_knots(levels(BATCH, row), RATE, driver_matrix(driver, SPINS))
    curve = CubicHermiteSpline(knots[:, 0], knots[:, 1], knots[:, 2])
    return Drive(tuple(DURATION * knots[:, 0]), linear(lambda time: float(curve(time / DURATION))))


TABLE = "time = [0, 0.4, 1.5]\nA = [1.2, 0.7, 0]\nB = [0.1, 0.2, 1.1]\n"
PLAIN = {"duration": DURATION}
ANNEALS: dict[str, tuple[str, dict[str, Any], Drive | None]] = {
    "linear": ("forward", PLAIN, Drive((0.0, DURATION), linear(lambda time: time / DURATION))),
    "gap": ("forward", {"schedule": "gap", **PLAIN}, None),
    "search": ("forward", {"schedule": "search", **PLAIN}, Drive((0.0, DURATION), linear(search_progress))),
    "table": (
        "forward",
        {"schedule": "mine.toml"},
        Drive(
            (0.0, 0.4, 1.5),
            lambda time: (
                float(np.interp(time, [0.0, 0.4, 1.5], [1.2, 0.7, 0.0])),
                float(np.interp(time, [0.0, 0.4, 1.5], [0.1, 0.2, 1.1])),
            ),
        ),
    ),
    "palindrome": ("reverse", {"turning_point": 0.3, "pause": 0.4, **PLAIN}, there_and_back(0.8, 0.4, 0.8, 0.3)),
    "lopsided": ("reverse", {"turning_point": 0.4, "leg_ratio": 3.0, **PLAIN}, there_and_back(1.2, 0.0, 0.4, 0.4)),
    "blend": (
        "blend",
        {"mix": 0.6, **PLAIN},
        Drive((0.0, DURATION), lambda time: (RATE * (1 - 0.6 * time / DURATION), 0.4 + 0.6 * time / DURATION)),
    ),
}
"""Subsolver, parameters, and the drive that they mean; None for the one that depends on cluster and driver."""


@pytest.mark.parametrize("noise", NOISES)
@pytest.mark.parametrize("driver", DRIVERS)
@pytest.mark.parametrize("schedule", ANNEALS)
def test_anneals(schedule: str, driver: str, noise: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    name, parameters, known = ANNEALS[schedule]
    monkeypatch.chdir(tmp_path)
    Path("mine.toml").write_text(TABLE)
    # where there are only shots to look at, a trajectory for each, they may cost less
    shots, tolerance = (800, 1e-5) if "dephasing" in NOISES[noise] else (1500, 1e-9)
    anneal = make_subsolver(
        name, driver=driver, hopping=RATE, tolerance=tolerance, shots=shots, **parameters, **NOISES[noise]
    )
    assert isinstance(anneal, Anneal)

    def reference(acting: ClusterBatch, row: int, dephasing: float) -> F64:
        drive, origin = known or gap_drive(driver, row), starting(row, name == "reverse")
        return evolved(levels(acting, row), driver, drive, dephasing * hop_rate(driver), origin)

    compare(anneal, reference, 10 * tolerance)


def test_nothing_is_left_out() -> None:
    """The lists above hold every noise that there is, by itself and together."""
    kinds = {"dephasing", "control_error", "precision_bits", "readout_flip"}
    assert kinds == set(NOISES["all"])
    assert {frozenset(noise) for noise in NOISES.values() if len(noise) == 1} == {frozenset({kind}) for kind in kinds}
    assert {name for name, _, _ in ANNEALS.values()} == {"forward", "reverse", "blend"}
    assert len(set(product(ANNEALS, DRIVERS, NOISES))) == 7 * 3 * 6
