"""Pictures of runs: incumbent and bound against time, and what became of calls stage by stage."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from patchwalk.commands.reporting import RunsChapter
from patchwalk.commands.told_runs import StageCount, ToldRun
from patchwalk.interface.page.appearance import DASHES, MARKS, SERIES
from patchwalk.interface.page.drawing import Picture, canvas, colour, finished, label, marked, plain_log, wrapped
from patchwalk.interface.page.markup import Table
from patchwalk.statistics import Interval, bootstrap, by_run, ratio

if TYPE_CHECKING:
    from matplotlib.axes import Axes

FEW = 6
"""So many runs, or subsolvers, are told apart; of more, the best run stands out from the rest."""

STEPS_DRAWN, ROWS_KEPT = 600, 4000
"""Improvements of a run that are drawn, and rows of a table, at most; what is left out is said."""

FATES = (("accepted", "accepted"), ("moved", "changed a spin"), ("improved", "lowered the energy"))


def progress(chapter: RunsChapter, name: str) -> Picture | None:
    """Incumbent of every run and the bound, in the user's objective, against seconds; None where none was kept."""
    problem, runs, thinned = chapter.problem, chapter.runs, False
    finite = [run for run in runs if run.incumbents]
    if not finite:
        return None
    earliest = _earliest(finite)
    with canvas(270.0, name) as figure:
        axes = figure.add_subplot()
        for place, run in enumerate(finite):
            seconds, energies, cut = _steps(run)
            thinned |= cut
            own = [problem.objective(energy) for energy in energies]
            best = run is chapter.best
            few = len(finite) <= FEW
            tone = SERIES[place % len(SERIES)] if few else "ink" if best else "series-1"
            line = axes.step(
                np.maximum(seconds, earliest), own, where="post", color=colour(tone), zorder=3 if best else 2,
                linestyle=DASHES[place % len(DASHES)] if few else "-", linewidth=2.2 if best else 1.4,
                label=run.name + (" (best)" if best else "") if few or best else None,
            )  # fmt: skip
            marked(line, f"incumbent-{place}")
        _draw_bound(axes, chapter, earliest)
        if earliest > 0.0:
            axes.set_xscale("log")
            plain_log(axes.xaxis)
        _look_near_the_end(axes, chapter, finite)
        axes.set_xlabel("seconds of this machine")
        axes.set_ylabel(problem.objective_name.replace("_", " "))
        figure.legend(loc="outside lower center", ncols=2 if len(finite) > 1 else 1)
        svg = finished(figure, name)
    table, shortened = _progress_table(chapter)
    direction = "down" if problem.objective(1.0) > 0 else "up"
    bound = chapter.lower_bound
    said = "No bound was computed." if bound is None else f"The bound is {problem.objective(bound):,.8g}."
    if bound is not None and not any(run.bounds for run in runs):
        said += " It was looked for after the search, and stands across all of it."
    caption = (
        f"Best {problem.objective_name.replace('_', ' ')} so far, run by run; it goes {direction} as the search gets "
        f"better. {said} Seconds of a simulated subsolver say nothing about a device."
    )
    caption += " Early improvements may lie outside the picture; all are in the data." if len(table.rows) > 3 else ""
    caption += f" Drawn are {STEPS_DRAWN} improvements of a run at most." if thinned else ""
    caption += f" The data hold one row in {shortened}." if shortened > 1 else ""
    alternative = f"Step lines of {len(finite)} runs against time, ending at {_ends(chapter)}. {said}"
    return Picture(name, "Incumbent and bound against time", caption, alternative, svg, table)


def _earliest(runs: Sequence[ToldRun]) -> float:
    """Where a logarithmic axis of time begins; 0 for an even one."""
    times = [one.seconds for run in runs for one in run.incumbents if one.seconds > 0.0]
    longest = max((run.seconds for run in runs), default=0.0)
    return max(min(times), 1e-5 * longest) if times and longest > 50.0 * min(times) else 0.0


