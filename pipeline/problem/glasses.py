"""Spin glasses drawn at random: on every pair, on lattices and on random graphs."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from patchwalk.problem.instance_request import Request
from patchwalk.problem.ising import Problem
from patchwalk.problem.random_graphs import independent_pairs, regular_pairs

MOST_COUPLINGS = 20_000_000  # at about 200 bytes each while the problem is put together


def fully_connected(request: Request) -> Problem:
    """Every pair of spins coupled, with couplings and fields of variance 1/n."""
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


def square_lattice(request: Request) -> Problem:
    """Nearest neighbours on a square lattice."""
    return _lattice(request, 2)


def cubic_lattice(request: Request) -> Problem:
    """Nearest neighbours on a cubic lattice."""
    return _lattice(request, 3)


def _on_graph(request: Request, pairs: npt.NDArray[np.int64]) -> Problem:
    """Couplings, and fields where asked for, on the edges (m, 2) of a graph."""
    return Problem.from_arrays(
        pairs[:, 0],
        pairs[:, 1],
        request.weights(len(pairs)),
        size=request.size,
        fields=request.weights(request.size) if request.fields else None,
        details={"recipe": request.recipe()},
    )


def regular_glass(request: Request) -> Problem:
    """A random graph in which every spin has as many neighbours."""
    assert request.degree is not None
    return _on_graph(request, regular_pairs(request.size, request.degree, request.draws))


def regular_fault(request: Request) -> str | None:
    """Why there is no such regular graph, if so."""
    size, degree = request.size, request.degree
    assert degree is not None
    if not 1 <= degree < size or size * degree % 2:
        return f"degree {degree}: no graph of {size} spins has it; take 1 to {size - 1}, even where the size is odd"
    return _couplings_fault(size * degree / 2)


def random_glass(request: Request) -> Problem:
    """A random graph that holds every pair with one probability."""
    assert request.density is not None
    return _on_graph(request, independent_pairs(request.size, request.density, request.draws))


def random_fault(request: Request) -> str | None:
    """Why the random graph would be out of reach, if so."""
    assert request.density is not None
    return _couplings_fault(request.density * request.size * (request.size - 1) / 2)


def _couplings_fault(count: float) -> str | None:
    if count <= MOST_COUPLINGS:
        return None
    return f"about {count:.0f} couplings are out of reach; the most is {MOST_COUPLINGS}: ask for a smaller size"
