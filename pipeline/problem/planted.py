"""Problems whose ground energy is known at any size, because a configuration was planted in them.

Each is a sum of parts that the planted configuration, drawn at random, satisfies all at once: its energy is the sum of
the least energies of the parts, and nothing lies lower. ``details`` keep ``planted_energy`` and ``planted_spins`` i8
(n,). Other configurations may reach the same energy.
"""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
import numpy.typing as npt

from patchwalk.problem.ising import Problem

I8 = npt.NDArray[np.int8]
I64 = npt.NDArray[np.int64]
F64 = npt.NDArray[np.float64]

SHORTEST_LOOP = 6  # a single square has no corner that another way round could cut
WEAK, STRONG = 1.0, 2.0


def plant_loops(side: int, density: float, is_open: bool, draws: np.random.Generator, recipe: Iterable[str]) -> Problem:
    """Frustrated loops (Hen et al., Phys. Rev. A 92 (2015) 042325) on a square lattice of ``side``^2 spins.

    A walk that never turns back is followed until it meets itself; the loop it closed, if of ``SHORTEST_LOOP`` bonds
    or more, is added with couplings of size 1, all but one of them satisfied by the planted configuration: its least
    energy is -(length - 2). There are ``density`` loops per spin, rounded; bonds of several loops add up, and bonds
    that none uses are absent. Hen et al. use the Chimera graph; the lattice, which also closes to a torus unless it is
    open, is ours.
    """
    spins = _hidden(side * side, draws)
    bonds: dict[tuple[int, int], float] = {}
    energy = 0
    for _ in range(max(1, round(density * side * side))):
        loop = _loop(side, is_open, draws)
        violated = int(draws.integers(len(loop)))
        for place, (one, other) in enumerate(zip(loop, loop[1:] + loop[:1], strict=True)):
            sign = 1 if place == violated else -1
            bond = (min(one, other), max(one, other))
            bonds[bond] = bonds.get(bond, 0.0) + sign * float(spins[one] * spins[other])
        energy -= len(loop) - 2
    heads, tails = np.array(list(bonds), np.int64).reshape(-1, 2).T
    return _planted(heads, tails, np.array(list(bonds.values())), spins, float(energy), recipe)


def _loop(side: int, is_open: bool, draws: np.random.Generator) -> list[int]:
    """The sites of a loop in order: what a walk has gone since it first was where it now meets itself."""
    while True:
        x, y = (int(place) for place in draws.integers(side, size=2))
        path, visited, back = [(x, y)], {(x, y): 0}, (0, 0)
        steps = iter(())
        while True:
            step = next(steps, None)
            if step is None:
                steps = iter(_STEPS[draws.integers(4, size=32)].tolist())
                continue
            if tuple(step) == back:
                continue
            x, y = path[-1][0] + step[0], path[-1][1] + step[1]
            if is_open and not (0 <= x < side and 0 <= y < side):
                continue
            site = x % side, y % side
            back = -step[0], -step[1]
            if site in visited:
                break
            visited[site] = len(path)
            path.append(site)
        loop = path[visited[site] :]
        if len(loop) >= SHORTEST_LOOP:
            return [x + side * y for x, y in loop]


_STEPS = np.array([(1, 0), (-1, 0), (0, 1), (0, -1)])


def plant_tiles(side: int, is_open: bool, draws: np.random.Generator, recipe: Iterable[str]) -> Problem:
    """Frustrated squares (Hamze et al., Phys. Rev. E 97 (2018) 043303) on a square lattice of ``side``^2 spins.

    The squares of one colour of a chessboard hold each bond once. Each has 1, 2, 3 or 4 weak bonds of size 1 (all
    equally likely, which is our choice), the others of size 2, and one of the weak ones is violated in the planted
    configuration: the square's least energy is -(sum of its sizes - 2). An open lattice keeps the whole squares only.
    """
    spins = _hidden(side * side, draws)
    last = side - 1 if is_open else side
    x, y = (places.ravel() for places in np.meshgrid(np.arange(last), np.arange(last)))
    x, y = x[(x + y) % 2 == 0], y[(x + y) % 2 == 0]
    right, up = (x + 1) % side, (y + 1) % side
    corners = np.stack([x + side * y, right + side * y, right + side * up, x + side * up], axis=1)
    heads, tails = corners.ravel(), np.roll(corners, -1, axis=1).ravel()
    weak = draws.integers(1, 5, len(corners))  # so many weak bonds a square
    order = draws.permuted(np.tile(np.arange(4), (len(corners), 1)), axis=1)
    sizes = np.where(order < weak[:, None], WEAK, STRONG)
    signs = np.where(order == 0, 1.0, -1.0)  # a weak bond is the violated one
    energy = -float((sizes.sum(axis=1) - 2 * WEAK).sum())
    weights = (signs * sizes).ravel() * spins[heads] * spins[tails]
    return _planted(heads, tails, weights, spins, energy, recipe)


def plant_wishart(size: int, density: float, draws: np.random.Generator, recipe: Iterable[str]) -> Problem:
    """Wishart planted ensemble (Hamze et al., Phys. Rev. E 101 (2020) 052102): every pair of ``size`` spins coupled.

    The columns of W (n, m), m = ``density`` n rounded, are Gaussian vectors with their part along the planted
    configuration t taken out, scaled by sqrt(n / (n - 1)). Energy |W's|^2 / 2n is 0 for t and nowhere less. So, with
    the squares s_i^2 = 1 taken away, J_ij = (W W')_ij / n for i < j and the ground energy is -sum W^2 / 2n. (In the
    paper J = -(1/n) W W', as its energy is -sum J s s / 2 over all i, j.)
    """
    spins = _hidden(size, draws)
    columns = max(1, round(density * size))
    vectors = draws.standard_normal((size, columns))
    vectors -= np.outer(spins, spins @ vectors) / size
    vectors *= np.sqrt(size / (size - 1))
    heads, tails = np.triu_indices(size, 1)
    weights = (vectors @ vectors.T)[heads, tails] / size
    energy = -float(np.square(vectors).sum()) / (2 * size)
    return _planted(heads, tails, weights, spins, energy, recipe)


def _hidden(size: int, draws: np.random.Generator) -> I8:
    """The configuration to plant."""
    return (1 - 2 * draws.integers(0, 2, size)).astype(np.int8)


def _planted(heads: I64, tails: I64, weights: F64, spins: I8, energy: float, recipe: Iterable[str]) -> Problem:
    details = {"recipe": tuple(recipe), "planted_energy": energy, "planted_spins": spins}
    return Problem.from_arrays(heads, tails, weights, size=len(spins), details=details)
