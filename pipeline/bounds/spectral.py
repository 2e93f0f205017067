"""Bounds by positive semidefinite matrices: what such a certificate is, its check, and the plainest of them.

Fields become couplings to one extra spin, the last *vertex*, so that E(s) - offset = x^T C x with x = (s, 1) and
C_ij = J_ij / 2, C_in = h_i / 2; without fields there is no extra vertex. Where vertices are tied together in groups,
x = S y with a signed membership matrix S, and M = S^T C S takes the place of C. If

    A = M - Diag(u) - sum_t w_t b_t b_t^T

is positive semidefinite, with w_t >= 0 and b_t holding an odd number of entries +1 and -1, then every y of signs has

    E >= offset + sum(u) + sum(w),    because y_i^2 = 1 and (b_t^T y)^2, the square of an odd number, is at least 1.

The check is rigorous: a Cholesky factorisation in floating point that runs to its end proves
lambda_min(A) > -g / (1 - g) trace(A), g = (m + 1) eps / (1 - (m + 1) eps), whatever the order of its sums (Demmel,
LAPACK Working Note 14, 1989; Rump, BIT Numer. Math. 46 (2006) 433; both from memory). Rounding while A is put together
is bounded entry by entry. Both make up the margin, taken off once per group; constants are rounded up to 4 and 2.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import linalg, sparse

from patchwalk.bounds.certificate_error import CertificateError
from patchwalk.problem.ising import Problem

F64 = npt.NDArray[np.float64]
I8 = npt.NDArray[np.int8]
I32 = npt.NDArray[np.int32]

MOST_VERTICES = 6000
"""Matrices are dense here; this one takes 288 MB."""

WIDEST = 5
"""Members of the widest cuts."""

UNIT = 2.0**-53


@dataclass(frozen=True, eq=False)
class SquareCertificate:
    """What proves a bound on E over all configurations that respect the groups, checked by ``checked_bound``.

    ``groups`` i32 (v,) and ``signs`` i8 (v,): vertex a is ``signs[a]`` times the sign of group ``groups[a]``; v is the
    number of spins, plus one if any has a field (see the module). ``diagonal`` f64 (m,) is u, one entry a group.
    ``members`` i32 (T, 5), ``member_signs`` i8 (T, 5) and ``weights`` f64 (T,) are the b_t and w_t: an odd number of
    different groups with signs +1 or -1, the rest of the row with sign 0, and a weight >= 0.
    """

    groups: I32
    signs: I8
    diagonal: F64
    members: I32
    member_signs: I8
    weights: F64


@dataclass(frozen=True, eq=False)
class SpectralBound:
    """``lower_bound`` on E, and the certificate that proves it."""

    lower_bound: float
    certificate: SquareCertificate


def vertex_count(problem: Problem) -> int:
    """Spins, plus the extra one if there are fields."""
    return len(problem) + bool(np.any(problem.fields))


def vertex_matrix(problem: Problem) -> sparse.csr_array:
    """C of the module's first paragraph, sparse symmetric (v, v), sorted rows."""
    half = sparse.csr_array(problem.matrix / 2)
    if np.any(problem.fields):
        column, corner = sparse.csr_array(problem.fields[:, None] / 2), sparse.csr_array((1, 1))
        half = sparse.csr_array(sparse.vstack([sparse.hstack([half, column]), sparse.hstack([column.T, corner])]))
    half.sort_indices()
    return half


def refuse_large(problem: Problem) -> None:
    """Raise ``ValueError`` for a problem whose dense matrix is out of reach."""
    if vertex_count(problem) > MOST_VERTICES:
        raise ValueError(
            f"semidefinite bounds: the problem has {vertex_count(problem)} spins (one carries the fields), dense "
            f"matrices stop at {MOST_VERTICES}; use the cycle bound"
        )


def trivial_groups(problem: Problem) -> tuple[I32, I8]:
    """Every vertex a group of its own."""
    count = vertex_count(problem)
    return np.arange(count, dtype=np.int32), np.ones(count, np.int8)