def _steps(run: ToldRun) -> tuple[list[float], list[float], bool]:
    """Seconds and energies of a run's line, up to its end, and whether improvements were left out."""
    points = [(one.seconds, one.energy) for one in run.incumbents]
    cut = len(points) > STEPS_DRAWN
    if cut:
        kept = np.unique(np.linspace(0, len(points) - 1, STEPS_DRAWN).round().astype(int))
        points = [points[place] for place in kept]
    points.append((max(run.seconds, points[-1][0]), points[-1][1]))
    return [seconds for seconds, _ in points], [energy for _, energy in points], cut


def _draw_bound(axes: Axes, chapter: RunsChapter, earliest: float) -> None:
    bound = chapter.lower_bound
    if bound is None:
        return
    proving = max((run for run in chapter.runs if run.bounds), key=lambda run: run.bounds[-1].bound, default=None)
    longest = max([run.seconds for run in chapter.runs] + [earliest])
    steps = list(proving.bounds) if proving is not None and proving.bounds[-1].bound >= bound else []
    seconds = [max(one.seconds, earliest) for one in steps] + [longest] if steps else [earliest, longest]
    heights = [one.bound for one in steps] + [bound] if steps else [bound, bound]
    line = axes.step(
        seconds, [chapter.problem.objective(one) for one in heights], where="post", color=colour("ink"),
        linestyle=(0, (1.0, 1.6)), linewidth=2.0, label="bound", zorder=4,
    )  # fmt: skip
    marked(line, "bound")


def _look_near_the_end(axes: Axes, chapter: RunsChapter, runs: Sequence[ToldRun]) -> None:
    """Leave out of sight what lies far above the many improvements near the end."""
    last = [run.energy for run in runs] + ([chapter.lower_bound] if chapter.lower_bound is not None else [])
    everything = [one.energy for run in runs for one in run.incumbents]
    if not last or len(everything) < 4:
        return
    low = min(last)
    high = low + 1.6 * max(float(np.median(everything)) - low, max(last) - low)
    if low < high < max(everything):
        room = 0.06 * (high - low)
        ends = sorted(chapter.problem.objective(end) for end in (low - room, high + room))
        axes.set_ylim(*ends)


