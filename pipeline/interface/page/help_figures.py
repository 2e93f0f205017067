"""Pictures of help: by stage against each rival, by feature, over two features, rival by rival; and break-even."""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from patchwalk.evidence.help_tables import HelpBin, HelpMap, help_table
from patchwalk.evidence.profiling import Profile
from patchwalk.evidence.replayed import NONE
from patchwalk.interface.page.drawing import (
    Picture,
    Row,
    canvas,
    colour,
    finished,
    interval_rows,
    label,
    marked,
    plain_log,
    spread_scale,
)
from patchwalk.interface.page.markup import Table

if TYPE_CHECKING:
    from matplotlib.axes import Axes

PANELS = 6
SIGNED = " The rival none is signed: while it is hot, sweeps raise the energy and calls look good against it."
NEAR_ZERO = " The axis is linear near zero and logarithmic beyond, as values differ in size a hundredfold."
BIN_HEADER = ("from", "to", "calls", "help per call", "low", "high", "runs")


def help_by_stage(profile: Profile, name: str) -> Picture:
    """Help per call by stage, a panel for each rival."""
    rivals = _ordered_rivals(profile)
    tables = {rival: help_table(profile.replayed, rival, "stage") for rival in rivals}
    drawn = rivals[:PANELS]
    bent = False
    with canvas(46.0 + 104.0 * len(drawn), name) as figure:
        panels = figure.subplots(len(drawn), 1, sharex=True, squeeze=False)[:, 0]
        for place, rival in enumerate(drawn):
            bent |= _draw_bins(panels[place], tables[rival], f"stage-{place}")
            panels[place].set_title(f"against {label(rival, 42)}")
        panels[-1].set_xlim(0.0, 1.0)
        panels[-1].set_xlabel("stage: share of the budget spent")
        figure.supylabel("help per call, energy units", fontsize=11.5)
        svg = finished(figure, name)
    rows = [[rival, *_bin_row(one)] for rival in rivals for one in tables[rival]]
    caption = (
        "Help is the drop in energy of a call less the rival's on the very same cluster: above zero the call was worth "
        "more. Bars are 95 % intervals over runs." + (NEAR_ZERO if bent else "") + (SIGNED if NONE in rivals else "")
    )
    caption += f" {len(rivals) - PANELS} more rivals stand in the data." if len(rivals) > PANELS else ""
    told = [f"against {rival} from {tables[rival][0].help.value:.3g} to {tables[rival][-1].help.value:.3g}"
            for rival in drawn if tables[rival]]  # fmt: skip
    alternative = f"Help per call from the first stage to the last: {'; '.join(told)}."
    return Picture(name, "Help by stage", caption, alternative, svg, Table(["rival", *BIN_HEADER], rows))


def help_by_feature(profile: Profile, name: str) -> Picture | None:
    """Help per call against the baseline by the features that explain most of its variance."""
    order = sorted(profile.tables, key=lambda key: -profile.explained[key])
    telling = [key for key in order if key != "stage" and len(profile.tables[key]) > 1]
    if not telling:
        return None
    drawn, bent = telling[:4], False
    with canvas(26.0 + 122.0 * len(drawn), name) as figure:
        panels = figure.subplots(len(drawn), 1, squeeze=False)[:, 0]
        for place, key in enumerate(drawn):
            bent |= _draw_bins(panels[place], profile.tables[key], f"feature-{place}")
            panels[place].set_title(f"{key}: explains {max(profile.explained[key], 0.0):.0%} of the variance")
        figure.supylabel(f"help per call against {label(profile.baseline, 24)}", fontsize=11.5)
        svg = finished(figure, name)
    rows = [[key, profile.explained[key], *_bin_row(one)] for key in order for one in profile.tables[key]]
    caption = (
        f"Each stroke is a fifth of the calls or so, from its least to its largest value, at their mean help against "
        f"{profile.baseline}; bars are 95 % intervals over runs. All {len(order)} quantities stand in the data."
        + (NEAR_ZERO if bent else "")
        + (SIGNED if profile.baseline == NONE else "")
    )
    alternative = "Mean help by feature: " + "; ".join(
        f"{key} from {profile.tables[key][0].help.value:.3g} at its lowest to "
        f"{profile.tables[key][-1].help.value:.3g} at its highest" for key in drawn
    )  # fmt: skip
    table = Table(["quantity", "share of variance explained", *BIN_HEADER], rows)
    return Picture(name, "Help by feature", caption, alternative + ".", svg, table)


