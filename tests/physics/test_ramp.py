"""Evolution under a changing Hamiltonian is what an independent integrator, a closed form or a textbook says it is."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import numpy.typing as npt
import pytest
from scipy.sparse.linalg import LinearOperator, eigsh

from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.drivers import COMPLETE, DRIVERS, HYPERCUBE, driver_matrix
from patchwalk.subsolvers.ramp import UNIFORM, _sweep, centre_of, follow_steps, make_rooms, norm_shape
from patchwalk.subsolvers.schedules import search_angle, search_duration
from patchwalk.subsolvers.steps import norm_bound, plan_steps

Drive = Callable[[float], tuple[float, float]]
STRAIGHT = 0.0
NO_KNOTS = np.zeros((2, 3))


def amplitudes_at(
    diagonal: F64, legs: list[list[float]], times: list[float] | None = None, start: int = UNIFORM,
    mover: int = HYPERCUBE, tolerance: float = 1e-6, most_steps: int = 100_000, neglected: float | None = None,
) -> tuple[npt.NDArray[np.complex128], F64, F64]:  # fmt: skip
    """Amplitudes (M, N) at the times (by default the end), the steps, and the report of their planning."""
    table, report, centred = np.array(legs, float), np.empty(3), np.empty(len(diagonal))
    left_out = 0.25 * tolerance if neglected is None else neglected
    _, half_width = centre_of(diagonal, centred)
    rooms, shape = make_rooms(len(diagonal)), np.empty(5)
    norm_shape(centred, half_width, mover, rooms, shape)
    steps = plan_steps(
        centred, half_width, shape, len(diagonal), mover, table, NO_KNOTS, tolerance, left_out, most_steps, report
    )
    moments = np.array([table[-1, 1]] if times is None else times)
    real, imaginary = np.empty((2, len(moments), len(diagonal)))
    follow_steps(
        centred, half_width, shape, mover, table, NO_KNOTS, steps, left_out, start, moments, rooms, real, imaginary,
    )  # fmt: skip
    return real + 1j * imaginary, steps, report


def law_at(*arguments: object, **more: object) -> F64:
    return np.abs(amplitudes_at(*arguments, **more)[0]) ** 2  # type: ignore[arg-type]


def by_splitting(
    diagonal: F64, pieces: list[tuple[float, float, Drive]], start: npt.NDArray[np.complex128], driver: str, step: float
) -> npt.NDArray[np.complex128]:
    """The same evolution by six-stage fourth-order splitting.

    Blanes & Moan, J. Comput. Appl. Math. 142 (2002) 313, from memory; the coefficients pass the order test below.

    The two parts of H act in turn, each with the clock of the other. ``pieces`` are stretches of smooth drive.
    """
    values, vectors = np.linalg.eigh(driver_matrix(driver, len(diagonal).bit_length() - 1))
    levels, state = diagonal - 0.5 * (diagonal.max() + diagonal.min()), start
    still = [0.0792036964311957, 0.353172906049774, -0.0420650803577195]
    still = [*still, 1 - 2 * sum(still), *still[::-1]]
    moving = [0.209515106613362, -0.143851773179818]
    moving = [*moving, 0.5 - sum(moving), 0.5 - sum(moving), *moving[::-1], 0.0]
    for begin, end, drive in pieces:
        count = math.ceil((end - begin) / step)
        length = (end - begin) / count
        for index in range(count):
            clock_of_a = clock_of_b = begin + index * length
            for share_still, share_moving in zip(still, moving, strict=True):
                state = np.exp(-1j * share_still * length * drive(clock_of_b)[1] * levels) * state
                clock_of_a += share_still * length
                phases = np.exp(1j * share_moving * length * drive(clock_of_a)[0] * values)
                state = vectors @ (phases * (vectors.T @ state))
                clock_of_b += share_moving * length
    return state


def leg_drive(leg: list[float]) -> Drive:
    """A and B along a leg, written anew."""
    begin, end, a, a_end, b, b_end, angle = leg

    def drive(time: float) -> tuple[float, float]:
        share = (time - begin) / (end - begin)
        if angle:
            share = 0.5 + math.tan(angle * (2 * share - 1)) / (2 * math.tan(angle))
        return a + share * (a_end - a), b + share * (b_end - b)

    return drive


def pieces_of(legs: list[list[float]]) -> list[tuple[float, float, Drive]]:
    return [(leg[0], leg[1], leg_drive(leg)) for leg in legs]


def variation(law: F64, amplitudes: npt.NDArray[np.complex128]) -> float:
    """Total variation distance of a law to that of the amplitudes."""
    return 0.5 * float(np.abs(law - np.abs(amplitudes) ** 2).sum())


def uniform_state(size: int) -> npt.NDArray[np.complex128]:
    return np.full(size, size**-0.5, complex)


def random_diagonal(spins: int, width: float = 3.0) -> F64:
    return np.random.default_rng(spins).normal(size=1 << spins) * width


@pytest.mark.parametrize("spins", [1, 3, 5, 6, 7])
def test_straight_legs_against_dense_exponentials(spins: int) -> None:
    """A ramp, a pause, a jump and a way back, on any diagonal; amplitudes up to a phase."""
    diagonal = random_diagonal(spins)
    legs = [
        [0.0, 2.0, 0.9, 0.2, 0.1, 1.0, STRAIGHT],
        [2.0, 3.0, 0.2, 0.2, 1.0, 1.0, STRAIGHT],
        [3.0, 4.5, 1.1, 0.3, 0.4, -0.7, STRAIGHT],
    ]

    expected = by_splitting(diagonal, pieces_of(legs), uniform_state(1 << spins), "hypercube", 0.005)
    amplitudes, _, report = amplitudes_at(diagonal, legs, tolerance=1e-8)
    assert abs(abs(np.vdot(expected, amplitudes[0])) - 1.0) < 1e-9
    assert variation(np.abs(amplitudes[0]) ** 2, expected) < 1e-8
    assert report[0] < 1e-8


@pytest.mark.parametrize("driver", DRIVERS)
@pytest.mark.parametrize("start", [UNIFORM, 11])
def test_every_driver_on_straight_and_curved_legs(driver: str, start: int) -> None:
    spins, duration = 6, 3.0
    diagonal = random_diagonal(spins, 2.0)
    strength = {"hypercube": 1.0, "complete": 0.1, "pairs": 0.3}[driver]
    state = uniform_state(64) if start == UNIFORM else np.eye(64, dtype=complex)[start]
    for angle in (STRAIGHT, 1.3):
        legs = [[0.0, duration, strength, 0.0, 0.0, 1.0, angle]]
        expected = by_splitting(diagonal, pieces_of(legs), state, driver, 0.005)
        law = law_at(diagonal, legs, start=start, mover=DRIVERS.index(driver))[0]
        assert variation(law, expected) < 1e-6


@pytest.mark.parametrize("spins", [4, 6, 8])
def test_against_a_general_purpose_integrator(spins: int) -> None:
    """QuTiP's ``sesolve`` (Lambert et al., arXiv:2412.04705, from memory) on a ramp from the uniform superposition."""
    qutip = pytest.importorskip("qutip")
    diagonal, duration = random_diagonal(spins, 2.0), 4.0
    size = 1 << spins
    hamiltonian = qutip.QobjEvo(
        [
            [qutip.Qobj(driver_matrix("hypercube", spins).astype(complex)), lambda t: -1.2 * (1 - t / duration)],
            [qutip.Qobj(np.diag(diagonal).astype(complex)), lambda t: t / duration],
        ]
    )
    options = {
        "method": "dop853", "atol": 1e-11, "rtol": 1e-11, "nsteps": 10**6, "progress_bar": "", "store_states": True,
        "normalize_output": False,
    }  # fmt: skip
    start = qutip.Qobj(uniform_state(size).reshape(size, 1))
    expected = qutip.sesolve(hamiltonian, start, [0.0, duration], options=options).states[-1].full()[:, 0]
    law = law_at(diagonal, [[0.0, duration, 1.2, 0.0, 0.0, 1.0, STRAIGHT]])[0]
    assert variation(law, expected) < 1e-7


