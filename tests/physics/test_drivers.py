"""The moving part of H: its matrix, its spectrum, and the rate that every driver gets without knowing the answer."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.special import erfinv

from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.drivers import (
    DRIVERS,
    driver_matrix,
    driver_range,
    heuristic_hopping,
    hop_scale,
    level_spread,
    weight_sums,
)
from patchwalk.subsolvers.precision import half_spans
from patchwalk.subsolvers.propagate import new_workspace, scale_spectrum
from patchwalk.subsolvers.spectrum import cluster_energies


def glasses(rows: int, size: int, seed: int) -> tuple[F64, F64]:
    draw = np.random.default_rng(seed)
    upper = np.triu(draw.normal(size=(rows, size, size)), 1)
    return draw.normal(size=(rows, size)), upper + upper.transpose(0, 2, 1)


def rates_of(fields: F64, couplings: F64) -> F64:
    rates = np.empty(len(fields))
    heuristic_hopping(fields, couplings, level_spread(fields.shape[1]), rates)
    return rates


@pytest.mark.parametrize("driver", DRIVERS)
@pytest.mark.parametrize("spins", range(1, 8))
def test_the_range_holds_the_spectrum_and_touches_its_ends(driver: str, spins: int) -> None:
    levels = np.linalg.eigvalsh(driver_matrix(driver, spins))
    lowest, highest = driver_range(DRIVERS.index(driver), spins)
    assert levels[0] == pytest.approx(lowest, abs=1e-10 * highest)
    assert levels[-1] == pytest.approx(highest, rel=1e-12)
    assert hop_scale(DRIVERS.index(driver), spins) == pytest.approx(2 * spins / (highest - lowest), rel=1e-15)


@pytest.mark.parametrize("spins", [1, 3, 4])
def test_matrices_move_between_the_right_configurations(spins: int) -> None:
    for start in range(1 << spins):
        for end in range(1 << spins):
            flips = (start ^ end).bit_count()
            entries = [driver_matrix(driver, spins)[start, end] for driver in ("hypercube", "complete", "pairs")]
            assert entries == [flips == 1, 1, flips in (1, 2)]


@pytest.mark.parametrize("driver", DRIVERS)
@pytest.mark.parametrize("hopping", [0.0, 0.3, -0.3, 4.0])
def test_the_interval_of_the_series_holds_the_spectrum(driver: str, hopping: float) -> None:
    """Outside of it Chebyshev polynomials grow exponentially."""
    kind = DRIVERS.index(driver)
    for spins in (2, 5, 7):
        diagonal = 7.0 + np.random.default_rng(spins).normal(size=1 << spins)
        for single in (False, True):
            centre, half_width, _pull = scale_spectrum(diagonal, kind, hopping, new_workspace(kind, spins, 1, single))
            levels = np.linalg.eigvalsh(np.diag(diagonal) - hopping * driver_matrix(driver, spins))
            assert centre - half_width <= levels[0] + 1e-9
            assert levels[-1] - 1e-9 <= centre + half_width


def test_the_heuristic_rate_is_the_expected_span_over_twice_the_spins() -> None:
    fields, couplings = glasses(5, 9, seed=1)
    fields[2, 4] = 1000.0  # clipped
    for row, rate in enumerate(rates_of(fields, couplings)):
        pulls = [min(abs(fields[row, i]), np.abs(couplings[row, i]).sum()) for i in range(9)]
        variance = sum(couplings[row, i, j] ** 2 for i in range(9) for j in range(i)) + sum(pull**2 for pull in pulls)
        span = 2 * math.sqrt(2) * erfinv(1 - 2.0**-8) * math.sqrt(variance)
        assert rate == pytest.approx(span / 18, rel=1e-12)


def test_where_the_estimate_is_zero_the_largest_field_or_one_decides() -> None:
    assert rates_of(np.array([[-3.0]]), np.zeros((1, 1, 1))).tolist() == [3.0]
    assert rates_of(np.array([[0.5, -2.0]]), np.zeros((1, 2, 2))).tolist() == [2.0]
    assert rates_of(np.zeros((1, 3)), np.zeros((1, 3, 3))).tolist() == [1.0]


def test_all_drivers_are_scaled_to_spectra_of_one_width() -> None:
    for spins in (1, 2, 5, 6):
        widths = [np.ptp(np.linalg.eigvalsh(driver_matrix(driver, spins))) * hop_scale(kind, spins)
                  for kind, driver in enumerate(DRIVERS)]  # fmt: skip
        np.testing.assert_allclose(widths, 2 * spins, rtol=1e-12)


def test_no_energy_lies_beyond_the_sum_of_weights() -> None:
    fields, couplings = glasses(6, 7, seed=3)
    sums, halves, energies = np.empty(6), np.empty(6), np.empty(128)
    weight_sums(fields, couplings, sums)
    half_spans(np.arange(6), fields, couplings, halves)
    for row in range(6):
        cluster_energies(fields[row], couplings[row], energies)
        assert sums[row] == pytest.approx(np.abs(fields[row]).sum() + np.abs(couplings[row]).sum() / 2, rel=1e-13)
        assert np.abs(energies).max() <= sums[row]
        assert halves[row] == np.ptp(energies) / 2
