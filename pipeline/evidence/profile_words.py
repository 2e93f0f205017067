"""A profile in words and tables, for people: cost first, then where calls helped, then the rule and one sentence."""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Iterator
from typing import TYPE_CHECKING

import numpy as np

from patchwalk.clusters.features import FEATURES
from patchwalk.clusters.policy import QUANTITIES
from patchwalk.evidence.gaps import GAP, gap_sentence
from patchwalk.evidence.help_tables import HelpBin, HelpMap
from patchwalk.evidence.replayed import NONE
from patchwalk.evidence.rival_families import BestSetting, Member, NoiseLimit, parts_of
from patchwalk.evidence.rule_learning import FALSE_ALARMS, NOBODY

if TYPE_CHECKING:
    from patchwalk.evidence.profiling import Profile

MODEL = "This is a model's answer: costs are those of the written model"
NO_CLOCK = "simulator time says nothing about a device."
EXACT = ("enumeration", "elimination")
MEANINGS = {name: feature.sentence for name, feature in FEATURES.items()} | dict(QUANTITIES)


def sentence_of(profile: Profile) -> str:
    """The one sentence in which a profile ends."""
    held = "carrier sweeps for the same time" if profile.baseline == NONE else profile.baseline
    found, own = profile.judgement, profile.own
    alarms = f"(false alarms at most {FALSE_ALARMS:.0%}, unless few runs lose much)"
    if found.verdict == "call":
        said = f"Call {own}: worth {found.always} a call against {held} {alarms}."
    elif found.verdict == "call when" and found.rule.conditions:
        said = f"Call when: {found.rule}; worth {found.promise} a call made against {held} {alarms}."
    elif found.verdict == "call when":
        said = f"Call {found.rule} instead of {own}: worth {found.promise} a call against {held} {alarms}."
    elif found.verdict == "do not call":
        said = f"Do not call {own}: worth {found.always} a call against {held}."
    else:
        few = "" if found.always.known else "; run more seeds"
        said = f"Cannot tell from these runs: calls of {own} are worth {found.always} against {held}{few}."
    return abbreviated(said, profile.replayed.answers)


def lines_of(profile: Profile) -> list[str]:
    """The profile in words and tables, a line each."""
    one, own = profile.replayed, profile.own
    runs, short = len(one.run_names), shown_names(one.answers)
    lines = [f"{len(one):,} calls of {short[own]} in {runs} run{'s' if runs > 1 else ''}; costs: {profile.cost_model}"]
    if runs == 1:
        lines.append("one run has no interval over runs: run more seeds")
    lines += [f"{brief} stands for {name}" for name, brief in short.items() if name != brief]
    moved = profile.moved
    lines.append(f"{moved.value:.1%} [{moved.low:.1%}, {moved.high:.1%}] of the calls changed a spin")
    body = ["", *_cost_lines(profile), "", *_feature_lines(profile)]
    if profile.map is not None:
        body += ["", *_map_lines(profile.map)]
    body += [line for limit in profile.noise for line in ("", *_noise_lines(limit))]
    body += [line for best in profile.settings for line in ("", *_setting_lines(best, own))]
    body += ["", *_rule_lines(profile), "", *_caution_lines(profile), f"{MODEL}; {NO_CLOCK}"]
    return [*lines, *(abbreviated(line, one.answers) for line in body), profile.sentence]


def shown_names(spellings: Iterable[str]) -> dict[str, str]:
    """What each subsolver is called in print: a program of the user's by the name it gives itself, all others in full.

    >>> shown_names(['external,command="./run",shots=2,device=lab,max_spins=9', "walk"])["walk"]
    'walk'
    """
    names = {spelling: _shown(spelling) for spelling in spellings}
    briefs = list(names.values())
    return {name: brief if briefs.count(brief) == 1 else name for name, brief in names.items()}


def _shown(spelling: str) -> str:
    name, given = parts_of(spelling)
    if name != "external" or "device" not in given:
        return spelling
    return ",".join([name, *(f"{key}={given[key]}" for key in ("device", "shots") if key in given)])


def abbreviated(text: str, spellings: Iterable[str]) -> str:
    """The text with every subsolver called as it is shown."""
    for spelling, brief in sorted(shown_names(spellings).items(), key=lambda pair: -len(pair[0])):
        if brief != spelling:
            text = text.replace(spelling, brief)
    return text


def _cost_lines(profile: Profile) -> list[str]:
    """Help and break-even against every rival."""
    lines = [
        "drop: the energy decrease to be expected of a call, what is accepted uphill counted against it",
        f"help: how much more {profile.own} lowers the energy than a rival does on the same clusters, in energy units",
        "break-even factor: how many times faster its calls must become to gain as much per second; below 1 they do "
        "already",
    ]
    for rival, found in profile.helps.items():
        sure = f"{found.calls:,} calls, {found.exact:.0%} exact"
        lines += [
            f"against {rival}" + (" (carrier sweeps for the time a call costs)" if rival == NONE else ""),
            f"  help per call      {found.per_call}  (drop {found.drop:.4g} against {found.rival_drop:.4g}; {sure})",
            f"  help per second    {found.per_second}",
            f"  break-even factor  {profile.break_evens[rival]}",
        ]
    return lines + [line for line in [exact_sentence(profile)] if line]