@pytest.mark.parametrize("drives", [(1.0, 0.0, 0.0, 1.0), (0.4, 0.9, 1.0, 0.3)])
def test_the_scheme_is_of_fourth_order(drives: tuple[float, float, float, float]) -> None:
    """Halving the steps on a curved leg: slope of the logarithm of the error."""
    diagonal, duration, angle = random_diagonal(5, 0.5), 4.0, 1.2
    legs = [[0.0, duration, *drives, angle]]

    def amplitudes(steps: int) -> npt.NDArray[np.complex128]:
        made, planned, _ = amplitudes_at(diagonal, legs, tolerance=1e-30, neglected=1e-15, most_steps=steps)
        assert len(planned) == steps
        return made[0]

    finest = amplitudes(2048)
    errors = [float(np.linalg.norm(amplitudes(steps) - finest)) for steps in (32, 64, 128, 256)]
    slopes = np.diff(np.log2(errors))
    assert slopes[-1] == pytest.approx(-4.0, abs=0.15)
    assert np.polyfit(range(4), np.log2(errors), 1)[0] == pytest.approx(-4.0, abs=0.4)


def test_the_reference_is_of_fourth_order_too() -> None:
    diagonal, pieces = random_diagonal(5), pieces_of([[0.0, 3.0, 1.0, 0.0, 0.0, 1.0, 1.2]])

    def state(step: float) -> npt.NDArray[np.complex128]:
        return by_splitting(diagonal, pieces, uniform_state(32), "hypercube", step)

    errors = [float(np.linalg.norm(state(step) - state(0.0025))) for step in (0.08, 0.04, 0.02)]
    np.testing.assert_allclose(np.diff(np.log2(errors)), -4.0, atol=0.2)