def map_of_help(profile: Profile, name: str) -> Picture | None:
    """Mean help over the two features that explain most, a number in every cell."""
    grid = profile.map
    if grid is None or np.isnan(grid.means).all():
        return None
    if grid.means.shape[1] > grid.means.shape[0]:
        grid = HelpMap(
            grid.second, grid.first, grid.second_edges, grid.first_edges, grid.means.T.copy(), grid.calls.T.copy()
        )
    down, across = (_ranges(edges) for edges in (grid.first_edges, grid.second_edges))
    with canvas(96.0 + 27.0 * len(down), name) as figure:
        axes = figure.add_subplot()
        _draw_cells(axes, grid)
        axes.set_xticks(range(len(across)), [_in_two_lines(text) for text in across])
        axes.set_yticks(range(len(down)), down)
        axes.set_xlabel(grid.second)
        axes.set_ylabel(grid.first)
        axes.tick_params(length=0)
        axes.grid(visible=False)
        for side in axes.spines.values():
            side.set_visible(False)
        svg = finished(figure, name)
    rows = [
        [one, other, int(grid.calls[place]), float(grid.means[place])]
        for place, (one, other) in zip(
            np.ndindex(grid.means.shape), [(a, b) for a in down for b in across], strict=True
        )
    ]
    caption = (
        f"Mean help per call against {profile.baseline}, in energy units, by {grid.first} and {grid.second}, the two "
        "quantities that explain most of it. Blue with a plus helps, brown with a minus does not; the deepest third of "
        "the sizes is shaded deepest. Empty cells had no call; cells of few calls are noisy: see the data."
        + (SIGNED if profile.baseline == NONE else "")
    )
    best = np.unravel_index(int(np.nanargmax(grid.means)), grid.means.shape)
    alternative = (
        f"Table of mean help by {grid.first} and {grid.second}; the best cell is {down[best[0]]}, {across[best[1]]} "
        f"with {grid.means[best]:.3g} a call."
    )
    table = Table([grid.first, grid.second, "calls", "mean help per call"], rows)
    return Picture(name, "Map of help", caption, alternative, svg, table)


def rivals_figure(profile: Profile, name: str) -> Picture:
    """Help per call against every rival, with intervals."""
    rivals = _ordered_rivals(profile)
    spreads = [profile.helps[rival].per_call for rival in rivals]
    with canvas(62.0 + 42.0 * len(rivals), name) as figure:
        axes = figure.add_subplot()
        rows = [Row(rival, one.value, one.low, one.high) for rival, one in zip(rivals, spreads, strict=True)]
        bent = spread_scale(axes, [one.value for one in spreads], across=True)
        interval_rows(axes, rows, 0.0)
        axes.set_xlabel("help per call, energy units: right of zero the call is worth more")
        svg = finished(figure, name)
    caption = (
        f"What a call of {profile.own} is worth more (right) or less (left) than the rival on the same cluster, with "
        "95 % intervals over runs. Filled arrowheads: the interval lies on one side of zero; hollow circles: it does "
        "not, or there is none." + (NEAR_ZERO if bent else "") + (SIGNED if NONE in rivals else "")
    )
    told = "; ".join(f"{rival} {profile.helps[rival].per_call}" for rival in rivals)
    return Picture(name, "Rivals", caption, f"Help per call against each rival: {told}.", svg, rivals_table(profile))


def rivals_table(profile: Profile) -> Table:
    """Everything about each rival in numbers."""
    header = ["rival", "calls", "drop of the call", "drop of the rival", "help per call", "low", "high",
              "help per second", "low per second", "high per second", "share exact"]  # fmt: skip
    rows = []
    for rival in _ordered_rivals(profile):
        one = profile.helps[rival]
        call, second = one.per_call, one.per_second
        rows.append([rival, one.calls, one.drop, one.rival_drop, call.value, call.low, call.high,
                     second.value, second.low, second.high, one.exact])  # fmt: skip
    return Table(header, rows)


def break_even_figure(profile: Profile, name: str) -> Picture | None:
    """Break-even factors on a logarithmic axis, all of the call and its evolution alone."""
    rivals = [rival for rival in _ordered_rivals(profile) if not profile.break_evens[rival].reason]
    if not rivals:
        return None
    rows = []
    for rival in rivals:
        one = profile.break_evens[rival]
        apart = not np.isclose(one.held.value, one.factor.value)
        endless = bool(np.isinf(one.held.value))
        held, low, high = float("nan"), float("nan"), float("nan")
        if apart and not endless:
            held, (low, high) = one.held.value, _finite_ends(one.held.low, one.held.high)
        note = "(evolution alone: never)" if endless else ""
        rows.append(Row(rival, one.factor.value, one.factor.low, one.factor.high, held, low, high, note))
    with canvas(62.0 + 46.0 * len(rows), name) as figure:
        axes = figure.add_subplot()
        axes.set_xscale("log")
        plain_log(axes.xaxis)
        interval_rows(axes, rows, 1.0, favourable=-1)
        values = [end for row in rows for end in (row.value, row.low, row.high, row.second) if np.isfinite(end)]
        axes.set_xlim(min(0.5, 0.5 * min(values)), max(2.0, 2.0 * max(values)))
        axes.set_xlabel("break-even factor: 1 and below pays already")
        svg = finished(figure, name)
    undefined = [f"{rival}: undefined, {one.reason}" for rival, one in profile.break_evens.items() if one.reason]
    caption = (
        "How many times faster calls must become until they are worth their time against each rival, with 95 % "
        "intervals over runs. Diamonds: the same with load, read and wait held fixed, so that the evolution alone gets "
        f"faster; never means that no speed-up suffices. It is a model's answer: costs are "
        f"{profile.cost_model}. {' '.join(undefined)}"
    )
    told = "; ".join(f"{rival} {profile.break_evens[rival]}" for rival in rivals)
    return Picture(name, "Break-even", caption, f"Break-even factors: {told}.", svg, break_even_table(profile))


