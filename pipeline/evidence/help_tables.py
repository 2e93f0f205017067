"""Help: the paired difference in drop between a subsolver and a rival on the same clusters, over all and by feature.

Intervals come from a bootstrap over runs, for calls of one run share its luck; one run has none.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from patchwalk.evidence.replayed import NONE, Replayed
from patchwalk.statistics import Interval, bootstrap, by_run, ratio
from patchwalk.subsolvers.contract import F64, I64

STAGES = np.linspace(0.1, 0.9, 9)
PARTS = 5
"""Bins of a feature, of equally many calls where its values allow it."""


@dataclass(frozen=True)
class PairedHelp:
    """Against one rival: help per call in energy units, per second of the cost model, the mean drop of either.

    ``exact`` is the share of pairs in which nothing was sampled.
    """

    rival: str
    calls: int
    drop: float
    rival_drop: float
    per_call: Interval
    per_second: Interval
    exact: float


class HelpBin(NamedTuple):
    """Calls whose quantity lies from ``low`` to below ``high``, and their help."""

    low: float
    high: float
    calls: int
    help: Interval


@dataclass(frozen=True, eq=False)
class HelpMap:
    """Mean help over two features: edges f64 (P - 1,) between bins, means f64 (P, Q), nan where no call is, calls."""

    first: str
    second: str
    first_edges: F64
    second_edges: F64
    means: F64
    calls: I64


class Pairs(NamedTuple):
    """The calls both were replayed on: their rows, run, weight, either's drop and cost, (M,) each."""

    rows: I64
    runs: I64
    weights: F64
    drops: F64
    rival_drops: F64
    costs: F64
    rival_costs: F64

    @property
    def help(self) -> F64:
        """Own drop less the rival's."""
        return self.drops - self.rival_drops


def pairs_with(replayed: Replayed, rival: str) -> Pairs:
    """Pairs with a rival; ``none`` spends on sweeps what the call costs by the cost model."""
    own, other = replayed.answers[replayed.own], replayed.answers[rival]
    drops, costs = other.drops, other.costs
    if rival == NONE:
        drops, costs = replayed.swept(own.costs), own.costs
    rows = np.flatnonzero((other.weights > 0.0) & ~np.isnan(own.drops) & ~np.isnan(drops))
    return Pairs(
        rows, replayed.runs[rows], other.weights[rows], own.drops[rows], drops[rows], own.costs[rows], costs[rows]
    )


def paired_help(replayed: Replayed, rival: str) -> PairedHelp:
    """Help against one rival over all calls."""
    pairs = pairs_with(replayed, rival)
    own, other, w = replayed.answers[replayed.own], replayed.answers[rival], pairs.weights
    sums = by_run(pairs.runs, w * pairs.drops, w * pairs.costs, w * pairs.rival_drops, w * pairs.rival_costs)
    total = max(w.sum(), 1e-300)
    return PairedHelp(
        rival, len(pairs.rows), float(w @ pairs.drops / total), float(w @ pairs.rival_drops / total),
        bootstrap(by_run(pairs.runs, w * pairs.help, w), ratio),
        bootstrap(sums, lambda sums: ratio(sums[:, :2]) - ratio(sums[:, 2:])),
        float(np.mean((own.exact & other.exact)[pairs.rows])) if len(pairs.rows) else float("nan"),
    )  # fmt: skip


def help_table(replayed: Replayed, rival: str, quantity: str) -> tuple[HelpBin, ...]:
    """Help by bins of one quantity; bins without calls are left out."""
    pairs = pairs_with(replayed, rival)
    values = replayed.quantities[quantity][pairs.rows]
    edges = edges_of(quantity, values)
    bounds = np.concatenate([[np.nanmin(values, initial=np.inf)], edges, [np.nanmax(values, initial=-np.inf)]])
    places = np.where(np.isnan(values), -1, np.searchsorted(edges, values, side="right"))
    found = []
    for place in range(len(edges) + 1):
        inside = places == place
        if inside.any():
            sums = by_run(pairs.runs[inside], (pairs.weights * pairs.help)[inside], pairs.weights[inside])
            spread = bootstrap(sums, ratio)
            found.append(HelpBin(float(bounds[place]), float(bounds[place + 1]), int(inside.sum()), spread))
    return tuple(found)


def edges_of(quantity: str, values: F64) -> F64:
    """Edges between bins: tenths of the stage, every value where there are few, else quantiles that differ."""
    if quantity == "stage":
        return STAGES
    known = values[np.isfinite(values)]
    different = np.unique(known)
    if len(different) <= PARTS:
        return different[1:]
    edges = np.unique(np.quantile(known, np.linspace(0.0, 1.0, PARTS + 1)[1:-1], method="higher"))
    edges = edges[edges > different[0]]
    return edges if len(edges) else different[1:2]


def explained(replayed: Replayed, rival: str, quantity: str) -> float:
    """The share of the variance of help that the bins of a quantity explain, less what as many chance bins would."""
    pairs = pairs_with(replayed, rival)
    values = replayed.quantities[quantity][pairs.rows]
    known = ~np.isnan(values)
    if known.sum() < 2:
        return 0.0
    help_, weights = pairs.help[known], pairs.weights[known]
    edges = edges_of(quantity, values)
    places = np.searchsorted(edges, values[known], side="right")
    total = np.bincount(places, weights, len(edges) + 1)
    sums = np.bincount(places, weights * help_, len(edges) + 1)
    centre = float(np.average(help_, weights=weights))
    variance = float(weights @ (help_ - centre) ** 2)
    if variance <= 0.0:
        return 0.0
    means = np.divide(sums, total, out=np.full(len(total), centre), where=total > 0.0)
    return float(total @ (means - centre) ** 2) / variance - (np.count_nonzero(total) - 1) / known.sum()


def help_map(replayed: Replayed, rival: str) -> HelpMap | None:
    """The map over the two features that explain most of the variance of help; None where fewer than two vary."""
    names = [name for name, values in replayed.quantities.items() if len(np.unique(values[~np.isnan(values)])) > 1]
    order = sorted(names, key=lambda name: -explained(replayed, rival, name))
    if len(order) < 2:
        return None
    pairs = pairs_with(replayed, rival)
    first, second = (replayed.quantities[name][pairs.rows] for name in order[:2])
    known = ~np.isnan(first) & ~np.isnan(second)
    edges = [edges_of(name, values) for name, values in zip(order[:2], (first, second), strict=True)]
    places = [
        np.searchsorted(cuts, values[known], side="right") for cuts, values in zip(edges, (first, second), strict=True)
    ]
    shape = (len(edges[0]) + 1, len(edges[1]) + 1)
    means, calls = np.full(shape, np.nan), np.zeros(shape, np.int64)
    help_, weights = pairs.help[known], pairs.weights[known]
    for cell in itertools.product(range(shape[0]), range(shape[1])):
        inside = (places[0] == cell[0]) & (places[1] == cell[1])
        calls[cell] = inside.sum()
        if calls[cell]:
            means[cell] = np.average(help_[inside], weights=weights[inside])
    return HelpMap(order[0], order[1], edges[0], edges[1], means, calls)