def test_the_estimate_of_the_bend_is_neither_too_small_nor_absurd() -> None:
    diagonal, legs = random_diagonal(6), [[0.0, 6.0, 1.0, 0.0, 0.0, 1.0, 1.4]]
    exact = amplitudes_at(diagonal, legs, tolerance=1e-10)[0][0]
    for tolerance in (1e-3, 1e-5, 1e-7):
        amplitudes, _, report = amplitudes_at(diagonal, legs, tolerance=tolerance)
        error = variation(np.abs(amplitudes[0]) ** 2, exact)
        assert error < report[0] <= tolerance
        assert error > 1e-5 * report[0]


@pytest.mark.parametrize("size", [64, 256])
def test_locally_adiabatic_search_has_its_published_time_and_success(size: int) -> None:
    """Roland & Cerf, Phys. Rev. A 65 (2002) 042308; T and P computed independently for slowness 0.1."""
    duration, success = {64: (116.5516, 0.999418), 256: (241.7936, 0.999868)}[size]
    assert search_duration(size, 0.1) == pytest.approx(duration, abs=1e-4)
    marked = np.zeros(size)
    marked[3] = -1.0
    legs = [[0.0, search_duration(size, 0.1), 1.0 / size, 0.0, 0.0, 1.0, search_angle(size)]]
    assert law_at(marked, legs, mover=COMPLETE)[0, 3] == pytest.approx(success, abs=2e-6)