def without_cuts(problem: Problem, diagonal: F64) -> SquareCertificate:
    """The certificate of a diagonal alone, for the whole problem."""
    groups, signs = trivial_groups(problem)
    no_members, no_signs = np.empty((0, WIDEST), np.int32), np.empty((0, WIDEST), np.int8)
    return SquareCertificate(groups, signs, diagonal, no_members, no_signs, np.empty(0))


def grouped_matrix(problem: Problem, groups: I32, signs: I8, size: int) -> tuple[F64, F64]:
    """M, dense (m, m), and a bound on the rounding error of each of its entries."""
    matrix = vertex_matrix(problem)
    if np.array_equal(groups, np.arange(size)) and np.all(signs == 1):
        return matrix.toarray(), np.zeros((size, size))
    vertices = np.arange(len(groups))
    tie = sparse.csr_array((signs.astype(np.float64), (vertices, groups)), shape=(len(groups), size))
    counts = np.bincount(groups, minlength=size)
    merged = np.asarray((tie.T @ matrix @ tie).toarray())
    magnitude = np.asarray((abs(tie).T @ abs(matrix) @ abs(tie)).toarray())
    # an entry is a sum over pairs of members: exact while both groups are single vertices
    return (merged + merged.T) / 2, 2 * UNIT * (np.outer(counts, counts) - 1) * magnitude


def slack_matrix(matrix: F64, certificate: SquareCertificate) -> tuple[F64, F64]:
    """A without regard to rounding, and a bound on what rounding did to each of its entries."""
    size = len(certificate.diagonal)
    slack, magnitude, terms = matrix.copy(), np.abs(matrix), np.zeros((size, size))
    members, signs, weights = certificate.members, certificate.member_signs.astype(np.float64), certificate.weights
    for first in range(WIDEST):
        for second in range(WIDEST):
            real = (signs[:, first] != 0) & (signs[:, second] != 0)
            place = (members[real, first], members[real, second])
            np.subtract.at(slack, place, (weights * signs[:, first] * signs[:, second])[real])
            np.add.at(magnitude, place, weights[real])
            np.add.at(terms, place, 1.0)
    corner = np.arange(size)
    slack[corner, corner] -= certificate.diagonal
    magnitude[corner, corner] += np.abs(certificate.diagonal)
    terms[corner, corner] += 1
    return slack, 2 * UNIT * terms * (1 + UNIT * terms) * magnitude


def margin_of(slack: F64, error: F64) -> float:
    """By how much lambda_min of the true matrix may lie below 0 if Cholesky's factorisation of ``slack`` succeeds.

    Numbers that underflow are covered by the last term.
    """
    size = len(slack)
    rounding = 2 * float(error.sum(axis=1).max(initial=0.0))
    return rounding + 4 * (size + 2) * UNIT * float(np.abs(np.diag(slack)).sum()) + size * size * 1e-300


def factorises(slack: F64) -> bool:
    """Whether Cholesky's factorisation runs to its end."""
    _, failed = linalg.lapack.dpotrf(slack, lower=1, clean=0)
    return int(failed) == 0


def bound_below(offset: float, certificate: SquareCertificate, margin: float) -> float:
    """offset + sum(u) + sum(w) - m * margin, rounded downwards."""
    loss = math.nextafter(len(certificate.diagonal) * margin, math.inf)
    total = math.fsum([offset, *certificate.diagonal.tolist(), *certificate.weights.tolist(), -loss])
    return math.nextafter(total, -math.inf)


def checked_bound(problem: Problem, certificate: SquareCertificate) -> float:
    """The lower bound that the certificate proves, from the problem and the certificate alone.

    Raises :class:`CertificateError` with the reason where it proves nothing.
    """
    _check_layout(problem, certificate)
    size = len(certificate.diagonal)
    matrix, merging_error = grouped_matrix(problem, certificate.groups, certificate.signs, size)
    slack, error = slack_matrix(matrix, certificate)
    if not factorises(slack):
        raise CertificateError(f"the slack matrix of {size} groups is not positive definite, so nothing is proved")
    return bound_below(problem.offset, certificate, margin_of(slack, error + merging_error))


