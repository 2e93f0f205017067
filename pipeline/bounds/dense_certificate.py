"""The certificate of a tree of semidefinite bounds, as plain arrays, and its check from the problem alone."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

from patchwalk.bounds.certificate_error import CertificateError
from patchwalk.bounds.energy_step import rounded_up
from patchwalk.bounds.merging import tied
from patchwalk.bounds.spectral import (
    I8,
    I32,
    WIDEST,
    SquareCertificate,
    checked_bound,
    trivial_groups,
)
from patchwalk.problem.ising import Problem

Arrays = Mapping[str, npt.NDArray[Any]]


def pack_tree(
    parents: Sequence[int], ties: Sequence[tuple[int, int, int]], leaves: Sequence[SquareCertificate | None]
) -> dict[str, npt.NDArray[Any]]:
    """A tree of ``N`` nodes as arrays.

    ``parents`` i32 (N,), -1 for the root, which comes first, parents before children; ``firsts`` and ``seconds`` i32
    (N,), ``signs`` i8 (N,): in that node vertex ``first`` is ``sign`` times vertex ``second`` (the last vertex carries
    the fields, if there are any). A leaf k has ``diagonals[diagonal_starts[k] : diagonal_starts[k + 1]]``, one entry
    for each group of tied vertices in the order of their lowest members, and likewise by ``cut_starts`` its rows of
    ``members`` i32 (., 5), ``member_signs`` i8 (., 5) and ``weights`` f64; a node with children has none.
    """
    given = [leaf for leaf in leaves if leaf is not None]
    lengths = [0 if leaf is None else len(leaf.diagonal) for leaf in leaves]
    cuts = [0 if leaf is None else len(leaf.weights) for leaf in leaves]
    firsts, seconds, signs = np.array(ties, np.int32).reshape(-1, 3).T
    return {
        "parents": np.array(parents, np.int32),
        "firsts": firsts.copy(),
        "seconds": seconds.copy(),
        "signs": signs.astype(np.int8),
        "diagonal_starts": np.concatenate([[0], np.cumsum(lengths)]).astype(np.int64),
        "diagonals": np.concatenate([leaf.diagonal for leaf in given]),
        "cut_starts": np.concatenate([[0], np.cumsum(cuts)]).astype(np.int64),
        "members": np.concatenate([leaf.members for leaf in given]).reshape(-1, WIDEST),
        "member_signs": np.concatenate([leaf.member_signs for leaf in given]).reshape(-1, WIDEST),
        "weights": np.concatenate([leaf.weights for leaf in given]),
    }


def checked_tree(problem: Problem, arrays: Arrays) -> float:
    """The lower bound that a packed tree proves: the least of its leaves, rounded up to the next reachable energy.

    Raises :class:`CertificateError` where the leaves do not cover all configurations, or one of them proves nothing.
    """
    parents = arrays["parents"]
    if len(parents) == 0 or parents[0] != -1:
        raise CertificateError("the tree has no root; the first node must have parent -1")
    lengths = {"firsts": 0, "seconds": 0, "signs": 0, "diagonal_starts": 1, "cut_starts": 1}
    for name, more in lengths.items():
        if len(arrays[name]) != len(parents) + more:
            raise CertificateError(f"{name} has {len(arrays[name])} entries for {len(parents)} nodes")
    children = _children(parents)
    groups = _groups(problem, arrays, children)
    bounds = [
        checked_bound(problem, _leaf(arrays, node, *groups[node]))
        for node in range(len(parents))
        if len(children[node]) == 0
    ]
    return rounded_up(problem, min(bounds))


def _children(parents: I32) -> list[list[int]]:
    children: list[list[int]] = [[] for _ in parents]
    for node, parent in enumerate(parents.tolist()[1:], start=1):
        if not 0 <= parent < node:
            raise CertificateError(f"node {node} has parent {parent}; parents come before their children")
        children[parent].append(node)
    return children


def _groups(problem: Problem, arrays: Arrays, children: list[list[int]]) -> list[tuple[I32, I8]]:
    """Groups and signs of every node; each split must be over one pair, both ways."""
    found = [trivial_groups(problem)] * len(children)
    for node, pair in enumerate(children):
        if not pair:
            continue
        ties = [tuple(int(arrays[name][child]) for name in ("firsts", "seconds", "signs")) for child in pair]
        first, second, _ = ties[0]
        if sorted(ties) != [(first, second, -1), (first, second, 1)]:
            raise CertificateError(f"node {node} is not split into the same pair tied both ways; a node is missing")
        groups, signs = found[node]
        if not (0 <= first < len(groups) and 0 <= second < len(groups) and groups[first] != groups[second]):
            raise CertificateError(f"node {node} is split over vertices {first} and {second}, which are tied already")
        for child, (_, _, sign) in zip(pair, ties, strict=True):
            found[child] = tied(groups, signs, first, second, sign)
    return found


def _leaf(arrays: Arrays, node: int, groups: I32, signs: I8) -> SquareCertificate:
    start, stop = arrays["diagonal_starts"][node : node + 2]
    cuts = slice(*arrays["cut_starts"][node : node + 2])
    return SquareCertificate(
        groups,
        signs,
        arrays["diagonals"][start:stop],
        arrays["members"][cuts],
        arrays["member_signs"][cuts],
        arrays["weights"][cuts],
    )
