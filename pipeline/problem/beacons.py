"""The Quillmere beacons: an invented coast whose navigation beacons share two radio channels, A and B.

Near beacons on one channel interfere; mates on one repeater must be on one channel; some sites would rather have a
certain channel. Sought is the allocation of least interference: the weights of interfering pairs on one channel,
plus a cost for every site that does not get the channel it prefers.

As a spin glass, spin +1 is channel A. Interference w becomes J = w/2 with offset w/2, a preference for A at cost c
the field -c/2 with offset c/2, and a pair of mates gets a penalty P (1 - s s')/2, zero when kept. So the energy is the
planner's objective, exactly, wherever all mates agree.

**Why no optimum parts mates.** Take the beacons that hang together through repeaters, and let t_i be all that hangs
on beacon i: the weights of its interfering pairs and the cost of its preference. If any pair of the group is parted,
let all of them follow the member with the largest t. That adds at most the t of the others, for only terms of a
beacon that changes can rise, and it saves at least one P. So any P above (sum of t over the group) - (largest t)
will do; for two mates that is the smaller t of the two. P is a tenth more than that.

The CSV has the columns ``relation,beacon,other,value``; names may not hold line breaks:

    site,NAME,EAST,NORTH        where a beacon stands, kilometres in a grid of its own
    interferes,NAME,NAME,W      cost W >= 0 when both are on one channel
    repeater,NAME,NAME,         both must be on one channel
    prefers,NAME,A|B,COST       cost COST >= 0 on the other channel
"""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt

from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.sources import Source, quoted
from patchwalk.problem.table_rows import table_rows

CAUTION = (
    "The beacons are invented: this is no licence or navigation advice, for which local rules and licensed practice "
    "decide."
)
HEADER = ["relation", "beacon", "other", "value"]
CHANNELS = {"A": 1, "B": -1}
PENALTY_MARGIN = 1.1


@dataclass(frozen=True)
class BeaconMap:
    """Sites and relations; beacons are numbered from 0 in the order of ``names``.

    ``positions`` are kilometres (east, north). ``interferes`` holds (beacon, beacon, weight), ``repeaters`` (beacon,
    beacon), ``prefers`` (beacon, channel, cost).
    """

    names: tuple[str, ...]
    positions: tuple[tuple[float, float], ...]
    interferes: tuple[tuple[int, int, float], ...]
    repeaters: tuple[tuple[int, int], ...]
    prefers: tuple[tuple[int, str, float], ...]

    @cached_property
    def hanging(self) -> npt.NDArray[np.float64]:
        """All that hangs on each beacon, f64 (n,): its interference weights and the cost of its preference."""
        total = np.zeros(len(self.names))
        for one, other, weight in self.interferes:
            total[one] += weight
            total[other] += weight
        for beacon, _, cost in self.prefers:
            total[beacon] += cost
        return total

    @cached_property
    def groups(self) -> tuple[tuple[int, ...], ...]:
        """Beacons that hang together through repeaters, lone ones included, in order of their first beacon."""
        group_of = {beacon: [beacon] for beacon in range(len(self.names))}
        for one, other in self.repeaters:
            if group_of[one] is not group_of[other]:
                joined = sorted(group_of[one] + group_of[other])
                group_of.update(dict.fromkeys(joined, joined))
        return tuple(tuple(group) for beacon, group in group_of.items() if group[0] == beacon)

    def penalties(self) -> list[float]:
        """The penalty of each repeater pair: more than following the mate can cost, see the module."""
        bound: dict[int, float] = {}
        for group in self.groups:
            hanging = self.hanging[list(group)]
            bound.update(dict.fromkeys(group, float(hanging.sum() - hanging.max())))
        return [PENALTY_MARGIN * bound[one] if bound[one] > 0 else 1.0 for one, _ in self.repeaters]

    def problem(self, recipe: Iterable[str] = ()) -> Problem:
        """The spin glass; ``details["beacons"]`` keeps this map."""
        penalties = self.penalties()
        pairs = [(one, other, weight / 2) for one, other, weight in self.interferes]
        pairs += [(*mates, -penalty / 2) for mates, penalty in zip(self.repeaters, penalties, strict=True)]
        fields = np.zeros(len(self.names))
        for beacon, channel, cost in self.prefers:
            fields[beacon] -= CHANNELS[channel] * cost / 2
        heads, tails, couplings = zip(*pairs, strict=True) if pairs else ((), (), ())
        constants = [weight for *_, weight in self.interferes] + [cost for *_, cost in self.prefers] + penalties
        return Problem.from_arrays(
            heads,
            tails,
            couplings,
            size=len(self.names),
            fields=fields,
            offset=sum(constants) / 2,
            kind="beacons",
            names=self.names,
            details={"beacons": self, "recipe": tuple(recipe)},
        )


