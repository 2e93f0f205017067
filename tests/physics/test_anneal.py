"""Forward, reverse and blended anneals have the laws of their schedules, and say how far they may be off."""

from __future__ import annotations

import itertools
import math
import re
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from scipy.interpolate import CubicHermiteSpline
from scipy.stats import chisquare

from patchwalk.subsolvers import ClusterBatch, Status, make_subsolver
from patchwalk.subsolvers.anneal import Blend, Forward, Reverse
from patchwalk.subsolvers.anneal_calls import Anneal
from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.drivers import DRIVERS, driver_matrix
from patchwalk.subsolvers.schedules import KNOTS, gap_knots
from patchwalk.subsolvers.spectrum import cluster_energies, configuration_number

EXAMPLE = Path(__file__).resolve().parents[2] / "configs" / "schedule-example.toml"
Drive = Callable[[float], tuple[float, float]]


def glass(rows: int, spins: int, seed: int = 3) -> ClusterBatch:
    draw = np.random.default_rng(seed)
    upper = np.triu(draw.normal(size=(rows, spins, spins)), 1)
    return ClusterBatch(
        fields=draw.normal(size=(rows, spins)),
        spins=draw.choice(np.array([-1, 1], np.int8), size=(rows, spins)),
        temperature=np.ones(rows),
        seeds=draw.integers(0, 2**63, rows, dtype=np.uint64),
        couplings=upper + upper.transpose(0, 2, 1),
    )


def energies_of(batch: ClusterBatch, row: int = 0) -> F64:
    assert batch.couplings is not None
    energies = np.empty(1 << batch.size)
    cluster_energies(batch.fields[row], batch.couplings[row], energies)
    return energies


def made(name: str, **parameters: Any) -> Anneal:
    subsolver = make_subsolver(name, **parameters)
    assert isinstance(subsolver, Anneal)
    return subsolver


def dense_law(
    energies: F64, driver: str, pieces: list[tuple[float, float, Drive]], start: int | None, step: float = 0.02
) -> F64:
    """The law at the end, by two dense exponentials a step (Blanes & Moan, Appl. Numer. Math. 56 (2006) 1519).

    Gauss points at 1/2 +- sqrt(3)/6 with weights 1/4 +- sqrt(3)/6; ``pieces`` are stretches of smooth drive.
    """
    matrix = driver_matrix(driver, len(energies).bit_length() - 1)
    state: npt.NDArray[np.complex128] = np.full(len(energies), len(energies) ** -0.5, complex)
    if start is not None:
        state = np.eye(len(energies), dtype=complex)[start]
    node, near, far = math.sqrt(3) / 6, 0.25 + math.sqrt(3) / 6, 0.25 - math.sqrt(3) / 6
    for begin, end, drive in pieces:
        count = max(1, math.ceil((end - begin) / step))
        length = (end - begin) / count
        for index in range(count):
            middle = begin + (index + 0.5) * length
            early, late = drive(middle - node * length), drive(middle + node * length)
            for first, second in ((near, far), (far, near)):
                a, b = (first * early[part] + second * late[part] for part in range(2))
                values, vectors = np.linalg.eigh(np.diag(b * energies) - a * matrix)
                state = vectors @ (np.exp(-1j * length * values) * (vectors.T @ state))
    return np.abs(state) ** 2


def variation(one: F64, other: F64) -> float:
    return 0.5 * float(np.abs(one - other).sum())


RATE, DURATION = 0.9, 1.6
"""A hopping rate in energy units, and a duration in units of 1/energy."""


def ramp(progress: Callable[[float], float]) -> list[tuple[float, float, Drive]]:
    return [(0.0, DURATION, lambda t: (RATE * (1 - progress(t)), progress(t)))]


def search_progress(time: float) -> float:
    """Roland & Cerf's curve for N = 64."""
    root = math.sqrt(63)
    return 0.5 + math.tan((2 * time / DURATION - 1) * math.atan(root)) / (2 * root)


def reverse_pieces(there: float, pause: float, back: float, turning: float) -> list[tuple[float, float, Drive]]:
    away, late = (1 - turning) / there, there + pause
    return [
        (0.0, there, lambda t: (RATE * away * t, 1 - away * t)),
        (there, late, lambda t: (RATE * (1 - turning), turning)),  # noqa: ARG005
        (
            late,
            late + back,
            lambda t: (RATE * (1 - turning) * (1 - (t - late) / back), turning + (1 - turning) * (t - late) / back),
        ),
    ]


