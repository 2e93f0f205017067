"""The profile of runs: where calls helped, from their replayed calls."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from patchwalk.clusters.policy import QUANTITIES
from patchwalk.evidence.break_even import BreakEven, break_even
from patchwalk.evidence.help_tables import HelpBin, HelpMap, PairedHelp, explained, help_map, help_table, paired_help
from patchwalk.evidence.layout import RunFileError
from patchwalk.evidence.replayed import NONE, Replayed
from patchwalk.evidence.rival_families import (
    EFFORT,
    NOISE,
    BestSetting,
    NoiseLimit,
    best_settings,
    family,
    noise_limits,
    worths_of,
)
from patchwalk.evidence.rule_learning import FALSE_ALARMS, Judgement, Lesson, suggested
from patchwalk.statistics import Interval, binomial_interval, bootstrap, by_run, ratio

MODEL = "This is a model's answer: costs are those of the written model"
EXACT = ("enumeration", "elimination")
NO_CLOCK = "simulator time says nothing about a device."


@dataclass(frozen=True, eq=False)
class Profile:
    """Where calls of ``own`` helped, against the rivals replayed and above all against ``baseline``.

    ``helps``, ``break_evens`` by rival; ``tables`` by quantity, ``explained`` the share of the variance of help that
    each explains, ``map`` over the best two, all against the baseline; ``moved``, the share of calls that did anything;
    ``judgement``, the rule. ``replayed`` holds the arrays behind it all.
    """

    replayed: Replayed
    own: str
    baseline: str
    cost_model: str
    helps: Mapping[str, PairedHelp]
    break_evens: Mapping[str, BreakEven]
    tables: Mapping[str, tuple[HelpBin, ...]]
    explained: Mapping[str, float]
    map: HelpMap | None
    moved: Interval
    noise: tuple[NoiseLimit, ...]
    settings: tuple[BestSetting, ...]
    judgement: Judgement

    @property
    def verdict(self) -> str:
        """``call``, ``call when``, ``do not call`` or ``cannot tell``."""
        return self.judgement.verdict

    @property
    def sentence(self) -> str:
        """The one sentence in which it ends."""
        held = f"{self.baseline}" if self.baseline != NONE else "carrier sweeps for the same time"
        found, alarms = self.judgement, f"false alarms at most {FALSE_ALARMS:.0%}, unless few runs lose much"
        if found.verdict == "call":
            return f"Call {self.own}: worth {found.always} a call against {held} ({alarms})."
        if found.verdict == "call when":
            return f"Call when: {found.rule}; worth {found.promise} a call made against {held} ({alarms})."
        if found.verdict == "do not call":
            return f"Do not call {self.own}: worth {found.always} a call against {held}."
        few = "" if found.always.known else "; run more seeds"
        return f"Cannot tell from these runs: calls of {self.own} are worth {found.always} against {held}{few}."

    def __str__(self) -> str:
        return "\n".join(lines_of(self))

    def as_json(self) -> dict[str, Any]:
        """Plain values for ``--json``; what is unknown or infinite is None or the text ``infinite``."""
        fields = {field.name: getattr(self, field.name) for field in dataclasses.fields(self)}
        replayed = fields.pop("replayed")
        fields |= {"runs": list(replayed.run_names), "calls": len(replayed)}
        fields |= {"verdict": self.verdict, "sentence": self.sentence}
        fields |= {"rule": str(self.judgement.rule), "callers": self.judgement.rule.callers}
        return {name: plain(value) for name, value in fields.items()}


def profile_of(replayed: Replayed, baseline: str | None = None, cost_model: str = "the fixed prices") -> Profile:
    """The profile of replayed calls; the ``baseline`` is by default ``none``, else the strongest rival.

    Raises :class:`RunFileError` where no rival was replayed, or not the baseline.
    """
    held = baseline or (NONE if NONE in replayed.answers else _strongest(replayed))
    if held not in replayed.rivals:
        there = ", ".join(replayed.rivals) or "none at all"
        raise RunFileError(
            f"{replayed.run_names[0]}: {held or 'no rival'} was not replayed against {replayed.own}; there are: {there}"
        )
    return Profile(
        replayed=replayed, own=replayed.own, baseline=held, cost_model=cost_model,
        helps={rival: paired_help(replayed, rival) for rival in replayed.rivals},
        break_evens={rival: break_even(replayed, rival) for rival in replayed.rivals},
        tables={name: help_table(replayed, held, name) for name in replayed.quantities},
        explained={name: explained(replayed, held, name) for name in replayed.quantities},
        map=help_map(replayed, held), moved=_moved(replayed), noise=noise_limits(replayed, held),
        settings=best_settings(replayed, held), judgement=suggested(lesson_of(replayed, held)),
    )  # fmt: skip


def lesson_of(replayed: Replayed, baseline: str) -> Lesson:
    """What a rule may be learnt from: the calls on which every choice is known, and quantities known before a call.

    Choices are the subsolver itself and other subsolvers replayed, noisier ones and other efforts of the same apart.
    """
    alike = {name for parameter in (*NOISE, *EFFORT) for name in family(replayed, parameter)}
    others = [name for name in replayed.rivals if name not in (NONE, baseline) and name not in alike]
    worths = {name: worths_of(replayed, name, baseline) for name in (replayed.own, *others)}
    weights = replayed.answers[baseline].weights
    usable = (weights > 0.0) & ~np.isnan(worths[replayed.own])
    full = {name: own for name, own in worths.items() if not np.isnan(own[usable]).any()}
    quantities = {name: replayed.quantities[name][usable] for name in QUANTITIES}
    return Lesson(replayed.runs[usable], weights[usable], quantities, {name: own[usable] for name, own in full.items()})


def _strongest(replayed: Replayed) -> str:
    """The rival of the highest mean drop, empty where there is none."""
    return max(replayed.rivals, key=lambda rival: paired_help(replayed, rival).rival_drop, default="")


def _moved(replayed: Replayed) -> Interval:
    """The share of calls that changed a spin: over runs, or of one run as if its calls were independent."""
    weights = replayed.answers[replayed.own].weights
    over_runs = bootstrap(by_run(replayed.runs, weights * replayed.moved, weights), ratio)
    return over_runs if over_runs.known else binomial_interval(int(replayed.moved.sum()), len(replayed.moved))


def lines_of(profile: Profile) -> list[str]:
    """The profile in words and tables, a line each."""
    runs, one = len(profile.replayed.run_names), profile.replayed
    lines = [f"{len(one):,} calls of {profile.own} in {runs} run{'s' if runs > 1 else ''}; costs: {profile.cost_model}"]
    if runs == 1:
        lines.append("one run has no interval over runs: run more seeds")
    moved = profile.moved
    lines.append(f"{moved.value:.1%} [{moved.low:.1%}, {moved.high:.1%}] of the calls changed a spin")
    lines += ["", *_cost_lines(profile), ""]
    lines += [f"help per call against {profile.baseline}, by quantity (share of its variance explained)"]
    for name in sorted(profile.tables, key=lambda name: -profile.explained[name]):
        lines += _table_lines(name, profile.explained[name], profile.tables[name])
    if profile.map is not None:
        lines += ["", *_map_lines(profile.map)]
    lines += [line for limit in profile.noise for line in ("", f"noise: {limit.sentence}")]
    for best in profile.settings:
        lines += ["", f"{best.parameter}: most drop per second {best.fastest}; worth most a call {best.worthiest}"]
        lines += [f"  {m.setting or 'default':<14}drop {m.drop}  worth {m.worth}" for m in best.members]
        lines.append(f"  {best.worthiest} is worth {best.over_own} more a call than {profile.own}")
    return [*lines, "", *_rule_lines(profile), "", f"{MODEL}; {NO_CLOCK}", profile.sentence]


def _cost_lines(profile: Profile) -> list[str]:
    """Cost first: help and break-even against every rival."""
    width = max(map(len, profile.helps)) + 2
    lines = []
    for rival, found in profile.helps.items():
        lines.append(
            f"{rival:<{width}}help per second {found.per_second}, per call {found.per_call} "
            f"(drop {found.drop:.4g} against {found.rival_drop:.4g}, {found.calls:,} calls, {found.exact:.0%} exact)"
        )
        lines.append(f"{'':<{width}}break-even factor {profile.break_evens[rival]}")
    exact = [
        name for name, found in profile.helps.items() if name.split(",")[0] in EXACT and found.per_call.value <= 0.0
    ]
    if exact:
        lines.append(f"{' and '.join(exact)} win per call, as exact answers to small clusters must: look at the cost")
    return lines


def _table_lines(name: str, share: float, table: tuple[HelpBin, ...]) -> list[str]:
    lines = [f"{name} ({max(share, 0.0):.1%})"]
    return lines + [f"  {one.low:>9.4g} to {one.high:<9.4g}{one.calls:>8,} calls  {one.help}" for one in table]


def _map_lines(grid: HelpMap) -> list[str]:
    lines = [f"mean help by {grid.first} (down) and {grid.second} (across)"]
    heads = ["below", *(f"{edge:.3g}+" for edge in grid.second_edges)]
    lines.append(" " * 12 + "".join(f"{head:>10}" for head in heads))
    for head, means in zip(["below", *(f"{edge:.3g}+" for edge in grid.first_edges)], grid.means, strict=True):
        lines.append(f"{head:>12}" + "".join(f"{'.' if np.isnan(mean) else f'{mean:.3g}':>10}" for mean in means))
    return lines


def _rule_lines(profile: Profile) -> list[str]:
    found = profile.judgement
    share = f"{found.called_share:.0%} called"
    return [
        f"rule learnt on {found.learnt_on} of the runs: {found.rule}",
        f"  judged on the other {found.judged_on} with {found.worth.level:.1%} intervals:",
        f"  worth {found.worth} a cluster, {share}",
        f"  always: {found.always}; rule over always: {found.over_always}; never: 0",
    ]


def plain(value: Any) -> Any:
    """Numbers, texts, lists and tables that JSON knows."""
    if isinstance(value, np.ndarray):
        return [plain(one) for one in value.tolist()]
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {field.name: plain(getattr(value, field.name)) for field in dataclasses.fields(value)}
    if isinstance(value, tuple) and hasattr(value, "_asdict"):
        return plain(value._asdict())
    if isinstance(value, Mapping):
        return {str(key): plain(one) for key, one in value.items()}
    if isinstance(value, list | tuple):
        return [plain(one) for one in value]
    if isinstance(value, float) and not np.isfinite(value):
        return None if np.isnan(value) else ("infinite" if value > 0 else "-infinite")
    return value.item() if isinstance(value, np.generic) else value
