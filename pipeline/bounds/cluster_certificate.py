"""The certificate of a cluster bound, as plain arrays, and its check from the problem alone.

Fields and couplings are shared out among clusters of spins. Where the shares of each add up to the whole,

    E >= offset + sum_c min_x E_c(x),

for every cluster may choose its spins alone (:mod:`patchwalk.bounds.clusters` says whose idea that is). The check adds
the shares up exactly and finds every minimum anew, by eliminating the members of a cluster one after the other: tables
grow to 2^width entries, the width being how many later members one table is about.

``member_starts`` i64 (C+1,) and ``members`` i32 hold the spins of every cluster in the order in which they are
eliminated, ``field_shares`` f64 a share of the field of each member; ``pair_starts`` i64 (C+1,), ``pairs`` i32 (P, 2)
and ``coupling_shares`` f64 (P,) the couplings inside each cluster by their spins, and their shares.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

from patchwalk.bounds.certificate_error import CertificateError
from patchwalk.bounds.energy_step import rounded_up
from patchwalk.problem.ising import Problem

F64 = npt.NDArray[np.float64]
I8 = npt.NDArray[np.int8]
I32 = npt.NDArray[np.int32]
I64 = npt.NDArray[np.int64]
Arrays = Mapping[str, npt.NDArray[Any]]

WIDEST = 22
"""Tables of the check have at most 2^22 entries (32 MB)."""

UNIT = 2.0**-53
SHORT = 2.0**-50
"""Shares add up if what is missing is no more than so much of the largest: the rounding of one share; it is paid for.
"""


def checked_clusters(problem: Problem, arrays: Arrays) -> float:
    """The lower bound that the shares prove, rounded up to the next reachable energy.

    The minimum of a cluster of t shares is a sum of t numbers, whose rounding is below (t + 2) 2^-53 of the sum of
    their sizes (Higham, Accuracy and Stability of Numerical Algorithms, 2002, section 4.2); that is taken off. Raises
    :class:`CertificateError` where shares do not add up, or with what else is wrong.
    """
    columns = _columns(problem, arrays)
    missing = _missing(problem, columns)
    starts, members, fields, pair_starts, pairs, weights = columns
    minima, errors = [], []
    for cluster in range(len(starts) - 1):
        own, inner = slice(*starts[cluster : cluster + 2]), slice(*pair_starts[cluster : cluster + 2])
        try:
            lowest, _ = eliminated(members[own], fields[own], pairs[inner], weights[inner])
        except ValueError as error:
            raise CertificateError(f"cluster {cluster}: {error}") from error
        minima.append(lowest)
        sizes = float(np.abs(fields[own]).sum() + np.abs(weights[inner]).sum())
        errors.append(1.01 * UNIT * (len(fields[own]) + len(weights[inner]) + 2) * sizes)
    total = math.fsum([problem.offset, *minima, *(-error for error in errors), -missing])
    return rounded_up(problem, math.nextafter(total, -math.inf))


def eliminated(members: I32, fields: F64, pairs: I32, weights: F64) -> tuple[float, I8]:
    """The lowest energy of one cluster and spins i8 (k,) that have it, in the order of ``members``.

    A table over some later members, in their order, is passed on to the first of them. Raises ``ValueError`` beyond
    width 22, or where a pair is not of two members.
    """
    place = {int(spin): rank for rank, spin in enumerate(members)}
    later: list[dict[int, float]] = [{} for _ in place]
    for (one, other), weight in zip(pairs.tolist(), weights.tolist(), strict=True):
        if one not in place or other not in place or one == other:
            raise ValueError(f"the coupling of spins {one} and {other} is not one of two members")
        first, second = sorted((place[one], place[other]))
        later[first][second] = later[first].get(second, 0.0) + weight
    given: list[list[tuple[tuple[int, ...], F64]]] = [[] for _ in place]
    decided, lowest = [], 0.0
    for rank in range(len(place)):
        scope = tuple(sorted({*later[rank], *(other for about, _ in given[rank] for other in about[1:])}))
        if len(scope) > WIDEST:
            raise ValueError(f"its order needs tables of 2^{len(scope)} entries; the check stops at 2^{WIDEST}")
        pull, up, down = _pull(fields[rank], later[rank], scope), np.zeros(()), np.zeros(())
        for about, table in given[rank]:
            shape = tuple(2 if other in about[1:] else 1 for other in scope)
            up, down = up + table[0].reshape(shape), down + table[1].reshape(shape)
        given[rank] = []
        up, down = up + pull, down - pull
        decided.append((scope, np.broadcast_to(down < up, (2,) * len(scope))))
        best = np.broadcast_to(np.minimum(up, down), (2,) * len(scope))
        if scope:
            given[scope[0]].append((scope, best))
        else:
            lowest += float(best)
    bits = np.zeros(len(place), np.intp)
    for rank in reversed(range(len(place))):
        scope, is_down = decided[rank]
        bits[rank] = is_down[tuple(bits[list(scope)])]
    return lowest, (1 - 2 * bits).astype(np.int8)


def _pull(field: float, weights: dict[int, float], scope: tuple[int, ...]) -> F64:
    """The field on a spin by the spins of its scope: an axis each, index 0 for +1 and 1 for -1."""
    pull = np.full((1,) * len(scope), field)
    for axis, other in enumerate(scope):
        if other in weights:
            shape = [1] * len(scope)
            shape[axis] = 2
            pull = pull + np.array([weights[other], -weights[other]]).reshape(shape)
    return pull


def _columns(problem: Problem, arrays: Arrays) -> tuple[I64, I32, F64, I64, I32, F64]:
    """The six arrays, each of the layout it should have."""
    try:
        starts, members = arrays["member_starts"].astype(np.int64), arrays["members"].astype(np.int32)
        fields, pair_starts = arrays["field_shares"].astype(np.float64), arrays["pair_starts"].astype(np.int64)
        pairs = arrays["pairs"].astype(np.int32).reshape(-1, 2)
        weights = arrays["coupling_shares"].astype(np.float64)
    except (KeyError, ValueError) as error:
        raise CertificateError(f"the certificate is incomplete: {error}") from error
    if len(fields) != len(members) or len(weights) != len(pairs) or len(starts) != len(pair_starts):
        raise CertificateError(
            f"{len(fields)} shares for {len(members)} members, {len(weights)} for {len(pairs)} couplings, and "
            f"{len(starts)} and {len(pair_starts)} starts: the certificate's columns do not fit each other"
        )
    for begins, total, what in ((starts, len(members), "members"), (pair_starts, len(pairs), "couplings")):
        if not len(begins) or begins[0] != 0 or begins[-1] != total or np.any(np.diff(begins) < 0):
            raise CertificateError(f"the clusters' {what} must begin at 0 and end at {total}, rising")
    if len(members) and (members.min() < 0 or members.max() >= len(problem)):
        raise CertificateError(f"members must be spins from 0 to {len(problem) - 1}")
    clusters = np.repeat(np.arange(len(starts) - 1), np.diff(starts))
    if len(np.unique(clusters * np.int64(len(problem)) + members)) < len(members):
        raise CertificateError("a cluster has a member twice")
    if not np.isfinite(fields).all() or not np.isfinite(weights).all():
        raise CertificateError("a share is not finite")
    return starts, members, fields, pair_starts, pairs, weights


def _missing(problem: Problem, columns: tuple[I64, I32, F64, I64, I32, F64]) -> float:
    """What rounding left of the wholes beyond their shares, summed; more than that is refused."""
    _, members, fields, _, pairs, weights = columns
    size = len(problem)
    low, high = pairs.min(axis=1, initial=size).astype(np.int64), pairs.max(axis=1, initial=0)
    if len(pairs) and (low.min() < 0 or high.max() >= size):
        raise CertificateError(f"couplings must be of spins from 0 to {size - 1}")
    rows = np.repeat(np.arange(size), np.diff(problem.row_starts))
    once = rows < problem.neighbours
    wholes = np.concatenate([problem.fields, problem.couplings[once]])
    names = np.concatenate(  # of fields below zero, of couplings from zero on
        [-1 - np.arange(size), rows[once] * size + problem.neighbours[once], -1 - members.astype(np.int64),
         low * size + high]
    )  # fmt: skip
    values = np.concatenate([wholes, -fields, -weights])
    order = np.argsort(names, kind="stable")
    names, values = names[order], values[order]
    begins = np.flatnonzero(np.diff(names, prepend=names[0] - 1))
    left = []
    for begin, end in zip(begins.tolist(), [*begins[1:].tolist(), len(names)], strict=True):
        gap = abs(math.fsum(values[begin:end].tolist()))
        if gap > SHORT * float(np.abs(values[begin:end]).max()):
            raise CertificateError(
                f"the shares of {_called(int(names[begin]), size)} do not add up to it: they are {gap:.6g} apart"
            )
        left.append(gap)
    return math.nextafter(math.fsum(left), math.inf) if any(left) else 0.0


def _called(name: int, size: int) -> str:
    if name < 0:
        return f"the field on spin {-1 - name}"
    return f"the coupling of spins {name // size} and {name % size}"