SCHEDULES: list[tuple[str, dict[str, Any], list[tuple[float, float, Drive]]]] = [
    ("forward", {}, ramp(lambda t: t / DURATION)),
    ("forward", {"schedule": "search"}, ramp(search_progress)),
    ("reverse", {"turning_point": 0.3, "pause": 0.5}, reverse_pieces(0.8, 0.5, 0.8, 0.3)),
    ("reverse", {"turning_point": 0.4, "leg_ratio": 3.0}, reverse_pieces(1.2, 0.0, 0.4, 0.4)),
    ("blend", {"mix": 0.0}, [(0.0, DURATION, lambda t: (RATE, 1.0))]),  # noqa: ARG005
    ("blend", {"mix": 0.6}, [(0.0, DURATION, lambda t: (RATE * (1 - 0.6 * t / DURATION), 0.4 + 0.6 * t / DURATION))]),
    ("blend", {"mix": 1.0}, ramp(lambda t: t / DURATION)),
]


@pytest.mark.parametrize("driver", DRIVERS)
@pytest.mark.parametrize(("name", "parameters", "pieces"), SCHEDULES)
def test_every_schedule_and_driver_against_dense_exponentials(
    name: str, parameters: dict[str, Any], pieces: list[tuple[float, float, Drive]], driver: str
) -> None:
    batch = glass(2, 6)
    subsolver = made(name, hopping=RATE, duration=DURATION, driver=driver, **parameters)
    laws, estimates = subsolver.distribution(batch), subsolver.estimated_errors(batch)
    for row in range(2):
        start = configuration_number(batch.spins[row]) if name == "reverse" else None
        # the other drivers are larger, and their reference takes smaller steps
        expected = dense_law(energies_of(batch, row), driver, pieces, start, 0.02 if driver == "hypercube" else 0.005)
        assert variation(laws[row], expected) < 1e-6
        assert estimates[row] <= 1e-6


def test_the_gap_schedule_follows_the_gap() -> None:
    """Knots lie on ds/dt = (gap / mean)^2, and the law is that of the cubic through them."""
    batch = glass(1, 6)
    energies = energies_of(batch)
    knots = gap_knots(energies, RATE, driver_matrix("hypercube", 6))
    assert knots.shape == (KNOTS, 3)
    assert np.all(np.diff(knots[:, 0]) > 0)
    assert np.all(np.diff(knots[:, 1]) > 0)
    assert knots[0, :2].tolist() == [0.0, 0.0]
    assert knots[-1, :2].tolist() == [1.0, 1.0]
    gaps = []
    for progress in knots[:, 1]:
        matrix = np.diag(progress * energies) - (1 - progress) * RATE * driver_matrix("hypercube", 6)
        levels = np.linalg.eigvalsh(matrix)
        gaps.append(levels[1] - levels[0])
    speed = knots[:, 2] / np.square(gaps)
    np.testing.assert_allclose(speed, speed[0], rtol=1e-9)
    assert knots[:, 2].min() < 0.3 < 1.0 < knots[:, 2].max()

    curve = CubicHermiteSpline(knots[:, 0], knots[:, 1], knots[:, 2])
    drive = ramp(lambda t: float(curve(t / DURATION)))[0][2]
    pieces = [(begin, end, drive) for begin, end in itertools.pairwise(DURATION * knots[:, 0])]
    law = made("forward", schedule="gap", hopping=RATE, duration=DURATION).distribution(batch)[0]
    assert variation(law, dense_law(energies, "hypercube", pieces, None, 0.005)) < 1e-6


def test_following_the_gap_pays_where_there_is_time() -> None:
    """The chance to miss, in the middle of twenty clusters: some have no time enough, some need no care."""
    batch = glass(20, 6)
    hits = {
        schedule: made("forward", schedule=schedule, duration_in_hops=40).propose(batch).hit_probability
        for schedule in ("linear", "gap")
    }
    assert hits["linear"] is not None
    assert hits["gap"] is not None
    assert np.median(1 - hits["gap"]) < 0.4 * np.median(1 - hits["linear"])