def test_a_linear_ramp_searches_without_speed_up() -> None:
    """The same source: time proportional to N keeps the success, time proportional to sqrt(N) loses it."""

    def success(size: int, duration: float) -> float:
        marked = np.zeros(size)
        marked[3] = -1.0
        return float(law_at(marked, [[0.0, duration, 1.0 / size, 0.0, 0.0, 1.0, STRAIGHT]], mover=COMPLETE)[0, 3])

    by_size = [success(size, 0.5 * size) for size in (64, 256, 1024)]
    by_root = [success(size, 4.0 * math.sqrt(size)) for size in (64, 256, 1024)]
    assert max(by_size) < 1.15 * min(by_size)
    assert by_root[0] > 1.7 * by_root[1] > 2.9 * by_root[2]


@pytest.mark.parametrize(("gap", "speed"), [(0.2, 1.0), (0.5, 2.0)])
def test_landau_zener(gap: float, speed: float) -> None:
    """P(stay) = exp(-2 pi gap^2 / speed) for levels that cross at this speed (Landau; Zener 1932); a window of +-200
    still ripples by a per cent."""
    legs = [[0.0, 400.0, gap, gap, -200.0 * speed, 200.0 * speed, STRAIGHT]]
    stays = law_at(np.array([0.5, -0.5]), legs, start=0)[0, 0]
    assert stays == pytest.approx(math.exp(-2 * math.pi * gap**2 / speed), abs=0.01)


def chain(spins: int, ring: bool) -> F64:
    """Energies of a ferromagnetic chain with unit couplings."""
    numbers = np.arange(1 << spins)
    signs = 1.0 - 2.0 * (numbers[:, None] >> np.arange(spins) & 1)
    bonds = signs * np.roll(signs, -1, axis=1)
    return -(bonds if ring else bonds[:, :-1]).sum(axis=1)


CHAINS = [(True, -10.2516617910), (False, -9.8379514475)]
"""Ground-state energies of the critical chain of 8 in a transverse field: Pfeuty, Ann. Phys. 57 (1970) 79."""


@pytest.mark.parametrize(("ring", "energy"), CHAINS)
def test_the_kernel_has_the_spectrum_of_the_critical_chain(ring: bool, energy: float) -> None:
    diagonal, nothing = chain(8, ring), np.zeros(256)

    def apply(vector: F64) -> F64:
        result = np.zeros(256)
        flat = np.ascontiguousarray(vector).ravel()
        _sweep(diagonal, flat, result, np.zeros(256), nothing, 1.0, -1.0, 0.0, 0.0, False)
        return result

    operator = LinearOperator((256, 256), matvec=apply, dtype=np.float64)
    lowest = eigsh(operator, k=1, which="SA", v0=np.ones(256), return_eigenvectors=False)[0]
    assert lowest == pytest.approx(energy, abs=1e-9)


@pytest.mark.parametrize(("ring", "energy"), CHAINS)
def test_a_slow_ramp_ends_in_the_ground_state_of_the_critical_chain(ring: bool, energy: float) -> None:
    diagonal = chain(8, ring)
    excess = []
    for duration in (20.0, 80.0):
        state = amplitudes_at(diagonal, [[0.0, duration, 1.0, 1.0, 0.0, 1.0, STRAIGHT]])[0][0]
        matrix = np.diag(diagonal) - driver_matrix("hypercube", 8)
        excess.append(float(np.vdot(state, matrix @ state).real) - energy)
    assert 0.0 < excess[1] < 2e-3
    assert excess[1] < excess[0] / 4


@pytest.mark.parametrize("spins", [3, 6, 8])
def test_the_bound_of_the_norm_is_a_bound_and_a_tight_one(spins: int) -> None:
    diagonal, shape = np.empty(1 << spins), np.empty(5)
    _, half_width = centre_of(random_diagonal(spins), diagonal)
    norm_shape(diagonal, half_width, HYPERCUBE, make_rooms(1 << spins), shape)
    matrix = driver_matrix("hypercube", spins)
    for share in np.linspace(0.0, 1.0, 21):
        a, b = share / spins, (1 - share) / half_width
        for sign in (1.0, -1.0):
            norm = np.abs(np.linalg.eigvalsh(sign * b * np.diag(diagonal) - a * matrix)).max()
            bound = norm_bound(a, sign * b, float(spins), half_width, shape)
            assert norm <= bound * (1 + 1e-12)
            assert bound <= 1.15 * norm
    assert shape[2] < 0.85