def beacon_map(problem: Problem) -> BeaconMap:
    """The sites and relations behind a problem of kind ``beacons``; raises :class:`ProblemError` without them."""
    sites = problem.details.get("beacons")
    if not isinstance(sites, BeaconMap):
        raise ProblemError(f"a problem of kind {problem.kind} without its map of beacons; read it from a beacons .csv")
    return sites


def read_beacons(source: Source) -> Problem:
    """The problem in a beacons CSV; raises :class:`ProblemError` with file and line."""
    rows = table_rows(source, source.lines, ",")
    line, cells = next(rows, (0, []))
    if cells != HEADER:
        source.fail(line, f"expected the header {','.join(HEADER)}, but it reads {quoted(','.join(cells))}")
    reader = _MapReader(source)
    later = []
    for line, cells in rows:
        if len(cells) != len(HEADER):
            source.fail(line, f"expected the {len(HEADER)} columns of the header, but it has {len(cells)}")
        if cells[0] == "site":
            reader.site(line, cells)
        else:
            later.append((line, cells))
    for line, cells in later:
        reader.relation(line, cells)
    if not reader.places:
        source.fail(None, "no site rows; give one for every beacon")
    problem = reader.map().problem()
    if not problem.coupling_count and not np.any(problem.fields):
        source.fail(None, "there is nothing to decide: no interference, repeater or preference")
    return problem


class _MapReader:
    """Rows as they are read; a relation may be given once, whichever way round."""

    def __init__(self, source: Source) -> None:
        self.source = source
        self.places: dict[str, int] = {}
        self.positions: list[tuple[float, float]] = []
        self.interferes: list[tuple[int, int, float]] = []
        self.repeaters: list[tuple[int, int]] = []
        self.prefers: list[tuple[int, str, float]] = []
        self.seen: dict[tuple[str, frozenset[int]], int] = {}

    def map(self) -> BeaconMap:
        return BeaconMap(
            tuple(self.places),
            tuple(self.positions),
            tuple(self.interferes),
            tuple(self.repeaters),
            tuple(self.prefers),
        )

    def site(self, line: int, cells: list[str]) -> None:
        _, name, east, north = cells
        if not name:
            self.source.fail(line, "the site has no name")
        if name in self.places:
            self.source.fail(line, f"beacon {quoted(name)} has a site already; names must differ")
        self.places[name] = len(self.places)
        self.positions.append((self.source.number(east, line, "position"), self.source.number(north, line, "position")))

    def relation(self, line: int, cells: list[str]) -> None:
        relation, name, other, value = cells
        if relation == "prefers":
            beacon = self._beacon(line, name)
            if other not in CHANNELS:
                self.source.fail(line, f"channel {quoted(other)} does not exist; it is A or B")
            self._once(line, relation, beacon)
            self.prefers.append((beacon, other, self._cost(line, value)))
        elif relation in ("interferes", "repeater"):
            one, two = self._beacon(line, name), self._beacon(line, other)
            if one == two:
                self.source.fail(line, f"beacon {quoted(name)} is paired with itself; name two beacons")
            self._once(line, relation, one, two)
            if relation == "interferes":
                self.interferes.append((one, two, self._cost(line, value)))
            elif value:
                self.source.fail(line, f"a repeater has no value, but it reads {quoted(value)}; leave it empty")
            else:
                self.repeaters.append((one, two))
        else:
            known = "site, interferes, repeater, prefers"
            self.source.fail(line, f"relation {quoted(relation)} is not known; it is one of: {known}")

    def _beacon(self, line: int, name: str) -> int:
        if name not in self.places:
            self.source.fail(line, f"beacon {quoted(name)} has no site row; add one, or correct the name")
        return self.places[name]

    def _cost(self, line: int, text: str) -> float:
        value = self.source.number(text, line, "value")
        if value < 0:
            self.source.fail(line, f"value {quoted(text)} is negative; interference and costs are at least 0")
        return value

    def _once(self, line: int, relation: str, *beacons: int) -> None:
        before = self.seen.setdefault((relation, frozenset(beacons)), line)
        if before != line:
            self.source.fail(line, f"the same {relation} row stands on line {before}; keep one of them")