def test_a_degenerate_ground_state_does_not_stop_the_gap_schedule() -> None:
    ring = np.zeros((1, 4, 4))
    for site in range(4):
        ring[0, site, (site + 1) % 4] = ring[0, (site + 1) % 4, site] = -1.0
    batch = ClusterBatch(np.zeros((1, 4)), np.ones((1, 4)), np.ones(1), np.ones(1), ring)
    hit = made("forward", schedule="gap", duration_in_hops=30).propose(batch).hit_probability
    assert hit is not None
    assert hit[0] > 0.999


@pytest.mark.parametrize("in_hops", [False, True])
def test_a_table_of_ones_own(tmp_path: Path, in_hops: bool) -> None:
    batch = glass(1, 6)
    unit = RATE if in_hops else 1.0
    lines = ["time = [0, 0.4, 1.5]", "A = [1.2, 0.7, 0]", "B = [0.1, 0.2, 1.1]", f"in_hops = {str(in_hops).lower()}"]
    path = tmp_path / "mine.toml"
    path.write_text("\n".join(lines))
    pieces: list[tuple[float, float, Drive]] = [
        (0.0, 0.4 / unit, lambda t: (unit * (1.2 - 1.25 * unit * t), 0.1 + 0.25 * unit * t)),
        (
            0.4 / unit,
            1.5 / unit,
            lambda t: (unit * 0.7 * (1.5 - unit * t) / 1.1, 0.2 + 0.9 * (unit * t - 0.4) / 1.1),
        ),
    ]
    law = made("forward", schedule=str(path), hopping=RATE).distribution(batch)[0]
    assert variation(law, dense_law(energies_of(batch), "hypercube", pieces, None)) < 1e-6


def test_the_example_table_runs() -> None:
    subsolver = made("forward", schedule=str(EXAMPLE))
    proposals = subsolver.propose(glass(3, 5))
    assert proposals.status.tolist() == [Status.OK] * 3
    text = EXAMPLE.read_text()
    times = re.search(r"^time = \[(.*)\]", text, re.MULTILINE)
    assert times is not None
    last = float(times[1].split(",")[-1])
    assert proposals.times is not None
    rates = made("forward", duration_in_hops=last).propose(glass(3, 5)).times
    np.testing.assert_allclose(proposals.times, rates)


@pytest.mark.parametrize(
    ("lines", "words"),
    [
        ("time = [0.1, 1]\nA = [1, 0]\nB = [0, 1]", "time starts at 0.1"),
        ("time = [0, 2, 1]\nA = [1, 0, 0]\nB = [0, 1, 1]", r"time\[2\] is 1.0 after 2.0"),
        ("time = [0, 0]\nA = [1, 0]\nB = [0, 1]", "times must rise"),
        ("time = [0]\nA = [1]\nB = [0]", "at least two"),
        ("time = [0, 1]\nA = [1, 0]", "B is None"),
        ("time = [0, 1]\nA = [1, 0, 0]\nB = [0, 1]", "A has 3 rows"),
        ("time = [0, inf]\nA = [1, 0]\nB = [0, 1]", r"time\[1\] is inf"),
        ("time = [0, 1]\nA = [1, nan]\nB = [0, 1]", r"A\[1\] is nan"),
        ('time = [0, 1]\nA = [1, "0"]\nB = [0, 1]', r"A\[1\] is '0'"),
        ("time = [0, 1]\nA = [1, 0]\nB = [0, 1]\nC = 1", "no key 'C'"),
        ("time = [0, 1]\nA = [1, 0]\nB = [0, 1]\nin_hops = 1", "true or false"),
        ("time = [0, 1", "not a TOML file"),
    ],
)
def test_a_wrong_table_is_named(tmp_path: Path, lines: str, words: str) -> None:
    path = tmp_path / "wrong.toml"
    path.write_text(lines)
    with pytest.raises(ValueError, match=f"wrong.toml.*{words}"):
        make_subsolver("forward", schedule=str(path))


