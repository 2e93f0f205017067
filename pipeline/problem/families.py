"""Seeded instances: spin glasses of the literature, random clauses and numbers, planted problems, invented beacons.

Every family draws from its own stream of the seed, so the same family, size, options and seed give the same bits.
``details["recipe"]`` of a made problem says how it was made.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from patchwalk.problem.glasses import (
    MOST_COUPLINGS,
    cubic_lattice,
    fully_connected,
    random_fault,
    random_glass,
    regular_fault,
    regular_glass,
    square_lattice,
)
from patchwalk.problem.instance_request import Request
from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.planted import plant_loops, plant_tiles, plant_wishart
from patchwalk.problem.quillmere import MOST_BEACONS, draw_coast
from patchwalk.subsolvers.draws import generator_for

F64 = npt.NDArray[np.float64]

COUPLINGS = ("pm1", "gaussian")
MOST_BITS = 330  # numbers of so many bits stay below 1e100


class Family(NamedTuple):
    """A way to make instances; ``options`` beyond size and seed, with the default law, degree and density.

    ``fault`` says what is wrong with a request whose options are each in order.
    """

    build: Callable[[Request], Problem]
    stream: int
    size: str
    smallest: int
    largest: int
    options: tuple[str, ...] = ()
    couplings: str | None = None
    degree: int | None = None
    density: Callable[[int], float] | None = None
    most_density: float = 1.0
    fault: Callable[[Request], str | None] = lambda request: None  # noqa: ARG005 - most families have none


def make(
    family: str,
    size: int,
    *,
    seed: int = 1,
    couplings: str | None = None,
    open: bool = False,  # noqa: A002 - the keyword and the option --open bear one name
    fields: bool = False,
    degree: int | None = None,
    density: float | None = None,
) -> Problem:
    """A seeded instance of a family.

    ========= ================================================ =============== ==================================
    family    what it is                                       size            density (default)
    ========= ================================================ =============== ==================================
    sk        every pair coupled, variance 1/n                 spins
    lattice2d square lattice                                   side L
    lattice3d cubic lattice                                    side L
    regular   random graph of ``degree`` neighbours each (3)   spins
    random    random graph                                     spins           share of pairs (4 neighbours each)
    max2sat   random clauses of two literals                   variables       clauses per variable (2)
    partition random numbers to be split into two parts        numbers         bits over count of numbers (1)
    loops     frustrated loops on a square lattice, planted    side L          loops per spin (0.15)
    tiles     frustrated squares on a square lattice, planted  side L, even
    wishart   every pair coupled, planted                      spins           columns per spin (0.75)
    beacons   radio channels on an invented coast              beacons
    ========= ================================================ =============== ==================================

    ``couplings`` are drawn as ``pm1`` (both signs equally likely) or ``gaussian`` (the default of ``sk``), with
    variance 1/n for ``sk`` (Sherrington & Kirkpatrick, Phys. Rev. Lett. 35, 1975, 1792) and 1 elsewhere (Edwards &
    Anderson, J. Phys. F 5, 1975, 965). ``open`` leaves out the bonds that close a lattice to a ring; ``fields`` draws
    a field for every spin from the couplings' law. The ground energy of planted problems is
    ``details["planted_energy"]``. Raises :class:`ProblemError` that lists everything wrong with the request.

    >>> make("lattice2d", 4, seed=1).summary()[:34]
    '16 spins, 32 couplings, no fields;'
    >>> make("tiles", 10, seed=1).details["planted_energy"]
    -182.0
    """
    if family not in FAMILIES:
        raise ProblemError(f"family {family!r} is not known; it is one of: {', '.join(FAMILIES)}")
    known = FAMILIES[family]
    faults = _size_faults(known, size)
    given = {
        "couplings": couplings is not None,
        "open": open,
        "fields": fields,
        "degree": degree is not None,
        "density": density is not None,
    }
    for option in (name for name, is_given in given.items() if is_given and name not in known.options):
        takers = [name for name, other in FAMILIES.items() if option in other.options]
        faults.append(f"{family} has no option {option}; it belongs to: {', '.join(takers)}")
    if couplings is not None and couplings not in COUPLINGS:
        faults.append(f"couplings {couplings!r} are not known; they are one of: {', '.join(COUPLINGS)}")
    if degree is not None and not _is_whole(degree):
        faults.append(f"degree {degree!r} is not a whole number")
    if density is not None and not (isinstance(density, int | float) and 0 < density <= known.most_density):
        faults.append(f"density {density!r} is not a number above 0 and up to {known.most_density:g}")
    if not faults:
        request = Request(
            family=family,
            size=int(size),
            seed=seed,
            couplings=couplings or known.couplings,
            open=open,
            fields=fields,
            degree=known.degree if degree is None else int(degree),
            density=float(density) if density is not None else known.density and known.density(int(size)),
            draws=generator_for(seed, known.stream),
        )
        fault = known.fault(request)
        if not fault:
            return known.build(request)
        faults.append(fault)
    raise ProblemError("; ".join(faults))


def _is_whole(value: object) -> bool:
    return isinstance(value, int | np.integer) and not isinstance(value, bool)


def _size_faults(known: Family, size: int) -> list[str]:
    if not _is_whole(size):
        return [f"size {size!r} is not a whole number ({known.size})"]
    if not known.smallest <= size <= known.largest:
        return [f"size {size} is out of reach: {known.size}, from {known.smallest} to {known.largest}"]
    return []


def _max2sat(request: Request) -> Problem:
    """Clauses on two different variables, every such clause equally likely, each drawn on its own."""
    from patchwalk.problem.encodings import encode_max2sat

    assert request.density is not None
    size, draws = request.size, request.draws
    count = max(1, round(request.density * size))
    first = draws.integers(0, size, count)
    second = (first + draws.integers(1, size, count)) % size
    signs = 1 - 2 * draws.integers(0, 2, (count, 2))
    problem = encode_max2sat(signs * (1 + np.stack([first, second], axis=1)), None, size)
    return replace(problem, details={**problem.details, "recipe": request.recipe()})


def _partition(request: Request) -> Problem:
    """Numbers equally likely among those from 1 to 2^bits."""
    from patchwalk.problem.encodings import encode_partition

    bits = _bits(request)
    spare = 8 * -(-bits // 8) - bits
    words = [request.draws.bytes(-(-bits // 8)) for _ in range(request.size)]
    problem = encode_partition([1 + (int.from_bytes(word, "little") >> spare) for word in words])
    return replace(problem, details={**problem.details, "recipe": request.recipe()})


def _bits(request: Request) -> int:
    assert request.density is not None
    return max(1, round(request.density * request.size))


def _partition_fault(request: Request) -> str | None:
    bits = _bits(request)
    return None if bits <= MOST_BITS else f"numbers of {bits} bits are out of reach; the most is {MOST_BITS}"


def _loops(request: Request) -> Problem:
    assert request.density is not None
    return plant_loops(request.size, request.density, request.open, request.draws, request.recipe())


def _tiles(request: Request) -> Problem:
    return plant_tiles(request.size, request.open, request.draws, request.recipe())


def _tiles_fault(request: Request) -> str | None:
    return f"size {request.size} is odd; squares tile a lattice of even side" if request.size % 2 else None


def _wishart(request: Request) -> Problem:
    assert request.density is not None
    return plant_wishart(request.size, request.density, request.draws, request.recipe())


def _beacons(request: Request) -> Problem:
    return draw_coast(request.size, request.draws).problem(request.recipe())


_MOST_SPINS, _MOST_SIDE = 1_000_000, 1000
_MOST_DENSE = int((2 * MOST_COUPLINGS) ** 0.5)
_LAW = ("couplings", "fields")

FAMILIES: Mapping[str, Family] = {
    "sk": Family(fully_connected, 1, "the number of spins", 2, _MOST_DENSE, _LAW, "gaussian"),
    "lattice2d": Family(
        square_lattice, 2, "the side L", 2, int((MOST_COUPLINGS / 2) ** (1 / 2)), ("couplings", "open", "fields"), "pm1"
    ),
    "lattice3d": Family(
        cubic_lattice, 3, "the side L", 2, int((MOST_COUPLINGS / 3) ** (1 / 3)), ("couplings", "open", "fields"), "pm1"
    ),
    "regular": Family(
        regular_glass, 5, "the number of spins", 2, _MOST_SPINS, (*_LAW, "degree"), "pm1", degree=3, fault=regular_fault
    ),
    "random": Family(
        random_glass, 6, "the number of spins", 2, _MOST_SPINS, (*_LAW, "density"), "pm1",
        density=lambda size: min(1.0, 4 / (size - 1)), fault=random_fault,
    ),
    "max2sat": Family(
        _max2sat, 7, "the number of variables", 2, _MOST_SPINS, ("density",), density=lambda _: 2.0, most_density=10.0
    ),
    "partition": Family(
        _partition, 8, "how many numbers", 2, 4000, ("density",), density=lambda _: 1.0, most_density=100.0,
        fault=_partition_fault,
    ),
    "loops": Family(
        _loops, 9, "the side L", 4, _MOST_SIDE, ("open", "density"), density=lambda _: 0.15, most_density=10.0
    ),
    "tiles": Family(_tiles, 10, "the side L", 4, _MOST_SIDE, ("open",), fault=_tiles_fault),
    "wishart": Family(
        _wishart, 11, "the number of spins", 3, _MOST_DENSE, ("density",), density=lambda _: 0.75, most_density=10.0
    ),
    "beacons": Family(_beacons, 4, "the number of beacons", 10, MOST_BEACONS),
}  # fmt: skip
