"""Seeded instances: spin glasses of the literature, and the invented beacons.

Every family draws from its own stream of the seed, so the same family, size, options and seed give the same bits.
``details["recipe"]`` of a made problem says how it was made.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.quillmere import MOST_BEACONS, draw_coast
from patchwalk.subsolvers.draws import generator_for

F64 = npt.NDArray[np.float64]

COUPLINGS = ("pm1", "gaussian")
MOST_COUPLINGS = 20_000_000  # at about 200 bytes each while the problem is put together


class Request(NamedTuple):
    """What is to be made, checked."""

    family: str
    size: int
    seed: int
    couplings: str
    open: bool
    fields: bool
    draws: np.random.Generator

    def weights(self, count: int) -> F64:
        """Couplings or fields (count,) of mean 0 and variance 1, from the requested law."""
        if self.couplings == "gaussian":
            return self.draws.standard_normal(count)
        return np.where(self.draws.integers(0, 2, count) == 1, 1.0, -1.0)

    def recipe(self) -> tuple[str, ...]:
        """How to make the same instance again."""
        options = f"--couplings {self.couplings} " if self.couplings else ""
        options += "--open " * self.open + "--fields " * self.fields
        return (f"make {self.family} --size {self.size} {options}--seed {self.seed}",)


class Family(NamedTuple):
    """A way to make instances; ``options`` beyond size and seed, ``couplings`` the law drawn from by default."""

    build: Callable[[Request], Problem]
    stream: int
    size: str
    smallest: int
    largest: int
    options: tuple[str, ...] = ()
    couplings: str = ""


def make(
    family: str,
    size: int,
    *,
    seed: int = 1,
    couplings: str | None = None,
    open: bool = False,  # noqa: A002 - the keyword and the option --open bear one name
    fields: bool = False,
) -> Problem:
    """A seeded instance of a family: ``sk``, ``lattice2d``, ``lattice3d`` or ``beacons``.

    ``size`` is the number of spins (``sk``), the side L of a lattice of L^2 or L^3 spins, or the number of beacons.
    ``couplings`` are drawn as ``pm1`` (both signs equally likely; the lattices' default) or ``gaussian`` (the default
    of ``sk``), with variance 1/n for ``sk`` (Sherrington & Kirkpatrick, Phys. Rev. Lett. 35, 1975, 1792) and 1 for
    lattices (Edwards & Anderson, J. Phys. F 5, 1975, 965). ``open`` leaves out the bonds that close a lattice to a
    ring; ``fields`` draws a field for every spin from the couplings' law. Raises :class:`ProblemError` that lists
    everything wrong with the request.

    >>> make("lattice2d", 4, seed=1).summary()[:34]
    '16 spins, 32 couplings, no fields;'
    """
    if family not in FAMILIES:
        raise ProblemError(f"family {family!r} is not known; it is one of: {', '.join(FAMILIES)}")
    known = FAMILIES[family]
    faults = []
    if isinstance(size, bool) or not isinstance(size, int | np.integer):
        faults.append(f"size {size!r} is not a whole number ({known.size})")
    elif not known.smallest <= size <= known.largest:
        faults.append(f"size {size} is out of reach: {known.size}, from {known.smallest} to {known.largest}")
    given = {"couplings": couplings is not None, "open": open, "fields": fields}
    for option in (name for name, is_given in given.items() if is_given and name not in known.options):
        takers = [name for name, other in FAMILIES.items() if option in other.options]
        faults.append(f"{family} has no option {option}; it belongs to: {', '.join(takers)}")
    if couplings is not None and couplings not in COUPLINGS:
        faults.append(f"couplings {couplings!r} are not known; they are one of: {', '.join(COUPLINGS)}")
    if faults:
        raise ProblemError("; ".join(faults))
    law = couplings or known.couplings
    return known.build(Request(family, int(size), seed, law, open, fields, generator_for(seed, known.stream)))


def _sk(request: Request) -> Problem:
    size = request.size
    heads, tails = np.triu_indices(size, 1)
    scale = 1 / np.sqrt(size)
    return Problem.from_arrays(
        heads,
        tails,
        scale * request.weights(len(heads)),
        size=size,
        fields=scale * request.weights(size) if request.fields else None,
        details={"recipe": request.recipe()},
    )


def _lattice(request: Request, dimension: int) -> Problem:
    """A square or cubic lattice; the site (x, y, z) is spin x + L y + L^2 z."""
    side = request.size
    sites = np.arange(side**dimension).reshape((side,) * dimension)
    # on a ring of two sites the closing bond would be the other bond once more
    closed = not request.open and side > 2
    heads, tails = [], []
    for axis in reversed(range(dimension)):
        bonds = np.arange(side if closed else side - 1)
        heads.append(sites.take(bonds, axis).ravel())
        tails.append(sites.take((bonds + 1) % side, axis).ravel())
    first, second = np.concatenate(heads), np.concatenate(tails)
    doubled = side == 2 and not request.open
    return Problem.from_arrays(
        first,
        second,
        request.weights(len(first)),
        size=sites.size,
        fields=request.weights(sites.size) if request.fields else None,
        notes=("L = 2: the closing bonds would double the others and are left out",) if doubled else (),
        details={"recipe": request.recipe()},
    )


def _lattice2d(request: Request) -> Problem:
    return _lattice(request, 2)


def _lattice3d(request: Request) -> Problem:
    return _lattice(request, 3)


def _beacons(request: Request) -> Problem:
    return draw_coast(request.size, request.draws).problem(request.recipe())


FAMILIES: Mapping[str, Family] = {
    "sk": Family(
        _sk, 1, "the number of spins", 2, int((2 * MOST_COUPLINGS) ** 0.5), ("couplings", "fields"), "gaussian"
    ),
    "lattice2d": Family(
        _lattice2d, 2, "the side L", 2, int((MOST_COUPLINGS / 2) ** (1 / 2)), ("couplings", "open", "fields"), "pm1"
    ),
    "lattice3d": Family(
        _lattice3d, 3, "the side L", 2, int((MOST_COUPLINGS / 3) ** (1 / 3)), ("couplings", "open", "fields"), "pm1"
    ),
    "beacons": Family(_beacons, 4, "the number of beacons", 10, MOST_BEACONS),
}