def break_even_table(profile: Profile) -> Table:
    """Factors in numbers; what is infinite says so."""
    header = ["rival", "factor", "low", "high", "evolution alone", "low alone", "high alone", "in words"]
    rows = []
    for rival in _ordered_rivals(profile):
        one = profile.break_evens[rival]
        ends = (one.factor.value, one.factor.low, one.factor.high, one.held.value, one.held.low, one.held.high)
        rows.append([rival, *("no speed-up suffices" if np.isinf(end) else end for end in ends), str(one)])
    return Table(header, rows)


def _ordered_rivals(profile: Profile) -> list[str]:
    """The baseline first, then from the strongest to the weakest."""
    return sorted(
        profile.helps, key=lambda rival: (rival != profile.baseline, profile.helps[rival].per_call.value, rival)
    )


def _draw_bins(axes: Axes, bins: Sequence[HelpBin], name: str) -> bool:
    """Bins as strokes from end to end with bars; says whether the upright axis is logarithmic far from zero."""
    tone = colour("series-1")
    for place, one in enumerate(bins):
        middle = 0.5 * (one.low + one.high)
        if one.help.known:
            bar = axes.plot([middle, middle], [one.help.low, one.help.high], color=tone, linewidth=1.2)
            marked(bar, f"{name}-{place}-interval")
        marked(axes.plot([one.low, one.high], [one.help.value] * 2, color=tone, linewidth=3.0), f"{name}-{place}")
        marked(axes.plot([middle], [one.help.value], "o", color=tone, markersize=4.5), f"{name}-{place}-middle")
    axes.axhline(0.0, color=colour("ink"), linewidth=1.0)
    bent = spread_scale(axes, [one.help.value for one in bins])
    if not bent:
        axes.locator_params(axis="y", nbins=4)
    return bent


def _bin_row(one: HelpBin) -> list[object]:
    return [one.low, one.high, one.calls, one.help.value, one.help.low, one.help.high, one.help.runs]


def _draw_cells(axes: Axes, grid: HelpMap) -> None:
    from matplotlib.patches import Rectangle

    sizes = np.sort(np.abs(grid.means[np.isfinite(grid.means)]))
    cuts = [sizes[len(sizes) // 3], sizes[2 * len(sizes) // 3]] if len(sizes) >= 3 else [np.inf, np.inf]
    cells = []
    for row, column in np.ndindex(grid.means.shape):
        mean = float(grid.means[row, column])
        if np.isnan(mean):
            continue
        depth = 1 + int(np.searchsorted(cuts, abs(mean), side="right"))
        tone = f"{'gain' if mean >= 0.0 else 'loss'}-{depth}"
        cell = Rectangle((column - 0.48, row - 0.46), 0.96, 0.92, facecolor=colour(tone), edgecolor="none")
        cells.append(axes.add_patch(cell))
        text = f"{mean:+.3g}" if abs(mean) < 1000.0 else f"{mean:+.2g}"
        axes.text(column, row, text.replace("-", "\N{MINUS SIGN}"), ha="center", va="center", fontsize=10.5)
    marked(cells, "cell")
    axes.set_xlim(-0.5, grid.means.shape[1] - 0.5)
    axes.set_ylim(grid.means.shape[0] - 0.5, -0.5)


def _ranges(edges: np.typing.NDArray[np.float64]) -> list[str]:
    ends = [f"{edge:.3g}" for edge in edges]
    if not ends:
        return ["all"]
    inner = [f"{low} to {high}" for low, high in itertools.pairwise(ends)]
    return [f"below {ends[0]}", *inner, f"from {ends[-1]}"]


def _in_two_lines(text: str) -> str:
    """A range as it stands below a narrow column."""
    for word, broken in ((" to ", "\nto "), ("below ", "below\n"), ("from ", "from\n")):
        text = text.replace(word, broken)
    return text


def _finite_ends(low: float, high: float) -> tuple[float, float]:
    """Both ends, or neither where one of them is infinite or unknown."""
    return (low, high) if np.isfinite(low) and np.isfinite(high) else (float("nan"), float("nan"))