def proposal_matrix(diagonal: F64, legs: list[list[float]]) -> F64:
    return np.concatenate([law_at(diagonal, legs, start=start) for start in range(len(diagonal))])


@pytest.mark.parametrize("spins", [4, 6])
def test_palindromes_have_a_symmetric_matrix_and_others_visibly_not(spins: int) -> None:
    """Layden et al., Nature 619 (2023) 282, for constant H; a palindrome is its own transpose as well."""
    diagonal = random_diagonal(spins)
    there, pause, back = (
        [0.0, 1.0, 0.0, 0.8, 1.0, 0.3, STRAIGHT],
        [1.0, 1.5, 0.8, 0.8, 0.3, 0.3, STRAIGHT],
        [1.5, 2.5, 0.8, 0.0, 0.3, 1.0, STRAIGHT],
    )
    matrix = proposal_matrix(diagonal, [there, pause, back])
    assert np.abs(matrix - matrix.T).max() < 1e-12
    assert np.abs(matrix - np.eye(len(matrix))).max() > 0.1
    late_back = [1.5, 4.5, *back[2:]]
    for lopsided in ([there, pause, late_back], [[0.0, 2.0, 1.0, 0.0, 0.0, 1.0, STRAIGHT]]):
        matrix = proposal_matrix(diagonal, lopsided)
        assert np.abs(matrix - matrix.T).max() > 0.03


@pytest.mark.parametrize("spins", [3, 7])
@pytest.mark.parametrize("factor", [2.0**20, 2.0**-20])
@pytest.mark.parametrize("angle", [STRAIGHT, 1.2])
def test_a_power_of_two_changes_no_bit(spins: int, factor: float, angle: float) -> None:
    diagonal = random_diagonal(spins)
    plain = law_at(diagonal, [[0.0, 2.0, 1.1, 0.0, 0.0, 1.0, angle]], [0.7, 2.0])
    scaled = law_at(
        factor * diagonal, [[0.0, 2.0 / factor, 1.1 * factor, 0.0, 0.0, 1.0, angle]], [0.7 / factor, 2.0 / factor]
    )
    np.testing.assert_array_equal(plain, scaled)


@pytest.mark.parametrize("angle", [STRAIGHT, 1.2])
def test_times_on_the_way_do_not_touch_each_other(angle: float) -> None:
    diagonal, legs = random_diagonal(6), [[0.0, 5.0, 1.1, 0.0, 0.0, 1.0, angle]]
    times = [0.0, 0.3, 2.9, 2.9, 5.0]
    together = law_at(diagonal, legs, times)
    for row, time in enumerate(times):
        np.testing.assert_array_equal(together[row], law_at(diagonal, legs, [time])[0])
    np.testing.assert_allclose(together[0], 1 / 64, rtol=1e-14)

    expected = by_splitting(diagonal, [(0.0, 2.9, leg_drive(legs[0]))], uniform_state(64), "hypercube", 0.01)
    assert variation(together[2], expected) < 1e-6


def test_probability_is_kept_over_long_times() -> None:
    law = law_at(random_diagonal(7), [[0.0, 300.0, 1.0, 0.0, 0.0, 1.0, STRAIGHT]], tolerance=1e-8)[0]
    assert law.min() >= 0.0
    assert law.sum() == pytest.approx(1.0, abs=1e-8)


def test_nothing_moves_without_a_drive() -> None:
    law = law_at(random_diagonal(6), [[0.0, 5.0, 0.0, 0.0, 1.0, 0.2, STRAIGHT]], start=9)[0]
    assert law[9] == pytest.approx(1.0, abs=1e-7)
