"""Quantum evolution under the transverse field is exact, whatever the diagonal, the start and the measuring times."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt
import pytest
from scipy.linalg import expm
from scipy.sparse import csr_array, diags_array
from scipy.sparse.linalg import expm_multiply

from patchwalk.subsolvers.coefficients import DOUBLE_DECAY, SINGLE_DECAY
from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.drivers import DRIVERS, HYPERCUBE
from patchwalk.subsolvers.hamiltonian import (
    BYTE_STEP,
    advance_far,
    aligned,
    half_width_within,
    is_far,
    padded,
    times_together,
)
from patchwalk.subsolvers.propagate import evolve, expected_applications, new_workspace, scale_spectrum, walk_law

UNORDERED_TIMES = np.array([2.9, 0.0, 7.3, 1e-12, 0.4])


def single_flips(size: int) -> csr_array:
    """The matrix sum_i X_i on ``size`` configurations."""
    numbers = np.arange(size)
    flips = [numbers ^ (1 << bit) for bit in range(size.bit_length() - 1)]
    rows = np.tile(numbers, len(flips))
    return csr_array((np.ones(len(rows)), (rows, np.concatenate(flips))), shape=(size, size))


def starting_vector(size: int, start: int | None) -> F64:
    if start is None:
        return np.full(size, size**-0.5)
    vector = np.zeros(size)
    vector[start] = 1.0
    return vector


def law_of(diagonal: F64, hopping: float, times: F64, start: int = -1) -> F64:
    law = np.empty((len(times), len(diagonal)))
    walk_law(diagonal, hopping, start, times, law)
    return law


def distances(size: int, target: int) -> npt.NDArray[np.int64]:
    """Hamming distance of every configuration from ``target``."""
    differing = np.arange(size) ^ target
    distance = np.zeros(size, np.int64)
    for bit in range(size.bit_length() - 1):
        distance += differing >> bit & 1
    return distance


@pytest.mark.parametrize("spins", range(1, 9))
def test_amplitudes_are_those_of_the_matrix_exponential(spins: int) -> None:
    size = 1 << spins
    draw = np.random.default_rng(spins)
    for width, centre, hopping in ((1.0, 0.0, 0.7), (4.0, 5.0, 0.3), (0.2, -2.0, 1.5)):
        diagonal = centre + width * draw.normal(size=size)
        matrix = np.diag(diagonal) - hopping * single_flips(size).toarray()
        exponentials = [expm(-1j * time * matrix) for time in UNORDERED_TIMES]
        for start in (None, int(draw.integers(size))):
            expected = [exponential @ starting_vector(size, start) for exponential in exponentials]
            amplitudes = evolve(diagonal, hopping, UNORDERED_TIMES, start)
            np.testing.assert_allclose(amplitudes, expected, rtol=0, atol=1e-9)
            law = law_of(diagonal, hopping, UNORDERED_TIMES, -1 if start is None else start)
            variation = 0.5 * np.abs(law - np.abs(expected) ** 2).sum(axis=1)
            assert variation.max() < 1e-10


def driver_by_definition(driver: str, spins: int) -> F64:
    """Single flips from the operators above, pairs as their products, and the all-ones matrix."""
    flips = [single_flip(spins, bit) for bit in range(spins)]
    if driver == "complete":
        return np.ones((1 << spins, 1 << spins))
    matrix = sum(flips)
    if driver == "pairs":
        matrix = matrix + sum(flips[i] @ flips[j] for i in range(spins) for j in range(i))
    return np.asarray(matrix, np.float64)


def single_flip(spins: int, bit: int) -> F64:
    """X on one spin: bit 0 is the least significant, so the last factor."""
    factors = [np.array([[0.0, 1.0], [1.0, 0.0]]) if place == bit else np.eye(2) for place in range(spins)]
    product = np.ones((1, 1))
    for factor in factors:
        product = np.kron(factor, product)
    return product


@pytest.mark.parametrize("driver", DRIVERS)
@pytest.mark.parametrize("spins", range(1, 9))
def test_every_driver_evolves_by_its_own_matrix(driver: str, spins: int) -> None:
    size = 1 << spins
    draw = np.random.default_rng(spins)
    diagonal = 1.0 + 2.0 * draw.normal(size=size)
    matrix = driver_by_definition(driver, spins)
    for hopping in (1.5 * spins / np.ptp(np.linalg.eigvalsh(matrix)), -0.1):
        exponentials = [expm(-1j * time * (np.diag(diagonal) - hopping * matrix)) for time in UNORDERED_TIMES]
        for start in (None, int(draw.integers(size))):
            expected = np.array([exponential @ starting_vector(size, start) for exponential in exponentials])
            amplitudes = evolve(diagonal, hopping, UNORDERED_TIMES, start, driver)
            np.testing.assert_allclose(amplitudes, expected, rtol=0, atol=1e-10)
            for single, bound in ((False, 1e-10), (True, 1e-6)):
                law = np.empty((len(UNORDERED_TIMES), size))
                kind = DRIVERS.index(driver)
                workspace = new_workspace(kind, spins, len(UNORDERED_TIMES), single)
                decay = SINGLE_DECAY if single else DOUBLE_DECAY
                walk_law(
                    diagonal, hopping, -1 if start is None else start, UNORDERED_TIMES, law, kind, workspace, decay
                )
                variation = 0.5 * np.abs(law - np.abs(expected) ** 2).sum(axis=1)
                assert variation.max() < bound, single


def test_twelve_spins_against_sparse_exponential() -> None:
    spins, hopping, time = 12, 0.4, 9.0
    size = 1 << spins
    diagonal = np.random.default_rng(3).normal(size=size) * 3.0
    generator = -1j * (diags_array(diagonal) - hopping * single_flips(size))
    for start in (None, 77):
        vector = starting_vector(size, start).astype(complex)
        expected = expm_multiply(time * generator, vector, traceA=-1j * time * diagonal.sum())
        np.testing.assert_allclose(evolve(diagonal, hopping, time, start)[0], expected, rtol=0, atol=1e-11)


@pytest.mark.parametrize(("spins", "single", "bound"), [(17, False, 1e-11), (18, False, 1e-11), (18, True, 1e-6)])
@pytest.mark.parametrize("start", [-1, 77_777])
def test_vectors_too_long_for_near_caches(spins: int, single: bool, bound: float, start: int) -> None:
    """Independent spins, each of which turns about its own axis in closed form; half width times time is 220."""
    size = 1 << spins
    assert is_far(HYPERCUBE, size, 4 if single else 8)
    fields, hopping, time = np.random.default_rng(spins).normal(size=spins), 1.1, 6.0
    diagonal, exact = np.zeros(1), np.ones(1)
    for spin, field in enumerate(fields):
        rate = math.hypot(field, hopping)
        matrix = math.cos(rate * time) * np.eye(2) - 1j * math.sin(rate * time) / rate * np.array(
            [[field, -hopping], [-hopping, -field]]
        )
        one = np.full(2, 0.5**0.5) if start < 0 else np.eye(2)[start >> spin & 1]
        exact = np.kron(np.abs(matrix @ one) ** 2, exact)
        diagonal = np.add.outer([field, -field], diagonal).ravel()
    law = np.empty((1, size))
    decay = SINGLE_DECAY if single else DOUBLE_DECAY
    walk_law(
        diagonal, hopping, start, np.array([time]), law, HYPERCUBE, new_workspace(HYPERCUBE, spins, 1, single), decay
    )
    if single:
        law /= law.sum()
    assert 0.5 * np.abs(law[0] - exact).sum() < bound


def test_bytes_hold_what_single_precision_rounds_away() -> None:
    """Where nothing moves and the rounded diagonal is taken off again, one application leaves the rest of it."""
    size, column = 1 << 18, np.zeros(0, np.int64)
    diagonal = np.random.default_rng(2).normal(size=size)
    workspace = aligned(new_workspace(HYPERCUBE, 18, 1, single=True))
    stride = padded(size, 4)
    scaled, now, earlier = workspace[: 2 * stride], workspace[2 * stride :][:size], workspace[3 * stride :][:size]
    centre, half_width, _ = scale_spectrum(diagonal, HYPERCUBE, 0.05, scaled)
    now[:], earlier[:] = 1.0, scaled[:size]
    advance_far(scaled, np.float32(0.0), now, earlier, workspace[4 * stride :], 0, np.zeros((3, 0)), column, 0, 1)
    rest = 2.0 * (diagonal - centre) / half_width - scaled[:size]
    assert np.abs(rest).max() > 2.0**-25
    assert np.abs(earlier - rest).mean() < 0.26 * BYTE_STEP
    assert np.abs(earlier - rest).max() < 1.01 * BYTE_STEP  # a rest of 128 steps is held as 127


@pytest.mark.parametrize("spins", [1, 2, 4, 5, 6, 7, 10, 13])
def test_free_walk_has_its_closed_form(spins: int) -> None:
    """Amplitude cos(t)^(n-d) (i sin t)^d at Hamming distance d: Moore & Russell, RANDOM 2002."""
    size, start = 1 << spins, (1 << spins) // 3
    times = np.array([0.3, math.pi / 4, math.pi / 2, 11.0, 40.0])
    apart = distances(size, start)
    amplitudes = evolve(np.zeros(size), 1.0, times, start)
    for row, time in enumerate(times):
        expected = math.cos(time) ** (spins - apart) * (1j * math.sin(time)) ** apart
        np.testing.assert_allclose(amplitudes[row], expected, rtol=0, atol=1e-12)
    np.testing.assert_allclose(np.abs(amplitudes[1]) ** 2, 1 / size, rtol=0, atol=1e-12)
    assert abs(amplitudes[2, size - 1 - start]) ** 2 == pytest.approx(1.0, abs=1e-12)


def test_times_that_do_not_fit_in_one_recursion() -> None:
    """The closed form once more, where the sums of all times together would take too much memory."""
    spins = 20
    times = np.linspace(1.0, 0.2, 3)
    assert times_together(spins, len(times), 8) < len(times)
    law = law_of(np.zeros(1 << spins), 1.0, times, start=1)
    apart, far = distances(1 << spins, 1), np.arange(spins + 1)
    for row, time in enumerate(times):
        by_distance = math.cos(time) ** (2 * (spins - far)) * math.sin(time) ** (2 * far)
        assert 0.5 * np.abs(law[row] - by_distance[apart]).sum() < 1e-12


def search_law(spins: int, hopping: float, times: F64) -> F64:
    """Probability of the marked configuration under H = hopping (n - sum X) - P_marked, from the uniform start."""
    marked = 5
    diagonal = np.full(1 << spins, hopping * spins)
    diagonal[marked] -= 1.0
    return law_of(diagonal, hopping, times)[:, marked]


def search_hopping(spins: int) -> float:
    """The critical rate of the published search, for H with sum X and not (1 - X)/2."""
    return sum(math.comb(spins, r) / (2 * r) for r in range(1, spins + 1)) / 2.0**spins


@pytest.mark.parametrize(
    ("spins", "hopping", "success", "peak"),
    [(8, 0.1470726, 0.7546, 27.5), (10, 0.1144429, 0.8122, 55.0), (12, 0.0929834, 0.8414, 108.1)],
)
def test_search_on_the_hypercube(spins: int, hopping: float, success: float, peak: float) -> None:
    """Childs & Goldstone, Phys. Rev. A 70 (2004) 022314."""
    assert search_hopping(spins) == pytest.approx(hopping, abs=1e-7)
    times = np.arange(0.7 * peak, 1.3 * peak, 0.05)
    found = search_law(spins, search_hopping(spins), times)
    assert found.max() == pytest.approx(success, abs=1e-4)
    assert times[found.argmax()] == pytest.approx(peak, abs=0.1)


def test_search_fails_under_the_other_convention_of_the_hopping_rate() -> None:
    """The same source: without the 1/2, gamma belongs to the driver (1 - X)/2."""
    found = search_law(12, 2 * search_hopping(12), np.linspace(0.0, 220.0, 600))
    assert found.max() < 0.003


@pytest.mark.parametrize("spins", [3, 7, 11])
def test_probability_is_kept(spins: int) -> None:
    diagonal = np.random.default_rng(spins).normal(size=1 << spins) * 2.0
    for start in (-1, 2):
        law = law_of(diagonal, 0.5, np.array([0.0, 1.0, 30.0, 150.0]), start)
        assert law.min() >= 0.0
        np.testing.assert_allclose(law.sum(axis=1), 1.0, rtol=0, atol=1e-12)


@pytest.mark.parametrize("spins", [2, 6, 9])
@pytest.mark.parametrize("factor", [2.0**20, 2.0**-20])
def test_a_power_of_two_changes_no_bit(spins: int, factor: float) -> None:
    draw = np.random.default_rng(spins)
    diagonal, hopping = draw.normal(size=1 << spins), draw.uniform()
    for start in (-1, 3):
        plain = law_of(diagonal, hopping, UNORDERED_TIMES, start)
        scaled = law_of(factor * diagonal, factor * hopping, UNORDERED_TIMES / factor, start)
        np.testing.assert_array_equal(plain, scaled)


@pytest.mark.parametrize("spins", [4, 10])
def test_times_share_a_recursion_without_touching_each_other(spins: int) -> None:
    diagonal = np.random.default_rng(spins).normal(size=1 << spins)
    together = law_of(diagonal, 0.6, UNORDERED_TIMES)
    for row in range(len(UNORDERED_TIMES)):
        alone = law_of(diagonal, 0.6, UNORDERED_TIMES[row : row + 1])
        np.testing.assert_array_equal(together[row], alone[0])


def test_going_back_in_time_returns_to_the_start() -> None:
    diagonal = np.random.default_rng(1).normal(size=256)
    forward, backward = evolve(diagonal, 0.5, [4.0, -4.0], start=9)
    np.testing.assert_allclose(backward, forward.conj(), rtol=0, atol=1e-13)
    assert np.abs(forward.imag).max() > 0.01


@pytest.mark.parametrize("spins", [3, 8])
def test_nothing_moves_without_hopping(spins: int) -> None:
    diagonal = np.random.default_rng(1).normal(size=1 << spins)
    for levels in (diagonal, np.full(1 << spins, 0.7)):
        amplitudes = evolve(levels, 0.0, [0.0, 5.0])
        expected = np.exp(-1j * np.outer([0.0, 5.0], levels)) / math.sqrt(1 << spins)
        np.testing.assert_allclose(amplitudes, expected, rtol=0, atol=1e-13)


def test_work_is_forecast_from_the_span_alone() -> None:
    draw = np.random.default_rng(4)
    for spins in (2, 6, 9):
        diagonal = np.ascontiguousarray(draw.normal(size=1 << spins))
        law = np.empty((3, 1 << spins))
        counted = walk_law(diagonal, 0.3, -1, np.array([2.0, 25.0, 0.0]), law)
        half_width = half_width_within(HYPERCUBE, spins, 0.3, float(np.ptp(diagonal)))
        assert counted == expected_applications(25.0 * half_width, DOUBLE_DECAY)


def test_read_only_diagonals_are_accepted() -> None:
    diagonal = np.random.default_rng(2).normal(size=64)
    expected = evolve(diagonal, 0.5, UNORDERED_TIMES)
    diagonal.flags.writeable = False
    np.testing.assert_array_equal(evolve(diagonal, 0.5, UNORDERED_TIMES), expected)


def test_an_unknown_driver_is_named() -> None:
    with pytest.raises(ValueError, match="driver is 'ladder'; it is one of hypercube, complete, pairs"):
        evolve([0.0, 1.0], 1.0, 1.0, driver="ladder")


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        (([0.0, 1.0, 2.0], 1.0, 1.0, None), "one entry for each of 2, 4, 8"),
        (([0.0, math.nan], 1.0, 1.0, None), "diagonal holds nan"),
        (([0.0, 1.0], math.inf, 1.0, None), "hopping holds nan"),
        (([0.0, 1.0], 1.0, [0.0, math.inf], None), "times holds nan"),
        (([0.0, 1.0], 1.0, [], None), "times has shape"),
        (([0.0, 1.0], 1.0, 1.0, 2), "from 0 to 1"),
        (([0.0, 1.0], 1.0, 1.0, -1), "from 0 to 1"),
    ],
)
def test_unusable_input_is_named(
    arguments: tuple[npt.ArrayLike, float, npt.ArrayLike, int | None], sentence: str
) -> None:
    with pytest.raises(ValueError, match=sentence):
        evolve(*arguments)
