"""How strongly the transverse field A(t) and the problem B(t) act, from the first moment of an anneal to the last.

A schedule is a row of legs. On each, A and B go from one value to another together, along a straight line or along
one of two curves; between legs they may bend or jump. ``H(t) = -A(t) sum_i X_i + B(t) H_P``.
"""

from __future__ import annotations

import math
import tomllib
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path

import numpy as np
from scipy.linalg import eigh

from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.steps import CURVE, END

STRAIGHT, BY_KNOTS = 0.0, -1.0
"""What stands in a leg's last column: a straight line, or a curve tabulated per cluster (see :func:`gap_knots`)."""

KNOTS = 65
"""Points of a curve that follows a cluster's own gap, placed where it spends its time."""

GAP_SPINS = 8
"""Largest cluster whose gap is found by dense diagonalisation along the way."""

Leg = tuple[float, float, float, float, float, float, float]


@dataclass(frozen=True)
class Schedule:
    """Legs (begin, end, A at both, B at both, curve) that follow on one another in time.

    With ``in_hops`` times are in units of 1/hopping and A in units of hopping. Without it times are in units of
    1/energy; A is then an energy where ``absolute`` says so, and in units of hopping otherwise.
    """

    legs: tuple[Leg, ...]
    in_hops: bool = True
    absolute: bool = False

    @property
    def duration(self) -> float:
        """The time from beginning to end, in the schedule's unit."""
        return self.legs[-1][END]

    @property
    def needs_gap(self) -> bool:
        """Whether the curve depends on the cluster."""
        return any(leg[CURVE] == BY_KNOTS for leg in self.legs)

    def scales(self, hopping: F64, hop_scale: float = 1.0) -> tuple[F64, F64]:
        """Factors (B,) that turn the schedule's times and its A into units of 1/energy and energy.

        One hop is ``hop_scale / hopping``, see ``drivers.py``.
        """
        ones = np.ones(len(hopping))
        return (hop_scale / hopping if self.in_hops else ones), (ones if self.absolute else hopping)


def linear(duration: float, in_hops: bool) -> Schedule:
    """From the transverse field alone to the problem alone, both at constant speed."""
    return Schedule(((0.0, duration, 1.0, 0.0, 0.0, 1.0, STRAIGHT),), in_hops)


def search(duration: float, in_hops: bool, size: int) -> Schedule:
    """The same way at the speed that suits a search among ``size`` configurations: slow in the middle, where its gap
    is smallest (Roland & Cerf, PRA 65 (2002) 042308, in closed form)."""
    return Schedule(((0.0, duration, 1.0, 0.0, 0.0, 1.0, search_angle(size)),), in_hops)


def by_gap(duration: float, in_hops: bool) -> Schedule:
    """The same way at a speed proportional to the square of the cluster's own gap (the local condition of Roland &
    Cerf 2002, with a constant matrix element)."""
    return Schedule(((0.0, duration, 1.0, 0.0, 0.0, 1.0, BY_KNOTS),), in_hops)


def there_and_back(duration: float, in_hops: bool, turning_point: float, pause: float, leg_ratio: float) -> Schedule:
    """From the problem alone to A = 1 - turning_point, B = turning_point, a pause there, and back.

    ``duration`` is the time of both legs together, ``leg_ratio`` that of the way there over that of the way back.
    """
    there = duration * (leg_ratio / (1.0 + leg_ratio))
    field = 1.0 - turning_point
    return Schedule(
        (
            (0.0, there, 0.0, field, 1.0, turning_point, STRAIGHT),
            (there, there + pause, field, field, turning_point, turning_point, STRAIGHT),
            (there + pause, duration + pause, field, 0.0, turning_point, 1.0, STRAIGHT),
        ),
        in_hops,
    )


def blended(duration: float, in_hops: bool, mix: float) -> Schedule:
    """Between a walk (mix = 0: A = 1, B = 1 throughout) and the linear ramp (mix = 1)."""
    return Schedule(((0.0, duration, 1.0, 1.0 - mix, 1.0 - mix, 1.0, STRAIGHT),), in_hops)


def search_angle(size: int) -> float:
    """The angle atan(sqrt(N - 1)) of the search curve, s = 1/2 + tan(angle (2t/T - 1)) / (2 tan(angle))."""
    return math.atan(math.sqrt(size - 1))


def search_duration(size: int, slowness: float) -> float:
    """The duration T = N atan(sqrt(N - 1)) / (slowness sqrt(N - 1)) of the search curve, in units of 1/energy.

    For H = (1 - s) (1 - |uniform><uniform|) + s (1 - |marked><marked|); ``slowness`` is the share of amplitude that
    may be lost (Roland & Cerf 2002).

    >>> round(search_duration(64, 0.1), 4)
    116.5516
    """
    return size * search_angle(size) / (slowness * math.sqrt(size - 1))