@pytest.mark.parametrize(
    ("name", "parameters", "words"),
    [
        ("forward", {"duration": -1.0}, "duration is -1.0"),
        ("forward", {"duration": 0}, "a time above 0"),
        ("forward", {"duration": math.inf}, "duration is inf"),
        ("forward", {"duration": 1.0, "duration_in_hops": 1.0}, "one of them"),
        ("forward", {"schedule": "quadratic"}, "linear, gap, search"),
        ("forward", {"schedule": "none.toml"}, "none.toml"),
        ("forward", {"schedule": str(EXAMPLE), "duration": 1.0}, "its own times"),
        ("forward", {"tolerance": 1e-14}, "double precision"),
        ("forward", {"driver": "ladder"}, "driver is 'ladder'"),
        ("forward", {"hopping": -0.1}, "hopping is -0.1"),
        ("forward", {"most_steps": 0}, "most_steps is 0"),
        ("reverse", {"turning_point": 1.01}, "a number from 0 to 1"),
        ("reverse", {"pause": -0.5}, "pause is -0.5"),
        ("reverse", {"leg_ratio": 0}, "leg_ratio is 0"),
        ("blend", {"mix": -0.1}, "walk"),
    ],
)
def test_mistakes_are_named_before_any_work(name: str, parameters: dict[str, Any], words: str) -> None:
    with pytest.raises(ValueError, match=words):
        make_subsolver(name, **parameters)


def test_limits_of_size_are_named() -> None:
    def empty(spins: int) -> ClusterBatch:
        return ClusterBatch(
            np.zeros((1, spins)), np.ones((1, spins)), np.zeros(1), np.zeros(1), np.zeros((1, spins, spins))
        )

    for ask in (made("forward").propose, made("forward").forecast, made("forward").distribution):
        with pytest.raises(ValueError, match=r"23 spins.*stops at 22.*smaller clusters"):
            ask(empty(23))
    with pytest.raises(ValueError, match=r"9 spins.*diagonalisation.*stops at 8"):
        made("forward", schedule="gap").propose(empty(9))


def test_a_forecast_is_quick_and_says_the_memory() -> None:
    """At k = 22 nothing of size 2^22 is touched; a dozen or so vectors of doubles are announced."""
    forecast = made("reverse").forecast(glass(1, 22))
    vectors = forecast.bytes / (8 << 22)
    assert 8 < vectors < 16
    assert forecast.work.amplitude_updates is not None
    assert forecast.work.amplitude_updates[0] > 1 << 22


def test_balance() -> None:
    """Symmetric for a palindrome measured once; nothing is claimed for lopsided or monotone ramps."""
    assert Reverse().balance == "symmetric"
    assert Reverse(pause=1.0).balance == "symmetric"
    assert Reverse(leg_ratio=2.0).balance == "none"
    assert Reverse(shots=2).balance == "none"
    assert Forward().balance == "none"
    assert Blend().balance == "none"


def proposal_matrix(subsolver: Anneal, spins: int) -> F64:
    """The law from every incumbent of one cluster: a row each."""
    one = glass(1, spins)
    count = 1 << spins
    assert one.couplings is not None
    incumbents = 1 - 2 * (np.arange(count)[:, None] >> np.arange(spins) & 1)
    batch = ClusterBatch(
        np.repeat(one.fields, count, 0), incumbents, np.ones(count), np.zeros(count), np.repeat(one.couplings, count, 0)
    )
    return subsolver.distribution(batch)


@pytest.mark.parametrize("spins", [4, 7])
@pytest.mark.parametrize("driver", DRIVERS)
def test_symmetric_means_symmetric(spins: int, driver: str) -> None:
    for pause in (0.0, 0.7):
        matrix = proposal_matrix(made("reverse", turning_point=0.3, pause=pause, driver=driver), spins)
        assert np.abs(matrix - matrix.T).max() < 1e-12
        assert np.abs(matrix - np.diag(np.diag(matrix))).max() > 1e-3
    lopsided = proposal_matrix(made("reverse", turning_point=0.3, leg_ratio=4.0, driver=driver), spins)
    assert np.abs(lopsided - lopsided.T).max() > 1e-3


def test_the_accepted_chain_keeps_the_boltzmann_law() -> None:
    """pi P = pi with Metropolis acceptance on the symmetric proposals; a lopsided anneal fails the same test."""
    energies = energies_of(glass(1, 4))
    boltzmann = np.exp(energies.min() - energies)
    boltzmann /= boltzmann.sum()
    accept = np.minimum(1.0, np.exp(energies[:, None] - energies[None, :]))

    def drift(subsolver: Anneal) -> float:
        moves = proposal_matrix(subsolver, 4) * accept
        np.fill_diagonal(moves, 0.0)
        np.fill_diagonal(moves, 1.0 - moves.sum(axis=1))
        return float(np.abs(boltzmann @ moves - boltzmann).max())

    assert drift(made("reverse", turning_point=0.3)) < 1e-12
    assert drift(made("reverse", turning_point=0.3, leg_ratio=4.0)) > 1e-4