def exact_sentence(profile: Profile) -> str:
    """Which exact rivals win per call, and that this was to be expected; empty where none does."""
    exact = [
        name for name, found in profile.helps.items() if name.split(",")[0] in EXACT and found.per_call.value <= 0.0
    ]
    wins = "wins" if len(exact) == 1 else "win"
    told = f"{' and '.join(exact)} {wins} per call, as exact answers to small clusters must: look at the cost"
    return told if exact else ""


def _feature_lines(profile: Profile) -> Iterator[str]:
    """A table for each quantity that varies, those that tell most first."""
    yield f"help per call against {profile.baseline}, and the share of its variance that each quantity explains"
    alike = []
    for name in sorted(profile.tables, key=lambda name: -profile.explained[name]):
        table = profile.tables[name]
        if len(table) == 1 and table[0].low == table[0].high:
            alike.append(f"{name} {table[0].low:.4g}")
        elif table:
            meaning = MEANINGS[name].split(";")[0] if name in MEANINGS else ""
            yield f"{name} ({max(profile.explained[name], 0.0):.1%}): {meaning}"
            yield from (_bin_line(one, last=one is table[-1]) for one in table)
    if alike:
        yield f"the same for all calls: {', '.join(alike)}"
    if GAP in profile.tables:
        yield gap_sentence(profile.replayed.quantities[GAP])


def _bin_line(one: HelpBin, last: bool) -> str:
    place = f"{one.low:.4g}" if one.low == one.high else f"{one.low:.4g} to {'' if last else 'below '}{one.high:.4g}"
    return f"  {place:<26}{one.calls:>8,} calls  {one.help}"


def _map_lines(grid: HelpMap) -> Iterator[str]:
    """The map without rows and columns that hold no call."""
    rows, columns = (np.flatnonzero(grid.calls.sum(axis=axis)) for axis in (1, 0))
    firsts, seconds = _heads(grid.first_edges), _heads(grid.second_edges)
    left, wide = (2 + max(map(len, heads)) for heads in (firsts, [*seconds, "-8.49e-19"]))
    yield f"mean help per call by {grid.first} (down) and {grid.second} (across); a dot where there was no call"
    yield " " * left + "".join(f"{seconds[column]:>{wide}}" for column in columns)
    for row in rows:
        means = grid.means[row, columns]
        yield f"{firsts[row]:>{left}}" + "".join(f"{'.' if np.isnan(m) else f'{m:.3g}':>{wide}}" for m in means)


def _heads(edges: Iterable[float]) -> list[str]:
    cuts = [f"{edge:.3g}" for edge in edges]
    if not cuts:
        return ["all"]
    between = [f"{low} to {high}" for low, high in itertools.pairwise(cuts)]
    return [f"< {cuts[0]}", *between, f">= {cuts[-1]}"]


def _noise_lines(limit: NoiseLimit) -> Iterator[str]:
    yield f"noise, {limit.parameter}: {limit.sentence}"
    yield from map(_member_line, limit.members)


def _setting_lines(best: BestSetting, own: str) -> Iterator[str]:
    yield f"{best.parameter}: most drop per second {best.fastest}; worth most a call {best.worthiest}"
    yield from map(_member_line, best.members)
    if best.worthiest != own:
        yield f"  {best.worthiest} is worth {best.over_own} more a call than {own}"


def _member_line(one: Member) -> str:
    return f"  {one.setting or 'default':<14}drop {one.drop}  worth {one.worth} a call"


def _caution_lines(profile: Profile) -> Iterator[str]:
    """What a call is worth where it was made is not yet what it is worth to a run."""
    if profile.baseline == NONE and profile.helps[NONE].rival_drop <= 0.0:
        yield (
            "Carrier sweeps from these configurations raise the energy, at the temperature of the call: what calls "
            "gain there, later sweeps may take back."
        )
    yield "A call is judged where it was made; whether whole runs end lower with it, patchwalk compare tells."


def _rule_lines(profile: Profile) -> list[str]:
    found = profile.judgement
    rule = "call nobody" if str(found.rule) == NOBODY else found.rule
    return [
        f"rule learnt on {found.learnt_on} of the runs: {rule}",
        f"  judged on the other {found.judged_on}, whose seeds it never saw, with {found.worth.level:.1%} intervals:",
        f"  the rule is worth {found.worth} a cluster and calls for {found.called_share:.0%} of them",
        f"  always calling {profile.own} is worth {found.always}, never calling 0",
        f"  the rule is worth {found.over_always} more than always",
    ]
