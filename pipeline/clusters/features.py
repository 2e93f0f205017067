"""What a cluster looks like: numbers by which calls are told apart, when they are made and when they are judged.

The cheap ones take one look at every coupling and may stand in the condition of a caller; the exact ones come from all
2^k energies. Those that depend on the cluster's own spins must not decide anything while the Boltzmann law is sampled.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import NamedTuple

import numpy as np

from patchwalk.clusters.landscape import spectral_gaps, surveys
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64, ClusterBatch


class Feature(NamedTuple):
    """What a feature says, whether it depends on the incumbent spins, and whether it costs next to nothing."""

    sentence: str
    looks_at_spins: bool
    cheap: bool


FEATURES: Mapping[str, Feature] = {
    "frustration": Feature(
        "share of the couplings inside the cluster that the incumbent violates, J_ij s_i s_j > 0; 0 where there are "
        "none (of bonds, not of closed loops, of which a cluster has too many)",
        looks_at_spins=True,
        cheap=True,
    ),
    "strain": Feature(
        "share of the weight of couplings and fields, |J| and |h|, that the incumbent violates; 0 where there is none",
        looks_at_spins=True,
        cheap=True,
    ),
    "pull": Feature(
        "pull of the boundary: sum of |h| over the sum of |J| at all spins; sum_i |h_i| / sum_i sum_j |J_ij|, with the "
        "frozen boundary folded into h; infinite for free spins in fields, 0 where there is neither",
        looks_at_spins=False,
        cheap=True,
    ),
    "degree": Feature("couplings inside the cluster per spin, counted at both ends", looks_at_spins=False, cheap=True),
    "distance": Feature(
        "Hamming distance from the incumbent to the nearest minimum, in spins", looks_at_spins=True, cheap=False
    ),
    "excess": Feature("energy of the incumbent above the minimum, in energy units", looks_at_spins=True, cheap=False),
    "stable": Feature("number of configurations whose energy no single flip lowers", looks_at_spins=False, cheap=False),
    "degeneracy": Feature("number of minima", looks_at_spins=False, cheap=False),
    "gap": Feature(
        "gap between the two lowest levels of the walk's Hamiltonian on the hypercube, in energy units",
        looks_at_spins=False,
        cheap=False,
    ),
}

CHEAP = tuple(name for name, feature in FEATURES.items() if feature.cheap)

BONDS, VIOLATED, WEIGHT, VIOLATED_WEIGHT, FIELD, VIOLATED_FIELD = 0, 1, 2, 3, 4, 5
"""Columns of the sums over a cluster: numbers of couplings, sums of |J|, sums of |h|, each in all and violated."""


def cheap_features(batch: ClusterBatch, names: Sequence[str] = CHEAP) -> dict[str, F64]:
    """The cheap features of these names, f64 (B,) each; see ``FEATURES`` for what they say.

    >>> pair = ClusterBatch(fields=[[0.5, 0.0]], spins=[[1, 1]], temperature=[1.0], seeds=[1],
    ...                     couplings=[[[0.0, 1.0], [1.0, 0.0]]])
    >>> {name: float(values[0]) for name, values in cheap_features(pair).items()}
    {'frustration': 1.0, 'strain': 1.0, 'pull': 0.25, 'degree': 1.0}
    """
    sums = np.zeros((len(batch), 6))
    if batch.couplings is not None:
        _sum_dense(batch.fields, batch.spins, batch.couplings, sums)
    elif batch.edges is not None:
        _sum_edges(batch.fields, batch.spins, batch.edges.offsets, batch.edges.pairs, batch.edges.weights, sums)
    return {name: _cheap(name, sums, batch.size) for name in names}


def exact_features(batch: ClusterBatch, *, gap: bool = False) -> dict[str, F64]:
    """The features that need all energies, f64 (B,) each, and the ``gap`` only where asked.

    Raises ``ValueError`` for clusters above ``EXACT_LIMIT`` spins, or ``GAP_LIMIT`` with the gap.
    """
    found = {name: values for name, values in surveys(batch).items() if name in FEATURES}
    return found | {"gap": spectral_gaps(batch)} if gap else found


def _cheap(name: str, sums: F64, size: int) -> F64:
    if name == "frustration":
        return _ratio(sums[:, VIOLATED], sums[:, BONDS])
    if name == "strain":
        return _ratio(sums[:, VIOLATED_WEIGHT] + sums[:, VIOLATED_FIELD], sums[:, WEIGHT] + sums[:, FIELD])
    if name == "pull":
        with np.errstate(divide="ignore"):
            return np.divide(sums[:, FIELD], 2.0 * sums[:, WEIGHT], out=np.zeros(len(sums)), where=sums[:, FIELD] > 0.0)
    if name == "degree":
        return 2.0 * sums[:, BONDS] / size
    raise ValueError(f"{name} is no cheap feature; those are: {', '.join(CHEAP)}")


def _ratio(part: F64, whole: F64) -> F64:
    return np.divide(part, whole, out=np.zeros(len(part)), where=whole > 0.0)


@compiled
def _sum_dense(fields: F64, spins: I8, couplings: F64, sums: F64) -> None:
    for row in range(len(fields)):
        _add_fields(fields[row], spins[row], sums[row])
        for i in range(fields.shape[1]):
            for j in range(i):
                _add_coupling(couplings[row, i, j], spins[row, i] * spins[row, j], sums[row])


@compiled
def _sum_edges(fields: F64, spins: I8, offsets: I64, pairs: I32, weights: F64, sums: F64) -> None:
    for row in range(len(fields)):
        _add_fields(fields[row], spins[row], sums[row])
        for edge in range(offsets[row], offsets[row + 1]):
            _add_coupling(weights[edge], spins[row, pairs[edge, 0]] * spins[row, pairs[edge, 1]], sums[row])


@compiled
def _add_coupling(coupling: float, alike: int, sums: F64) -> None:
    if coupling != 0.0:
        violated = coupling * alike > 0.0
        sums[BONDS] += 1.0
        sums[VIOLATED] += violated
        sums[WEIGHT] += abs(coupling)
        sums[VIOLATED_WEIGHT] += abs(coupling) * violated


@compiled
def _add_fields(fields: F64, spins: I8, sums: F64) -> None:
    for i in range(len(fields)):
        sums[FIELD] += abs(fields[i])
        sums[VIOLATED_FIELD] += abs(fields[i]) * (fields[i] * spins[i] > 0.0)