def test_what_cannot_be_met_is_said_and_the_estimate_holds() -> None:
    batch = glass(4, 6)
    rough = made("forward", schedule="search", duration=8.0, most_steps=40)
    proposals = rough.propose(batch)
    assert proposals.status.tolist() == [Status.TRUNCATED] * 4
    estimates = rough.estimated_errors(batch)
    exact = made("forward", schedule="search", duration=8.0, tolerance=1e-9).distribution(batch)
    for row, law in enumerate(rough.distribution(batch)):
        assert re.search(r"may be off by .* 1\.0e-06 was asked for; raise most_steps", proposals.messages[row])
        assert 1e-8 < variation(law, exact[row]) < estimates[row]
    fine = made("forward", schedule="search", duration=8.0).propose(batch)
    assert fine.status.tolist() == [Status.OK] * 4


@pytest.mark.parametrize("tolerance", [1e-3, 1e-6, 1e-9])
def test_the_tolerance_asked_for_is_kept(tolerance: float) -> None:
    batch = glass(4, 7)
    for name, parameters in (("forward", {"schedule": "search"}), ("forward", {}), ("reverse", {"turning_point": 0.2})):
        chosen = made(name, tolerance=tolerance, **parameters)
        exact = made(name, tolerance=1e-11, **parameters).distribution(batch)
        assert np.all(chosen.estimated_errors(batch) <= tolerance)
        for row, law in enumerate(chosen.distribution(batch)):
            assert variation(law, exact[row]) <= tolerance


def test_laws_on_the_way() -> None:
    batch = glass(2, 6)
    subsolver = made("forward", duration=DURATION, hopping=RATE)
    times = np.array([DURATION, 0.0, 0.7])
    laws = subsolver.laws(batch, times)
    np.testing.assert_array_equal(laws[:, 0], subsolver.distribution(batch))
    np.testing.assert_allclose(laws[:, 1], 1 / 64, rtol=1e-12)
    pieces: list[tuple[float, float, Drive]] = [(0.0, 0.7, lambda t: (RATE * (1 - t / DURATION), t / DURATION))]
    for row in range(2):
        assert variation(laws[row, 2], dense_law(energies_of(batch, row), "hypercube", pieces, None)) < 1e-6
    with pytest.raises(ValueError, match="the end of the anneal"):
        subsolver.laws(batch, np.array([2.0]))


def test_a_power_of_two_changes_no_bit_of_the_gap_schedule_either() -> None:
    batch, factor = glass(2, 5), 2.0**20
    assert batch.couplings is not None
    scaled = ClusterBatch(
        batch.fields * factor, batch.spins, batch.temperature * factor, batch.seeds, batch.couplings * factor
    )
    subsolver = made("forward", schedule="gap")
    np.testing.assert_array_equal(subsolver.distribution(batch), subsolver.distribution(scaled))


def test_turning_a_spin_over_turns_the_law_over() -> None:
    """A gauge transformation renames configurations and changes no probability."""
    batch, flipped = glass(1, 5), 2
    assert batch.couplings is not None
    signs = np.ones(5)
    signs[flipped] = -1.0
    turned = ClusterBatch(
        batch.fields * signs, batch.spins * signs, batch.temperature, batch.seeds,
        batch.couplings * np.outer(signs, signs),
    )  # fmt: skip
    for name in ("forward", "reverse", "blend"):
        law, other = made(name).distribution(batch)[0], made(name).distribution(turned)[0]
        np.testing.assert_allclose(other[np.arange(32) ^ (1 << flipped)], law, rtol=0, atol=1e-12)


def test_shots_are_drawn_from_the_law() -> None:
    """Chi-squared over the configurations; a false alarm once in ten thousand seeds."""
    batch = glass(1, 4)
    subsolver = made("forward", shots=20_000)
    numbers = [configuration_number(spins) for spins in subsolver.propose(batch).outcomes[0]]
    expected = subsolver.distribution(batch)[0] * 20_000
    rare = expected < 10
    counts = np.bincount(numbers, minlength=16).astype(float)
    kept = np.append(expected[~rare], expected[rare].sum())
    seen = np.append(counts[~rare], counts[rare].sum())
    assert chisquare(seen, kept * seen.sum() / kept.sum()).pvalue > 1e-4
