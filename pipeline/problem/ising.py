"""WHAT is solved: a sparse spin glass.

The convention of the whole program, stated here once:

    E(s) = offset + sum_i h_i s_i + sum_{i<j} J_ij s_i s_j,    s_i in {+1, -1},  minimised.

A positive coupling J_ij favours opposite spins; a positive field h_i favours s_i = -1. A MaxCut problem with edge
weights w becomes J = w/2 with offset -W/2 (W the sum of all weights), so that E = -cut.
"""

from __future__ import annotations

import hashlib
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Any, NamedTuple, Self

import numpy as np
import numpy.typing as npt
from scipy import sparse

if TYPE_CHECKING:
    import networkx as nx

    from patchwalk.problem.meanings import Encoding

SIGN_SENTENCE = "energy is minimised; a positive coupling favours opposite spins"


class Kind(NamedTuple):
    """What the numbers of a file mean, and the words for the user's own objective."""

    objective: str
    sign: int
    sentence: str


KINDS: Mapping[str, Kind] = {
    "ising": Kind("energy", 1, f"couplings and fields of the energy itself; {SIGN_SENTENCE}"),
    "maxcut": Kind("cut", -1, "weights of edges, maximise the weight cut; energy = -cut, with coupling = weight/2"),
    "beacons": Kind("interference", 1, "two channels to share; energy = interference, spin +1 is channel A"),
    "qubo": Kind("value", 1, "a quadratic form of bits, minimised; energy = its value, spin -1 is bit 1"),
    "max2sat": Kind("satisfied", -1, "clauses of one or two literals, satisfy most weight; energy = -satisfied"),
    "max3sat": Kind("satisfied", -1, "clauses of up to three literals, satisfy most weight; energy = -satisfied"),
    "partition": Kind("squared_difference", 1, "numbers split into two parts; energy = (difference of the sums)^2"),
    "independent_set": Kind("weight", -1, "vertices no two of which are joined, of most weight; energy = -weight"),
    "vertex_cover": Kind("weight", 1, "vertices that touch every edge, of least weight; energy = weight"),
    "colouring": Kind("conflicts", 1, "a colour for each vertex; energy = edges whose ends have one colour"),
    "balanced_partition": Kind("cut", 1, "two parts of equal size, least weight cut; energy = cut"),
    "constrained": Kind("cost", 1, "named choices under constraints, least cost; energy = cost where all are kept"),
}


class ProblemError(ValueError):
    """A problem, or the file that holds it, that cannot be used; the message says where and what to do."""


def known_kind(kind: str) -> Kind:
    """The entry of ``KINDS``; raises :class:`ProblemError` with the possible words."""
    if kind not in KINDS:
        raise ProblemError(f"kind {kind!r} is not known; it is one of: {', '.join(KINDS)}")
    return KINDS[kind]


