"""The semidefinite bound with odd cuts: a smoothed dual, climbed between rounds of new cuts.

Cuts of weight zero are dropped and the most violated added, every time with less smoothing, until the bound is past a
target or hardly moves (cutting planes on the semidefinite program: Helmberg & Rendl, Math. Program. 82 (1998) 291, from
memory).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from time import perf_counter
from typing import NamedTuple

import numpy as np

from patchwalk.bounds.ascent import ascend
from patchwalk.bounds.odd_cuts import list_pairs, smoothed_dual, triangles_broken, widened
from patchwalk.bounds.spectral import F64, I8, I32, WIDEST
from patchwalk.subsolvers.contract import I64

MOST_GROUPS = 2000
"""Cuts are told apart by one 64-bit number, which holds five of so many groups."""

NEW_CUTS = 5
"""New cuts of each width a round, per group."""

MOST_FOUND = 1_000_000
"""Violated triangles looked at, 33 bytes each."""

SMOOTHEST, SHARPEST, SHARPENING = 2.5e-2, 3e-4, 0.6
"""Smoothing in units of the mean |u|: the first, the last, and the factor between rounds."""


class Dual(NamedTuple):
    """A point of the dual: ``diagonal`` f64 (m,), cuts ``members`` i32 (T, 5), ``signs`` i8 (T, 5), ``weights``."""

    diagonal: F64
    members: I32
    signs: I8
    weights: F64


def bare(diagonal: F64) -> Dual:
    """The dual of the program without cuts."""
    return Dual(diagonal, np.zeros((0, WIDEST), np.int32), np.zeros((0, WIDEST), np.int8), np.zeros(0))


@dataclass(eq=False)
class Climb:
    """A climb in progress: ``best`` and its ``bound`` without regard to rounding, ``gram`` the X of the highest point,
    the ``smoothing`` in use in units of the mean |u|, ``evaluations`` so far.
    """

    matrix: F64
    target: float
    best: Dual
    bound: float
    gram: F64
    smoothing: float
    evaluations: int = 0

    @property
    def arrived(self) -> bool:
        return self.bound >= self.target


def tighten(
    matrix: F64,
    dual: Dual,
    gram: F64,
    *,
    target: float,
    rounds: int = 12,
    steps: int = 30,
    smoothing: float = SMOOTHEST,
    stall: float = 0.05,
    deadline: float = math.inf,
) -> Climb:
    """Raise the bound of ``matrix`` from ``dual``, whose X is about ``gram``, until it passes ``target``.

    Ends after ``rounds`` of at most ``steps`` each, or once a round, at the sharpest smoothing, closes less than the
    share ``stall`` of what is left to the target, or with the first round past ``deadline`` (of ``perf_counter``; the
    clock is not read where it is infinite).
    """
    scale = float(np.abs(dual.diagonal).mean()) or 1.0
    climb = Climb(matrix, target, dual, -math.inf, gram.copy(), smoothing)
    for _ in range(rounds):
        before = climb.bound
        dual = _ascend(climb, with_new_cuts(dual, climb.gram), climb.smoothing * scale, steps)
        stalled = climb.smoothing <= SHARPEST and climb.bound - before <= stall * (target - before)
        if climb.arrived or stalled or (deadline < math.inf and perf_counter() >= deadline):
            break
        climb.smoothing = max(SHARPEST, climb.smoothing * SHARPENING)
    return climb


def _ascend(climb: Climb, dual: Dual, smoothing: float, steps: int) -> Dual:
    """Climb the smoothed dual with the cuts of ``dual``; returns the point reached, tells the climb of the best."""
    size = len(climb.matrix)
    pairs = list_pairs(dual.members, dual.signs, size)
    gram, highest = np.empty_like(climb.matrix), -math.inf

    def at(point: F64) -> Dual:
        return dual._replace(diagonal=point[:size].copy(), weights=point[size:].copy())

    def look(point: F64, slope: F64) -> float:
        nonlocal highest
        value, bound = smoothed_dual(climb.matrix, dual.members, dual.signs, *pairs, point, smoothing, slope, gram)
        climb.evaluations += 1
        if value > highest:
            highest = value
            climb.gram[:] = gram
        if bound > climb.bound:
            climb.bound, climb.best = bound, at(point)
        return value

    start = np.concatenate([dual.diagonal, dual.weights])
    return at(ascend(look, lambda: climb.arrived, start, size, smoothing, steps))


def with_new_cuts(dual: Dual, gram: F64) -> Dual:
    """The dual without cuts of weight zero, with the most violated triangles and widened triangles added."""
    size = len(gram)
    kept = dual.weights > 1e-7 * float(np.abs(dual.diagonal).mean())
    members, signs = dual.members[kept], dual.signs[kept]
    limit = NEW_CUTS * size
    found = [_strongest(*triangles_broken(gram, 0.01, MOST_FOUND), 4 * limit)]
    narrow = signs[:, 3] == 0
    if np.any(narrow):
        wide, wide_signs, excess = widened(gram, members[narrow], signs[narrow])
        found.append(_strongest(*_packed(wide, wide_signs), excess, 4 * limit))
    known = _keys(members, signs, size)
    for more, more_signs in found:
        keys = _keys(more, more_signs, size)
        _, first = np.unique(keys, return_index=True)
        fresh = np.sort(first)
        fresh = fresh[~np.isin(keys[fresh], known)][:limit]
        members, signs = np.concatenate([members, more[fresh]]), np.concatenate([signs, more_signs[fresh]])
    weights = np.zeros(len(members))
    weights[: int(kept.sum())] = dual.weights[kept]
    return Dual(dual.diagonal, members, signs, weights)


def _strongest(members: I32, signs: I8, excess: F64, limit: int) -> tuple[I32, I8]:
    order = np.argsort(-excess, kind="stable")[:limit]
    order = order[excess[order] > 0.01]
    return members[order], signs[order]


def _keys(members: I32, signs: I8, size: int) -> I64:
    """One whole number for each cut."""
    keys = np.zeros(len(members), np.int64)
    for place in range(WIDEST):
        keys = (keys * size + members[:, place]) * 3 + signs[:, place] + 1
    return keys


def tied_dual(dual: Dual, low: int, high: int, relation: int) -> Dual:
    """The same dual where y_high = relation * y_low and group ``high`` is gone.

    A cut with one of the two stays a cut. One with both loses them where they cancel, three members becoming y^2 = 1 of
    the third, whose u takes the weight; where they add up, it follows from the others and is dropped.
    """
    used = dual.signs != 0
    at_low, at_high = used & (dual.members == low), used & (dual.members == high)
    both = at_low.any(axis=1) & at_high.any(axis=1)
    cancel = both & ((dual.signs * at_low).sum(axis=1) + relation * (dual.signs * at_high).sum(axis=1) == 0)
    signs = np.where(at_high, dual.signs * relation, dual.signs).astype(np.int8)
    signs[cancel[:, None] & (at_low | at_high)] = 0
    left = (signs != 0).sum(axis=1)
    diagonal = dual.diagonal.copy()
    diagonal[low] += diagonal[high]
    single = np.flatnonzero(left == 1)
    np.add.at(diagonal, dual.members[single, np.argmax(signs[single] != 0, axis=1)], dual.weights[single])
    members = np.where(dual.members == high, low, dual.members - (dual.members > high)).astype(np.int32)
    members, signs = _packed(members, signs)
    kept = (left > 1) & (~both | cancel)
    return Dual(np.delete(diagonal, high), members[kept], signs[kept], dual.weights[kept])


def _packed(members: I32, signs: I8) -> tuple[I32, I8]:
    """Members rising, unused places last and 0, the first sign +1, so that equal cuts look equal."""
    order = np.argsort(np.where(signs != 0, members, MOST_GROUPS), axis=1, kind="stable")
    members, signs = np.take_along_axis(members, order, 1), np.take_along_axis(signs, order, 1)
    return np.where(signs != 0, members, 0).astype(np.int32), (signs * signs[:, :1]).astype(np.int8)