def _progress_table(chapter: RunsChapter) -> tuple[Table, int]:
    """Every improvement and every step of a bound, thinned evenly where there are too many rows."""
    rows: list[list[object]] = []
    for run in chapter.runs:
        start = [run.file, run.number, run.seed]
        rows += [
            [*start, one.finder, one.seconds, one.calls, one.sweeps, one.energy, chapter.problem.objective(one.energy)]
            for one in run.incumbents
        ]
        rows += [
            [*start, "lower bound", one.seconds, None, None, one.bound, chapter.problem.objective(one.bound)]
            for one in run.bounds
        ]
    every = -(-len(rows) // ROWS_KEPT)
    header = ["file", "run", "seed", "found by", "seconds", "calls", "sweeps", "energy", chapter.problem.objective_name]
    return Table(header, rows[:: max(1, every)]), every


def _ends(chapter: RunsChapter) -> str:
    ends = [f"{chapter.problem.objective(run.energy):,.6g}" for run in chapter.runs]
    return ", ".join(ends[:FEW]) + (" and others" if len(ends) > FEW else "")


def fates(stages: Sequence[StageCount], name: str) -> Picture | None:
    """Shares of calls accepted, that changed a spin, and that lowered the energy, by tenth of the budget."""
    calls: dict[str, int] = {}
    for one in stages:
        calls[one.subsolver] = calls.get(one.subsolver, 0) + one.calls
    busiest = sorted(calls, key=lambda who: -calls[who])
    if not busiest:
        return None
    drawn = busiest[:3]
    rows: list[list[object]] = []
    with canvas(70.0 + 175.0 * len(drawn), name) as figure:
        panels = figure.subplots(len(drawn), 1, squeeze=False)[:, 0]
        for panel, who in enumerate(busiest):
            own = [one for one in stages if one.subsolver == who]
            found = _shares(own)
            rows += [[who, *told] for told in _flat(own, found)]
            if panel < len(drawn):
                _draw_fates(panels[panel], found, f"{calls[who]:,} calls of {label(who, 40)}", panel)
        panels[-1].set_xlabel("stage: share of the budget spent")
        handles, labels = panels[0].get_legend_handles_labels()
        figure.legend(handles, labels, loc="outside lower center", ncols=1)
        svg = finished(figure, name)
    more = f" {len(busiest) - 3} more subsolvers stand in the data." if len(busiest) > 3 else ""
    caption = (
        "Of the calls in each tenth of the budget, the share accepted, that changed a spin (an accepted answer may be "
        f"the configuration that stood there), and that lowered the energy; bars are 95 % intervals over runs.{more}"
    )
    alternative = "; ".join(f"{who}: {_overall(stages, who)}" for who in drawn)
    header = ["subsolver", "stage from", "stage to", "calls", "failed"]
    header += [f"{word}{end}" for _, word in FATES for end in ("", " low", " high")]
    header += ["mean hit probability of a shot", "calls for which it is known"]
    return Picture(name, "Acceptance by stage", caption, f"Over all stages, {alternative}.", svg, Table(header, rows))


def _overall(stages: Sequence[StageCount], who: str) -> str:
    own = [one for one in stages if one.subsolver == who]
    made = sum(one.calls for one in own)
    return ", ".join(f"{word} {sum(getattr(one, key) for one in own) / made:.0%}" for key, word in FATES)


def _shares(own: Sequence[StageCount]) -> dict[str, list[tuple[int, Interval]]]:
    """By fate: tenth and share, with an interval over runs."""
    numbers = {run: place for place, run in enumerate(dict.fromkeys(one.run for one in own))}
    found: dict[str, list[tuple[int, Interval]]] = {}
    for key, _ in FATES:
        for tenth in sorted({one.tenth for one in own}):
            there = [one for one in own if one.tenth == tenth]
            runs = np.array([numbers[one.run] for one in there], np.int64)
            counts = [np.array([float(getattr(one, word)) for one in there]) for word in (key, "calls")]
            found.setdefault(key, []).append((tenth, bootstrap(by_run(runs, *counts), ratio)))
    return found


def _flat(own: Sequence[StageCount], found: dict[str, list[tuple[int, Interval]]]) -> list[list[object]]:
    rows: list[list[object]] = []
    for place, (tenth, _) in enumerate(found[FATES[0][0]]):
        there = [one for one in own if one.tenth == tenth]
        surveyed = sum(one.surveyed for one in there)
        hits = sum(one.hits for one in there) / surveyed if surveyed else None
        shares = [end for key, _ in FATES for end in _ends_of(found[key][place][1])]
        counts = [sum(one.calls for one in there), sum(one.failed for one in there)]
        rows.append([tenth / 10, (tenth + 1) / 10, *counts, *shares, hits, surveyed])
    return rows


def _ends_of(spread: Interval) -> tuple[float, float, float]:
    return spread.value, spread.low, spread.high


def _draw_fates(axes: Axes, found: dict[str, list[tuple[int, Interval]]], title: str, panel: int) -> None:
    for place, (key, word) in enumerate(FATES):
        middles = [(tenth + 0.5) / 10.0 + 0.008 * (place - 1) for tenth, _ in found[key]]
        shares = [spread.value for _, spread in found[key]]
        tone = colour(SERIES[place])
        line = axes.plot(middles, shares, color=tone, marker=MARKS[place], linestyle=DASHES[place], label=word)
        marked(line, f"{key}-{panel}")
        known = [(x, spread) for x, (_, spread) in zip(middles, found[key], strict=True) if spread.known]
        bars = [axes.plot([x, x], [max(0.0, one.low), min(1.0, one.high)], color=tone, linewidth=1.2)[0]
                for x, one in known]  # fmt: skip
        marked(bars, f"{key}-{panel}-interval")
    axes.set_title(wrapped(title))
    axes.set_xlim(0.0, 1.0)
    axes.set_ylim(0.0, max(0.05, axes.get_ylim()[1]))
    axes.yaxis.set_major_formatter(lambda value, _: f"{100.0 * value:g} %")
