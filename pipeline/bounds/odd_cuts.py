"""Odd cuts on top of the semidefinite program: which are violated, and the smoothed dual with and without them.

For b with three or five entries +1 and -1 every configuration has (b . x)^2 >= 1; a matrix X breaks that where
b^T X b < 1. Triangles and their widenings to five are what brings the bound of a glass with full connectivity from 16 %
to 1 % below its ground state (computed here, n = 60); cuts of seven raise it by another 0.05 % and double the time.

The dual with cuts, max sum(u) + sum(w) with A(u, w) positive semidefinite and w >= 0, becomes smooth when the
constraint is replaced by a penalty |negative part of A|^2 / (2 smoothing); the gradient comes from the same
eigenvectors (Malick, SIAM J. Matrix Anal. Appl. 26 (2004) 272, from memory). As the smoothing goes to zero so does the
loss, and at any point sum(u) + sum(w) + m min(0, lambda_min(A)) is a bound.
"""

from __future__ import annotations

import math

import numpy as np

from patchwalk.bounds.spectral import WIDEST
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64


@compiled
def list_pairs(members: I32, signs: I8, size: int) -> tuple[I64, I32, F64]:
    """The pairs of members of every cut, flat: ``starts`` i64 (T+1,), places below the diagonal of an (m, m) matrix
    read row by row, and products of signs.

    ``members`` and ``signs`` are (T, 5), sign 0 where a cut has only three.
    """
    starts = np.zeros(len(members) + 1, np.int64)
    places, products = np.empty(10 * len(members), np.int32), np.empty(10 * len(members))
    count = 0
    for cut in range(len(members)):
        for a in range(WIDEST):
            for b in range(a):
                if signs[cut, a] != 0 and signs[cut, b] != 0:
                    first, second = members[cut, a], members[cut, b]
                    places[count] = max(first, second) * size + min(first, second)
                    products[count] = signs[cut, a] * signs[cut, b]
                    count += 1
        starts[cut + 1] = count
    return starts, places[:count], products[:count]


@compiled
def smoothed_dual(
    matrix: F64,
    members: I32,
    signs: I8,
    starts: I64,
    places: I32,
    products: F64,
    point: F64,
    smoothing: float,
    slope: F64,
    gram: F64,
) -> tuple[float, float]:
    """The smoothed dual at ``point`` = (u, w), and the bound there without regard to rounding.

    Fills ``slope`` with the gradient and ``gram`` (m, m) with the matrix X that belongs to it. The cuts come also as
    ``list_pairs`` has them.
    """
    size, cuts = len(matrix), len(members)
    slack, total = matrix.copy(), 0.0
    entries = slack.ravel()
    for i in range(size):
        slack[i, i] -= point[i]
        total += point[i]
    for cut in range(cuts):
        weight = point[size + cut]
        if weight != 0.0:
            total += weight
            for a in range(WIDEST):
                slack[members[cut, a], members[cut, a]] -= weight * abs(signs[cut, a])
            for pair in range(starts[cut], starts[cut + 1]):
                entries[places[pair]] -= weight * products[pair]
    levels, modes = np.linalg.eigh(slack)  # which reads the lower half alone
    negative, loss = 0, 0.0
    while negative < size and levels[negative] < 0.0:
        negative += 1
    factor = np.empty((negative, size))
    for mode in range(negative):
        loss += levels[mode] ** 2
        length = math.sqrt(-levels[mode] / smoothing)
        for i in range(size):
            factor[mode, i] = length * modes[i, mode]
    gram[:] = np.dot(factor.T, factor)
    values = gram.ravel()
    for i in range(size):
        slope[i] = 1.0 - gram[i, i]
    for cut in range(cuts):
        square = 0.0
        for pair in range(starts[cut], starts[cut + 1]):
            square += 2.0 * products[pair] * values[places[pair]]
        for a in range(WIDEST):
            square += abs(signs[cut, a]) * gram[members[cut, a], members[cut, a]]
        slope[size + cut] = 1.0 - square
    return total - 0.5 * loss / smoothing, total + size * min(0.0, levels[0])


@compiled
def triangles_broken(gram: F64, threshold: float, most: int) -> tuple[I32, I8, F64]:
    """Triangles with 1 - b^T X b above ``threshold``: members (T, 5), signs (T, 5), and by how much (T,).

    Of the four sign patterns of a triple at most one can be broken. The threshold is doubled until no more than
    ``most`` are left, so that they fit into memory.
    """
    size, count = len(gram), 0
    members, signs, excess = np.zeros((0, WIDEST), np.int32), np.zeros((0, WIDEST), np.int8), np.zeros(0)
    writing, done = False, False
    while not done:
        done = writing
        if writing:
            members, signs = np.zeros((count, WIDEST), np.int32), np.zeros((count, WIDEST), np.int8)
            excess, count = np.zeros(count), 0
        for i in range(size):
            for j in range(i + 1, size):
                for k in range(j + 1, size):
                    first, second, third = gram[i, j], gram[i, k], gram[j, k]
                    lowest, sign_j, sign_k = first + second + third, 1, 1
                    if first - second - third < lowest:
                        lowest, sign_j, sign_k = first - second - third, 1, -1
                    if second - first - third < lowest:
                        lowest, sign_j, sign_k = second - first - third, -1, 1
                    if third - first - second < lowest:
                        lowest, sign_j, sign_k = third - first - second, -1, -1
                    if -2.0 - 2.0 * lowest > threshold:
                        if writing:
                            members[count, 0], members[count, 1], members[count, 2] = i, j, k
                            signs[count, 0], signs[count, 1], signs[count, 2] = 1, sign_j, sign_k
                            excess[count] = -2.0 - 2.0 * lowest
                        count += 1
        if not done:
            writing = count <= most
            if not writing:
                threshold, count = 2.0 * threshold, 0
    return members, signs, excess


@compiled
def widened(gram: F64, members: I32, signs: I8) -> tuple[I32, I8, F64]:
    """Every triangle with the two members that break it most: members (T, 5), signs (T, 5), excess 1 - b^T X b (T,)."""
    cuts, size = len(members), len(gram)
    wide, wide_signs, excess = members.copy(), signs.copy(), np.empty(cuts)
    along = np.empty(size)
    for cut in range(cuts):
        most, square = -np.inf, 0.0
        for i in range(size):
            along[i] = 0.0
            for a in range(3):
                along[i] += signs[cut, a] * gram[i, members[cut, a]]
        for a in range(3):
            square += signs[cut, a] * along[members[cut, a]]
            along[members[cut, a]] = np.nan
        for i in range(size):
            for j in range(i + 1, size):
                same, opposite = abs(along[i] + along[j]) - gram[i, j], abs(along[i] - along[j]) + gram[i, j]
                if max(same, opposite) > most:  # never where a member comes twice, which is nan
                    most = max(same, opposite)
                    wide[cut, 3], wide[cut, 4] = i, j
        i, j = wide[cut, 3], wide[cut, 4]
        relation = 1 if abs(along[i] + along[j]) - gram[i, j] == most else -1
        wide_signs[cut, 3] = -1 if along[i] + relation * along[j] > 0.0 else 1
        wide_signs[cut, 4] = relation * wide_signs[cut, 3]
        excess[cut] = 2.0 * most - square - 1.0
    return wide, wide_signs, excess