def read_table(path: Path) -> Schedule:
    """The schedule in a TOML file: columns ``time``, ``A`` and ``B``, straight lines between their rows.

    Times are in units of 1/energy and A is an energy; with ``in_hops = true`` times are in units of 1/hopping and A in
    units of hopping. B is a pure number. Raises ``ValueError`` naming the file and the entry that cannot be used.
    """
    try:
        table = tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise ValueError(f"{path}: {error.strerror or error}; give a TOML file with columns time, A and B") from error
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise ValueError(f"{path}: not a TOML file: {error}") from error
    unknown = sorted(set(table) - {"time", "A", "B", "in_hops"})
    if unknown:
        raise ValueError(f"{path}: there is no key {unknown[0]!r}; a schedule has time, A, B and in_hops")
    in_hops = table.get("in_hops", False)
    if not isinstance(in_hops, bool):
        raise ValueError(f"{path}: in_hops is {in_hops!r}; it is true or false")
    time, a, b = (_column(path, table, key) for key in ("time", "A", "B"))
    for key, column in (("A", a), ("B", b)):
        if len(column) != len(time):
            raise ValueError(f"{path}: {key} has {len(column)} rows and time has {len(time)}; give as many of each")
    if time[0] != 0.0:
        raise ValueError(f"{path}: time starts at {time[0]}; it starts at 0")
    for row, (earlier, later) in enumerate(pairwise(time)):
        if later <= earlier:
            raise ValueError(f"{path}: time[{row + 1}] is {later} after {earlier}; times must rise from row to row")
    legs = tuple(
        (time[row], time[row + 1], a[row], a[row + 1], b[row], b[row + 1], STRAIGHT) for row in range(len(time) - 1)
    )
    return Schedule(legs, in_hops, absolute=not in_hops)


def _column(path: Path, table: dict[str, object], key: str) -> list[float]:
    column = table.get(key)
    if not isinstance(column, list) or len(column) < 2:
        raise ValueError(f"{path}: {key} is {column!r}; give a list of at least two numbers")
    for row, value in enumerate(column):
        if not isinstance(value, (int, float)) or isinstance(value, bool) or not math.isfinite(value):
            raise ValueError(f"{path}: {key}[{row}] is {value!r}; give a finite number")
    return [float(value) for value in column]


def gap_knots(energies: F64, hopping: float, driver: F64) -> F64:
    """Knots f64 (KNOTS, 3), shares of time, progress and slopes, of the way along which the speed follows the gap.

    ``energies`` f64 (2^k,) of one cluster, ``driver`` f64 (2^k, 2^k) from ``drivers.driver_matrix``. The gap at
    progress s is that of ``-(1 - s) hopping driver + s H_P``, between the ground state and the first state that does
    not end in a minimum: a degenerate ground state is no reason to stop. Points are added where the way spends most of
    its time.
    """
    size = len(energies)
    spread = float(np.ptp(energies)) or hopping
    minima = int(np.count_nonzero(energies <= energies.min() + 1e-9 * spread))
    above = min(minima, size - 1)

    def gap(progress: float) -> float:
        matrix = (progress - 1.0) * hopping * driver + np.diag(progress * energies)
        levels = eigh(matrix, eigvals_only=True, subset_by_index=(0, above))
        return max(float(levels[-1] - levels[0]), 1e-6 * spread)

    points = list(np.linspace(0.0, 1.0, 17))
    gaps = [gap(point) for point in points]
    while len(points) < KNOTS:
        place = int(np.argmax(np.diff(points) / (np.array(gaps[1:]) * np.array(gaps[:-1]))))
        middle = 0.5 * (points[place] + points[place + 1])
        points.insert(place + 1, middle)
        gaps.insert(place + 1, gap(middle))
    progress, squared = np.array(points), np.array(gaps) ** 2
    # the gap is taken for a straight line between points, along which the integral of 1/gap^2 is elementary
    spent = np.diff(progress) / np.sqrt(squared[1:] * squared[:-1])
    shares = np.concatenate([[0.0], np.cumsum(spent)]) / spent.sum()
    shares[-1] = 1.0
    slopes = squared * spent.sum()
    steepest = 3.0 * np.diff(progress) / np.diff(shares)  # a cubic piece rises all the way below this slope
    slopes[:-1] = np.minimum(slopes[:-1], steepest)
    slopes[1:] = np.minimum(slopes[1:], steepest)
    return np.ascontiguousarray(np.stack([shares, progress, slopes], axis=1))


def legs_array(schedule: Schedule) -> F64:
    """The legs as f64 (L, 7), in the schedule's own units."""
    return np.array(schedule.legs, np.float64)
