"""How large a penalty must be, and quadratic forms of bits as spins.

A penalty is *enough* if every configuration of least energy keeps the constraint. Each encoding proves a bound B such
that any penalty above B is enough, says the proof in its docstring, and takes :func:`above` (B): an eighth more, a
factor that binary numbers hold exactly, so that whole-numbered problems keep whole-numbered objectives to the last
bit. More would only make the landscape steeper than it need be. Half of that is below B, and tests hold for every
encoding an instance that fails there.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from patchwalk.problem.ising import Problem, ProblemError

if TYPE_CHECKING:
    from patchwalk.problem.meanings import Encoding

F64 = npt.NDArray[np.float64]

MARGIN = 1.125
MOST_COUPLINGS = 20_000_000  # at about 200 bytes each while the problem is put together
MOST_SLACK_BITS = 10


def above(bounds: npt.ArrayLike, unit: float = 1.0) -> F64:
    """Penalties above these bounds: an eighth more, or ``unit`` where the bound is not positive and any will do."""
    values = np.asarray(bounds, np.float64)
    return np.where(values > 0, MARGIN * values, unit)


def smallest(values: npt.ArrayLike) -> float:
    """The least size of a number that is not 0, as the unit of a problem; 1 if there is none."""
    sizes = np.abs(np.asarray(values, np.float64))
    return float(sizes[sizes > 0].min(initial=np.inf)) if np.any(sizes > 0) else 1.0


def count_coefficients(most: int) -> list[int]:
    """Whole numbers whose sums over subsets are exactly 0 to ``most``: powers of two, the last one cut to fit.

    >>> count_coefficients(5)
    [1, 2, 2]
    """
    coefficients = []
    power = 1
    while most > 0:
        coefficients.append(min(power, most))
        most -= coefficients[-1]
        power *= 2
    return coefficients


def count_bits(count: int, most: int) -> list[int]:
    """Bits (0 or 1) whose sum with ``count_coefficients(most)`` is ``count``, for 0 <= count <= most."""
    bits = []
    for coefficient in reversed(count_coefficients(most)):
        bits.append(int(count >= coefficient))
        count -= coefficient * bits[-1]
    return bits[::-1]


def problem_of_bits(
    heads: npt.ArrayLike,
    tails: npt.ArrayLike,
    weights: npt.ArrayLike,
    linear: npt.ArrayLike,
    offset: float = 0.0,
    *,
    kind: str,
    names: Iterable[str] | None = None,
    groups: Iterable[npt.ArrayLike] = (),
    encoding: Encoding | None = None,
    notes: Sequence[str] = (),
    details: dict[str, Any] | None = None,
) -> Problem:
    """The problem whose energy is ``offset + sum linear_i x_i + sum weights_e x_heads x_tails`` of bits x.

    Bit 1 is spin -1, so x = (1 - s)/2. ``heads[e] == tails[e]`` is allowed, for x x = x. Raises
    :class:`ProblemError` for indices outside the ``len(linear)`` bits and for numbers that are not finite.
    """
    first, second = np.asarray(heads, np.int64).ravel(), np.asarray(tails, np.int64).ravel()
    values, alone = np.asarray(weights, np.float64).ravel(), np.array(linear, np.float64).ravel()
    if not len(first) == len(second) == len(values):
        raise ProblemError(f"{len(first)} heads, {len(second)} tails and {len(values)} weights; give as many of each")
    ends = np.concatenate([first, second])
    outside = ends[(ends < 0) | (ends >= len(alone))]
    if len(outside):
        raise ProblemError(f"bit {outside[0]} does not exist: {len(alone)} bits are numbered 0 to {len(alone) - 1}")
    loops = first == second
    alone += np.bincount(first[loops], values[loops], len(alone))
    first, second, values = first[~loops], second[~loops], values[~loops]
    pulls = np.bincount(first, values, len(alone)) + np.bincount(second, values, len(alone))
    return Problem.from_arrays(
        first,
        second,
        values / 4,
        size=len(alone),
        fields=-alone / 2 - pulls / 4,
        offset=float(offset + alone.sum() / 2 + values.sum() / 4),
        kind=kind,
        names=names,
        groups=groups,
        encoding=encoding,
        notes=notes,
        details=details,
    )