def _check_layout(problem: Problem, certificate: SquareCertificate) -> None:
    count, size, cuts = vertex_count(problem), len(certificate.diagonal), len(certificate.weights)
    if certificate.groups.shape != (count,) or certificate.signs.shape != (count,):
        raise CertificateError(f"groups and signs need {count} entries, one for each vertex of the problem")
    if set(certificate.groups.tolist()) != set(range(size)):
        raise CertificateError(f"groups must use every number from 0 to {size - 1}, the length of the diagonal")
    if np.any(np.abs(certificate.signs) != 1) or np.any(np.abs(certificate.member_signs) > 1):
        raise CertificateError("signs must be +1 or -1, in cuts also 0")
    if certificate.members.shape != (cuts, WIDEST) or certificate.member_signs.shape != (cuts, WIDEST):
        raise CertificateError(f"{cuts} weights need members and member_signs of shape ({cuts}, {WIDEST})")
    if cuts and (certificate.members.min() < 0 or certificate.members.max() >= size):
        raise CertificateError(f"the members of a cut must be groups from 0 to {size - 1}")
    used = certificate.member_signs != 0
    told_apart = np.sort(np.where(used, certificate.members, -1 - np.arange(WIDEST)), axis=1)
    if np.any(used.sum(axis=1) % 2 == 0) or np.any(told_apart[:, 1:] == told_apart[:, :-1]):
        raise CertificateError("a cut must have an odd number of members, all different")
    if not (np.all(certificate.weights >= 0) and np.all(np.isfinite(certificate.weights))):
        raise CertificateError("a weight is negative or not finite")
    if not np.all(np.isfinite(certificate.diagonal)):
        raise CertificateError("an entry of the diagonal is not finite")


def settled(problem: Problem, proposed: SquareCertificate) -> tuple[float, SquareCertificate]:
    """The proposed certificate with its diagonal shifted evenly until the check succeeds, and the bound it proves.

    The shift is the smallest eigenvalue of A, which makes the bound as high as an even shift can, less rounding.
    """
    size = len(proposed.diagonal)
    matrix, merging_error = grouped_matrix(problem, proposed.groups, proposed.signs, size)
    slack, error = slack_matrix(matrix, proposed)
    lowest = float(linalg.eigh(slack, eigvals_only=True, subset_by_index=(0, 0))[0])
    step = max(margin_of(slack, error + merging_error), UNIT * float(np.abs(slack).sum(axis=1).max()))
    while True:
        certificate = SquareCertificate(
            proposed.groups, proposed.signs, proposed.diagonal + (lowest - step),
            proposed.members, proposed.member_signs, proposed.weights,
        )  # fmt: skip
        slack, error = slack_matrix(matrix, certificate)
        if factorises(slack):
            return bound_below(problem.offset, certificate, margin_of(slack, error + merging_error)), certificate
        step = 4 * step + 1e-290


def spectral_bound(problem: Problem) -> SpectralBound:
    """v lambda_min(C) + offset: one eigenvalue, no optimisation. Weak, but it costs O(n^3) once and cannot fail.

    On a complete graph with equal couplings, and on an odd cycle, it is already the semidefinite bound (Goemans &
    Williamson, J. ACM 42 (1995) 1115). Raises ``ValueError`` beyond ``MOST_VERTICES``.

    >>> triangle = Problem.from_arrays([0, 1, 2], [1, 2, 0], [1, 1, 1])
    >>> round(spectral_bound(triangle).lower_bound, 6)
    -1.5
    """
    refuse_large(problem)
    bound, certificate = settled(problem, without_cuts(problem, np.zeros(vertex_count(problem))))
    return SpectralBound(bound, certificate)
