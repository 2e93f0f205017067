"""What proves a lower bound, as plain data, and the check of it from the problem alone.

This module and what it checks with (:mod:`patchwalk.bounds.cycle_certificate` and, late, the checks of semidefinite
trees and clusters, and the matching that is made once more) import the problem alone: nothing that searches.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import Any

import numpy.typing as npt

from patchwalk.bounds.certificate_error import CertificateError
from patchwalk.bounds.cycle_certificate import CycleTree
from patchwalk.problem.ising import Problem


@dataclass(frozen=True, eq=False)
class Certificate:
    """A proof that no configuration of the problem with this fingerprint lies below ``bound``.

    ``method`` says which: ``cycles`` (a tree of odd-cycle cuts), ``semidefinite``
    (:mod:`patchwalk.bounds.dense_certificate` says what its arrays hold), ``clusters``
    (:mod:`patchwalk.bounds.cluster_certificate`) or ``matching`` (planar, made once more by the check).

    ``cycles``: ``pairs`` i32 (m, 2), the edges by their spins, a field being a pair with spin n; cuts as ``cut_starts``
    i64 (c+1,), ``cut_edges`` i32 and ``cut_odd`` i8; nodes as ``parents`` i64 (N,), -1 for the first,
    ``split_edges`` i32 (N,), ``split_sides`` i8 (N,), how the node differs from its parent (0 the pair agrees, 1 it
    differs), ``outcomes`` i8 (N,), ``node_bounds`` f64 (N,); multipliers as ``dual_starts`` i64 (N+1,), ``dual_cuts``
    i32 and ``duals`` f64.
    """

    fingerprint: str
    method: str
    bound: float
    arrays: dict[str, npt.NDArray[Any]] = field(default_factory=dict)


def check(problem: Problem, certificate: Certificate) -> float:
    """The bound that the certificate proves, which is the one it states.

    Raises :class:`CertificateError` with the reason where it belongs to another problem, is incomplete, has a
    cut or a multiplier that proves nothing, or proves less than it states.
    """
    if certificate.fingerprint != problem.fingerprint:
        raise CertificateError("the certificate belongs to another problem: the fingerprints differ")
    if not math.isfinite(certificate.bound):
        raise CertificateError(f"the certificate states the bound {certificate.bound}, which is no number to prove")
    try:
        proved = _proved(problem, certificate)
    except (ValueError, KeyError, IndexError, OverflowError) as error:
        raise CertificateError(f"the certificate ({certificate.method}) does not hold: {error}") from error
    if not proved >= certificate.bound:
        raise CertificateError(
            f"{certificate.method} gives {proved:.12g} only, the certificate states {certificate.bound:.12g}"
        )
    return certificate.bound


def _proved(problem: Problem, certificate: Certificate) -> float:
    """The bound that a certificate proves, by its method."""
    if certificate.method == "cycles":
        return CycleTree(problem, certificate.bound, certificate.arrays).proved()
    if certificate.method == "matching":
        from patchwalk.bounds.planar import planar_minimum

        return planar_minimum(problem).lower_bound
    if certificate.method == "semidefinite":
        from patchwalk.bounds.dense_certificate import checked_tree

        return checked_tree(problem, certificate.arrays)
    if certificate.method == "clusters":
        from patchwalk.bounds.cluster_certificate import checked_clusters

        return checked_clusters(problem, certificate.arrays)
    raise CertificateError("this method is not known here; it is cycles, semidefinite, clusters or matching")