def beacon_lines(problem: Problem) -> Iterator[str]:
    """The lines of a beacons CSV, without line ends and without the leading ``# kind``."""
    sites = beacon_map(problem)
    yield f"# {CAUTION}"
    yield "# site: kilometres east and north; interferes: cost on one channel; prefers: cost on the other channel"
    rows: list[tuple[object, ...]] = [tuple(HEADER)]
    rows += [("site", name, *position) for name, position in zip(sites.names, sites.positions, strict=True)]
    rows += [("interferes", sites.names[one], sites.names[two], weight) for one, two, weight in sites.interferes]
    rows += [("repeater", sites.names[one], sites.names[two], "") for one, two in sites.repeaters]
    rows += [("prefers", sites.names[one], channel, cost) for one, channel, cost in sites.prefers]
    for row in rows:
        text = io.StringIO()
        csv.writer(text, lineterminator="").writerow(row)
        yield text.getvalue()


def greedy_allocation(problem: Problem) -> npt.NDArray[np.int8]:
    """The spins, i8 (n,), of a rule that a planner can follow by hand.

    Groups of repeater mates (most are one beacon) in order of falling total interference each take the channel that
    adds less to the objective, given those placed before; channel A among equals.
    """
    sites = beacon_map(problem)
    totals = np.zeros(len(problem))
    partners: list[list[tuple[int, float]]] = [[] for _ in sites.names]
    for one, two, weight in sites.interferes:
        totals[[one, two]] += weight
        partners[one].append((two, weight))
        partners[two].append((one, weight))
    pull = np.zeros(len(problem))
    for beacon, channel, cost in sites.prefers:
        pull[beacon] -= CHANNELS[channel] * cost
    spins = np.zeros(len(problem), np.int8)
    for group in sorted(sites.groups, key=lambda group: (-totals[list(group)].sum(), group)):
        extra_on_a = sum(pull[one] + sum(weight * spins[two] for two, weight in partners[one]) for one in group)
        spins[list(group)] = 1 if extra_on_a <= 0 else -1
    return spins


def describe(problem: Problem, spins: npt.ArrayLike) -> dict[str, Any]:
    """What an allocation means, recomputed from the relations and not from the energy.

    ``channels`` by name, ``interference`` (the objective), ``broken_repeaters`` (pairs of names), ``feasible``,
    ``counts`` of beacons per channel, ``preferences_kept`` of ``preferences``.
    """
    sites = beacon_map(problem)
    channels = ["A" if spin == 1 else "B" for spin in problem.spins_from(spins)]
    broken = [(sites.names[one], sites.names[two]) for one, two in sites.repeaters if channels[one] != channels[two]]
    costs = [weight for one, two, weight in sites.interferes if channels[one] == channels[two]]
    refused = [cost for one, channel, cost in sites.prefers if channels[one] != channel]
    return {
        "channels": dict(zip(sites.names, channels, strict=True)),
        "interference": float(sum(costs) + sum(refused)),
        "broken_repeaters": broken,
        "feasible": not broken,
        "counts": {channel: channels.count(channel) for channel in CHANNELS},
        "preferences_kept": len(sites.prefers) - len(refused),
        "preferences": len(sites.prefers),
    }