@dataclass(frozen=True, eq=False)
class Problem:
    """A spin glass on ``n`` spins with symmetric sparse couplings.

    ``row_starts`` i64 (n+1,), ``neighbours`` i32 (nnz,) and ``couplings`` f64 (nnz,) are the rows of the coupling
    matrix, each pair in both directions, neighbours rising within a row; ``fields`` f64 (n,); ``offset`` in energy
    units. ``names`` are the user's own words for the spins, ``kind`` one of ``KINDS``, ``notes`` what was noticed
    while the problem was read. Arrays are read-only.

    ``groups`` are sets of spins, each an i32 array, rising: in every configuration that is an answer, exactly one spin
    of each is -1. So a search may move the -1 inside a group instead of flipping spins one by one. Sets may share
    spins, as the rows and columns of an assignment do. ``encoding`` knows what a configuration means to the user
    (None where spins are the user's own, as for ``ising`` and ``maxcut``).

    Raises :class:`ProblemError` for NaN, infinities, a coupling of a spin with itself, couplings that are not
    symmetric, and groups of fewer than two spins, of spins that do not exist or of one spin twice.
    """

    row_starts: npt.NDArray[np.int64]
    neighbours: npt.NDArray[np.int32]
    couplings: npt.NDArray[np.float64]
    fields: npt.NDArray[np.float64]
    offset: float = 0.0
    kind: str = "ising"
    names: tuple[str, ...] | None = None
    notes: tuple[str, ...] = ()
    details: Mapping[str, Any] = field(default_factory=dict)
    groups: tuple[npt.NDArray[np.int32], ...] = ()
    encoding: Encoding | None = None

    def __post_init__(self) -> None:
        known_kind(self.kind)
        arrays = {"row_starts": np.int64, "neighbours": np.int32, "couplings": np.float64, "fields": np.float64}
        for name, dtype in arrays.items():
            array = np.array(getattr(self, name), dtype=dtype, order="C")
            if array.ndim != 1:
                raise ProblemError(f"{name} has shape {array.shape}, expected one dimension")
            array += dtype(0)  # no negative zeros, so that equal problems have equal bytes
            array.flags.writeable = False
            object.__setattr__(self, name, array)
        object.__setattr__(self, "offset", float(self.offset) + 0.0)
        object.__setattr__(self, "groups", tuple(self._group(members) for members in self.groups))
        self._check()

    def _group(self, members: npt.ArrayLike) -> npt.NDArray[np.int32]:
        """A group as it is kept: rising and read-only; raises :class:`ProblemError`."""
        given = np.asarray(members).ravel()
        group = np.unique(given)
        if len(group) < 2 or len(group) < len(given) or group[0] < 0 or group[-1] >= len(self.fields):
            last = len(self.fields) - 1
            raise ProblemError(f"group {given[:8].tolist()}: give two or more different spins of 0 to {last}")
        kept = group.astype(np.int32)
        kept.flags.writeable = False
        return kept

    def _check(self) -> None:
        size = len(self.fields)
        if size == 0:
            raise ProblemError("the problem has no spins; give at least one coupling or field")
        if len(self.row_starts) != size + 1 or self.row_starts[-1] != len(self.couplings):
            raise ProblemError(f"row_starts has {len(self.row_starts)} entries, expected {size + 1} for {size} spins")
        if self.names is not None and len(self.names) != size:
            raise ProblemError(f"{len(self.names)} names for {size} spins; give one name each, or none")
        for name, values in (("couplings", self.couplings), ("fields", self.fields)):
            bad = np.flatnonzero(~np.isfinite(values))
            if len(bad):
                raise ProblemError(f"{name}: entry {bad[0]} is {values[bad[0]]}; only finite numbers make an energy")
        if not np.isfinite(self.offset):
            raise ProblemError(f"offset is {self.offset}; only finite numbers make an energy")
        rows = np.repeat(np.arange(size), np.diff(self.row_starts))
        loops = np.flatnonzero(rows == self.neighbours)
        if len(loops):
            raise ProblemError(
                f"spin {rows[loops[0]]} is coupled to itself; s*s is always 1, so put that number into the offset"
            )
        mirrored = self.matrix.T.tocsr()
        mirrored.sort_indices()
        if not (
            np.array_equal(mirrored.indptr, self.row_starts)
            and np.array_equal(mirrored.indices, self.neighbours)
            and np.array_equal(mirrored.data, self.couplings)
        ):
            raise ProblemError("the couplings are not symmetric; give J_ij = J_ji, or each pair once to from_arrays")

    @classmethod
    def from_arrays(
        cls,
        heads: npt.ArrayLike,
        tails: npt.ArrayLike,
        weights: npt.ArrayLike,
        *,
        size: int | None = None,
        fields: npt.ArrayLike | None = None,
        offset: float = 0.0,
        kind: str = "ising",
        names: Iterable[str] | None = None,
        notes: Iterable[str] = (),
        details: Mapping[str, Any] | None = None,
        groups: Iterable[npt.ArrayLike] = (),
        encoding: Encoding | None = None,
    ) -> Self:
        """A problem from pairs: ``weights[e]`` couples spins ``heads[e]`` and ``tails[e]`` (counted from 0).

        A pair given more than once, in either order, is summed. With ``kind="maxcut"`` the numbers are edge weights.
        Raises :class:`ProblemError` for indices outside ``0 .. size-1``, NaN, infinities and self-couplings.

        >>> triangle = Problem.from_arrays([0, 1, 2], [1, 2, 0], [1, 1, 1])
        >>> triangle.energy([1, -1, 1])
        -1.0
        """
        first, second = np.asarray(heads, np.int64).ravel(), np.asarray(tails, np.int64).ravel()
        values = np.asarray(weights, np.float64).ravel()
        if not len(first) == len(second) == len(values):
            raise ProblemError(
                f"{len(first)} heads, {len(second)} tails and {len(values)} weights; give as many of each"
            )
        pairs = np.concatenate([first, second])
        if size is None:
            size = len(np.asarray(fields)) if fields is not None else int(pairs.max(initial=-1)) + 1
        outside = pairs[(pairs < 0) | (pairs >= size)]
        if len(outside):
            raise ProblemError(f"spin {outside[0]} does not exist: {size} spins are numbered 0 to {size - 1}")
        # one triangle first, so that both directions of a repeated pair hold the very same sum
        half = sparse.csr_array((values, (np.minimum(first, second), np.maximum(first, second))), shape=(size, size))
        half.sum_duplicates()
        if kind == "maxcut":
            half.data /= 2
        half.eliminate_zeros()
        if kind == "maxcut":
            offset -= float(half.data.sum())
        matrix = (half + half.T).tocsr()
        return cls(
            row_starts=np.asarray(matrix.indptr, np.int64),
            neighbours=matrix.indices,
            couplings=matrix.data,
            fields=np.zeros(size) if fields is None else np.asarray(fields, np.float64),
            offset=offset,
            kind=kind,
            names=None if names is None else tuple(names),
            notes=tuple(notes),
            details={} if details is None else details,
            groups=tuple(np.asarray(group, np.int32) for group in groups),
            encoding=encoding,
        )

    @classmethod
    def from_networkx(
        cls, graph: nx.Graph, *, kind: str = "maxcut", weight: str = "weight", field: str = "field"
    ) -> Self:
        """A problem from a graph: edge attribute ``weight`` (1 where absent), node attribute ``field`` (0 where
        absent).

        Spins come in the order of ``graph.nodes`` and are named by them; parallel edges are summed. Raises
        :class:`ProblemError` for a self-loop, or for fields under ``kind="maxcut"``.
        """
        nodes = list(graph.nodes)
        place = {node: index for index, node in enumerate(nodes)}
        edges = [(place[u], place[v], float(data.get(weight, 1.0))) for u, v, data in graph.edges(data=True)]
        fields = np.array([float(data.get(field, 0.0)) for _, data in graph.nodes(data=True)])
        if kind == "maxcut" and np.any(fields):
            node = nodes[int(np.flatnonzero(fields)[0])]
            raise ProblemError(f"node {node!r} has a field, which a MaxCut problem cannot hold; use kind='ising'")
        heads, tails, weights = zip(*edges, strict=True) if edges else ((), (), ())
        names = [str(node) for node in nodes]
        return cls.from_arrays(heads, tails, weights, size=len(nodes), fields=fields, kind=kind, names=names)

    def __len__(self) -> int:
        return len(self.fields)

    def __repr__(self) -> str:
        return f"Problem({self.summary()})"

    @property
    def coupling_count(self) -> int:
        """Pairs of spins that are coupled."""
        return len(self.couplings) // 2

    @cached_property
    def matrix(self) -> sparse.csr_array:
        """The couplings as a sparse symmetric matrix (n, n) that shares their memory."""
        return sparse.csr_array((self.couplings, self.neighbours, self.row_starts), shape=(len(self), len(self)))

    @cached_property
    def field_scale(self) -> float:
        """The size of a typical local field: the median over spins of sqrt(h_i^2 + sum_j J_ij^2), free spins left out.

        The median, so that a few huge penalties do not set the temperature for everybody else.
        """
        squares = np.square(self.fields)
        squares += np.asarray(self.matrix.power(2).sum(axis=1)).ravel()
        return float(np.sqrt(np.median(squares[squares > 0]))) if np.any(squares) else 0.0

    @cached_property
    def tie_tolerance(self) -> float:
        """Two energies closer than this count as equal: 1e-9 (sum |J| + sum |h|)."""
        return 1e-9 * float(np.abs(self.couplings).sum() / 2 + np.abs(self.fields).sum())

    @cached_property
    def fingerprint(self) -> str:
        """A hash of couplings, fields, offset, kind and groups: equal problems, equal fingerprints."""
        digest = hashlib.sha256(f"{self.kind} {self.offset!r}".encode())
        for array in (self.row_starts, self.neighbours, self.couplings, self.fields):
            digest.update(array.tobytes())
        for group in self.groups:
            digest.update(f"group of {len(group)}".encode() + group.tobytes())
        return digest.hexdigest()

    def spins_from(self, values: Sequence[int] | npt.ArrayLike) -> npt.NDArray[np.int8]:
        """The configuration as i8 (n,); raises :class:`ProblemError` for a wrong length or a value but +1 and -1."""
        given = np.asarray(values)
        if given.shape != (len(self),):
            raise ProblemError(f"the configuration has shape {given.shape}, the problem has {len(self)} spins")
        wrong = np.flatnonzero((given != 1) & (given != -1))
        if len(wrong):
            raise ProblemError(f"spin {wrong[0]} of the configuration is {given[wrong[0]]}; spins are +1 or -1")
        return np.ascontiguousarray(given, np.int8)

    def local_fields(self, spins: npt.ArrayLike) -> npt.NDArray[np.float64]:
        """h_i + sum_j J_ij s_j for every spin, f64 (n,)."""
        return np.asarray(self.fields + self.matrix @ np.asarray(spins, np.float64))

    def energy(self, spins: npt.ArrayLike) -> float:
        """E(s), offset included, in energy units."""
        values = np.asarray(spins, np.float64)
        return float(self.offset + self.fields @ values + 0.5 * (values @ (self.matrix @ values)))

    def flip_change(self, spins: npt.ArrayLike, spin: int) -> float:
        """By how much E rises when one spin is flipped: -2 s_i (h_i + sum_j J_ij s_j)."""
        values = np.asarray(spins, np.float64)
        row = slice(self.row_starts[spin], self.row_starts[spin + 1])
        local = self.fields[spin] + self.couplings[row] @ values[self.neighbours[row]]
        return float(-2.0 * values[spin] * local)

    def objective(self, energy: float) -> float:
        """The user's own objective at this energy (the cut for ``maxcut``)."""
        return KINDS[self.kind].sign * energy + 0.0

    def energy_of(self, objective: float) -> float:
        """The energy at which the user's own objective takes this value."""
        return KINDS[self.kind].sign * objective + 0.0

    @property
    def objective_name(self) -> str:
        """The word for the user's objective: ``energy``, ``cut`` ..."""
        return KINDS[self.kind].objective

    def summary(self) -> str:
        """One line: spins, couplings, fields, kind and sign."""
        fielded = int(np.count_nonzero(self.fields))
        fields = "no fields" if fielded == 0 else f"{fielded:,} field{'s' * (fielded != 1)}"
        return (
            f"{len(self):,} spins, {self.coupling_count:,} couplings, {fields}; "
            f"kind {self.kind}: {KINDS[self.kind].sentence}"
        )
