"""The invented coast of Quillmere: where its beacons stand and what they are called, drawn from a seed."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy.spatial import cKDTree

from patchwalk.problem.beacons import BeaconMap

F64 = npt.NDArray[np.float64]

REACH = 5.0  # km at which interference ends
NEAREST_WEIGHT = 10.0  # interference of two beacons on one spot
SHORE_PER_BEACON = 0.46  # km of coast
CANDIDATES = 12  # the loneliest of so many spots gets the next beacon: spacing as even as a planner would choose
ISLAND_EVERY = 24.0  # km of coast
ISLAND_SHARE = 0.25
ISLAND_SPREAD = 2.2  # km
MATE_SHARE = 0.05
PREFERENCE_SHARE = 0.2
LARGEST_PREFERENCE = 4.0

# fmt: off
STARTS = ("Quill", "Velm", "Thrav", "Ostr", "Brinn", "Dunv", "Corl", "Fenn",
          "Hesk", "Jorl", "Nask", "Orv", "Yarl", "Skell", "Umbr", "Wend")
ENDS = ("ambry", "estow", "ivane", "olken", "adine", "ellick", "orrin", "umere")
SECOND_WORDS = ("Point", "Ness", "Holm", "Skerry", "Ledge", "Shoal", "Spit", "Bar",
                "Reef", "Stack", "Haven", "Sound", "Bank", "Tongue", "Gap", "Light")
# fmt: on
FIRST_WORDS = tuple(start + end for start in STARTS for end in ENDS)
MOST_BEACONS = len(FIRST_WORDS) * len(SECOND_WORDS)


def draw_coast(size: int, draws: np.random.Generator) -> BeaconMap:
    """A map of ``size`` beacons, up to ``MOST_BEACONS``, every number rounded to two decimals.

    Interference is ``NEAREST_WEIGHT (1 - d/REACH)`` at d kilometres, and ends at ``REACH``. Mates on a repeater are
    near each other but do not interfere.
    """
    positions = _positions(size, draws)
    tree = cKDTree(positions)
    pairs = np.sort(tree.query_pairs(REACH, output_type="ndarray"), axis=1)
    pairs = pairs[np.lexsort((pairs[:, 1], pairs[:, 0]))]
    repeaters = _repeaters(pairs, size, draws)
    distances = np.linalg.norm(positions[pairs[:, 0]] - positions[pairs[:, 1]], axis=1)
    weights = np.round(NEAREST_WEIGHT * (1 - distances / REACH), 2)
    mates = set(repeaters)
    interferes = tuple(
        (one, two, weight)
        for (one, two), weight in zip(pairs.tolist(), weights.tolist(), strict=True)
        if weight > 0 and (one, two) not in mates
    )
    choosy = np.sort(draws.permutation(size)[: round(PREFERENCE_SHARE * size)])
    prefers = tuple(
        (beacon, "AB"[draws.integers(2)], round(draws.uniform(0.5, LARGEST_PREFERENCE), 2))
        for beacon in choosy.tolist()
    )
    return BeaconMap(
        names=_names(size, draws),
        positions=tuple((east, north) for east, north in positions.tolist()),
        interferes=interferes,
        repeaters=tuple(repeaters),
        prefers=prefers,
    )


def _shoreline(along: F64) -> F64:
    """How far north the shore lies, km: wide bays with small ones in them."""
    north: F64 = 9 * np.sin(along / 17) + 3 * np.sin(along / 5 + 1)
    return north


def _spots(length: float, draws: np.random.Generator) -> F64:
    """Candidate spots (CANDIDATES, 2): on the shore and its waters, or on an island off it."""
    along = length * draws.random(CANDIDATES)
    off = 9 * draws.random(CANDIDATES)
    on_island = draws.random(CANDIDATES) < ISLAND_SHARE
    islands = (np.floor(along / ISLAND_EVERY) + 0.5) * ISLAND_EVERY
    spread = draws.normal(0, ISLAND_SPREAD, (CANDIDATES, 2))
    along = np.where(on_island, islands + spread[:, 0], along)
    off = np.where(on_island, 16 + spread[:, 1], off)
    return np.column_stack([along, _shoreline(along) + off])


def _positions(size: int, draws: np.random.Generator) -> F64:
    """Spots (size, 2) in km, from west to east."""
    length = SHORE_PER_BEACON * size
    placed = np.full((size, 2), np.inf)
    for count in range(size):
        spots = _spots(length, draws)
        gaps = np.square(spots[:, None] - placed[None, : max(count, 1)]).sum(axis=2).min(axis=1)
        placed[count] = spots[np.argmax(gaps)]
    placed = np.round(placed, 2)
    return placed[np.lexsort((placed[:, 1], placed[:, 0]))]


def _repeaters(pairs: npt.NDArray[np.int64], size: int, draws: np.random.Generator) -> list[tuple[int, int]]:
    """Near pairs that share no beacon, until MATE_SHARE of the beacons have a mate."""
    wanted = max(1, round(MATE_SHARE * size / 2))
    taken: set[int] = set()
    mates: list[tuple[int, int]] = []
    for one, two in draws.permutation(pairs).tolist():
        if len(mates) < wanted and not {one, two} & taken:
            taken |= {one, two}
            mates.append((one, two))
    return sorted(mates)


def _names(size: int, draws: np.random.Generator) -> tuple[str, ...]:
    chosen = draws.permutation(MOST_BEACONS)[:size].tolist()
    return tuple(
        f"{FIRST_WORDS[place // len(SECOND_WORDS)]} {SECOND_WORDS[place % len(SECOND_WORDS)]}" for place in chosen
    )
