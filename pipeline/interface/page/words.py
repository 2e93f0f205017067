"""What the page says in sentences: cautions, what is missing and how to get it, and the four lines at the end."""

from __future__ import annotations

import shlex
from collections.abc import Iterator, Sequence
from typing import NamedTuple

import numpy as np

from patchwalk.commands.reporting import CallsWorth, ComparedChapter, RunsChapter, ScalingChapter
from patchwalk.evidence.help_tables import HelpBin
from patchwalk.evidence.profiling import Profile
from patchwalk.evidence.replayed import NONE
from patchwalk.problem.beacons import CAUTION

STRONG = ("enumeration", "elimination", "metropolis", "tabu", "descent", "uniform", NONE)
"""Rivals that are worth asking for by name."""

SIGNED = (
    "Beware of the rival none. It stands for carrier sweeps from the same whole configuration, for the time a call "
    "costs, and its drop is signed. Where the temperature is hotter than the configuration, sweeps raise the energy "
    "and their drop is negative: a call then looks good against none merely because it does little. Just after a "
    "random start sweeps fall fast, and every call looks bad. Read help against none at the cold stages, and beside "
    "another rival."
)
MODEL = (
    "A break-even figure is a model's answer: it follows from the written prices, and says nothing of when, or "
    "whether, a device will be that fast."
)
SIMULATED = "Quantum subsolvers are simulated: their seconds, simulator time, say nothing about the time of a device."
SAME_BITS = (
    "The same bits are promised for the same seed, settings and counted budget on the same kind of processor with the "
    "same library versions, named above. A budget in seconds lets the clock decide how far a run gets."
)
NOT_PROVED = "The answer is the best that was found. Nothing but a certificate proves that there is none better."


class Closing(NamedTuple):
    """The four lines with which a chapter ends."""

    helps: str
    where: str
    break_even: str
    untested: str


def cautions(chapter: RunsChapter) -> Iterator[str]:
    """What a reader must bear in mind; the demo's own caution only where the demo is the problem."""
    if chapter.problem.kind == "beacons":
        yield CAUTION
    if chapter.best.status != "proved_optimal" and not proved(chapter):
        yield NOT_PROVED
    if chapter.worth.profile is not None:
        yield MODEL
    yield SIMULATED
    yield SAME_BITS
    versions = [dict(run.versions) for run in chapter.runs]
    if any(one != versions[0] for one in versions):
        yield "These runs were made by different versions or processors: between them, bits may differ."
    unfinished = [run.name for run in chapter.runs if run.status in ("unfinished", "running", "interrupted", "error")]
    if unfinished:
        yield f"Not carried through to the end of the budget: {', '.join(unfinished)}."
    failed = sum(run.failed_calls for run in chapter.runs)
    if failed:
        yield f"{failed:,} calls FAILED and changed nothing; their rows in the run file hold the reasons."


def proved(chapter: RunsChapter) -> bool:
    """Whether the bound of these runs reaches the energy of the answer."""
    bound = chapter.lower_bound
    return bound is not None and bound >= chapter.best.energy - chapter.problem.tie_tolerance


def command(*words: str) -> str:
    """A command as it can be typed."""
    return shlex.join(["patchwalk", *words])


def missing_replay(worth: CallsWorth) -> tuple[str, str]:
    """Why nothing is said of what calls were worth, and the command that would change it."""
    rivals = [word for rival in (NONE, "enumeration", "metropolis") for word in ("--rival", rival)]
    return worth.missing, command("replay", *worth.files, *rivals)


def runs_closing(chapter: RunsChapter, others: Sequence[object]) -> Closing:
    """Four lines on runs of one problem; ``others`` are the other chapters of the page."""
    worth = chapter.worth
    if worth.profile is None:
        nothing = "nothing is known, for no rival was replayed on these calls."
        return Closing(nothing, nothing, nothing, "; ".join(_untested_runs(chapter, others)) + ".")
    profile = worth.profile
    return Closing(helps_line(profile), where_line(profile), break_even_line(profile),
                   "; ".join(_untested_runs(chapter, others)) + ".")  # fmt: skip


def helps_line(profile: Profile) -> str:
    """Whom a call beats, to whom it loses, and with whom nobody can tell."""
    if len(profile.replayed.run_names) < 2:
        return _helps_once(profile)
    more: list[str] = []
    less: list[str] = []
    unclear: list[str] = []
    for rival, one in profile.helps.items():
        side = more if one.per_call.above_zero else less if one.per_call.below_zero else unclear
        side.append(f"{rival} ({one.per_call})")
    beginnings = (("is worth more than", more), ("is worth less than", less), ("cannot be told from", unclear))
    parts = [f"{words} {', '.join(those)}" for words, those in beginnings if those]
    verdict = {"call": "yes", "call when": "as part of the rule below", "do not call": "no"}
    told = verdict.get(profile.verdict, "cannot tell")
    return f"{told}; a call of {profile.own}, in energy units, {'; '.join(parts)}."


def _helps_once(profile: Profile) -> str:
    """The same from one run, which has no interval and therefore tells nothing of others."""
    signs = {"more than": 1.0, "less than": -1.0, "as much as": 0.0}
    parts = []
    for words, sign in signs.items():
        those = [f"{rival} ({one.per_call.value:.4g})" for rival, one in profile.helps.items()
                 if np.sign(one.per_call.value) == sign]  # fmt: skip
        parts += [f"{words} {', '.join(those)}"] if those else []
    return f"cannot tell from one run; in it a call of {profile.own} was worth {'; '.join(parts)}, without intervals."


def where_line(profile: Profile) -> str:
    """The rule where one was found, else the one place where help is surest."""
    if len(profile.replayed.run_names) < 2:
        return "cannot tell from one run; the pictures show where in it."
    if profile.verdict == "call when":
        return f"{profile.judgement.rule}; judged on runs it never saw."
    named = [(key, one) for key, table in profile.tables.items() for one in table if len(table) > 1]
    helping = [(key, one) for key, one in named if one.help.above_zero]
    if not helping:
        return f"nowhere against {profile.baseline} that these runs can tell, among {len(named)} ranges looked at."
    key, best = max(helping, key=lambda pair: pair[1].help.low)
    return (
        f"most surely where {key} is {_range(best)}: {best.help} a call against {profile.baseline} (the best of "
        f"{len(named)} ranges looked at, which flatters it)."
    )


def _range(one: HelpBin) -> str:
    return f"{one.low:.3g}" if one.low == one.high else f"{one.low:.3g} to {one.high:.3g}"


def break_even_line(profile: Profile) -> str:
    """The baseline's factor and the hardest one, with the sentence that says what they are."""
    known = {rival: one for rival, one in profile.break_evens.items() if not one.reason}
    hardest = max(known, key=lambda rival: known[rival].factor.value, default=None)
    told = dict.fromkeys([profile.baseline, *([hardest] if hardest is not None else [])])
    parts = [f"against {rival} {profile.break_evens[rival]}" for rival in told]
    return f"times faster that calls must become, {'; '.join(parts)}. A model's answer: {profile.cost_model}."


def _untested_runs(chapter: RunsChapter, others: Sequence[object]) -> Iterator[str]:
    """What these runs leave open."""
    yield "no device was asked" if not _asked_external(chapter) else "devices were asked at their own pace"
    if [run.command for run in chapter.runs].count("solve") == 1:
        yield "one run, so no interval: solve with --seeds 1..5"
    profile = chapter.worth.profile
    if profile is None:
        yield f"no rival was replayed: {missing_replay(chapter.worth)[1]}"
    else:
        yield from _untested_rivals(profile)
        yield from _unseen_calls(chapter, profile)
    if chapter.lower_bound is None:
        yield f"how low the energy can be: {command('bound', chapter.source)}"
    if not any(isinstance(one, ScalingChapter) for one in others):
        yield "how success scales with size: patchwalk scale"
    yield "other problems than this one"


def _asked_external(chapter: RunsChapter) -> bool:
    return any(one.subsolver.startswith("external") for one in chapter.stages)


def _untested_rivals(profile: Profile) -> Iterator[str]:
    names = {rival.split(",")[0] for rival in (*profile.replayed.rivals, profile.own)}
    absent = [rival for rival in STRONG if rival not in names]
    if absent:
        yield f"rivals not replayed: {', '.join(absent)}"
    if not profile.noise:
        yield "noise: no noisier rival was replayed"
    unread = [name for name, values in profile.replayed.quantities.items() if np.isnan(values).all()]
    if unread:
        yield f"features not read on clusters this large: {', '.join(unread)}"


def _unseen_calls(chapter: RunsChapter, profile: Profile) -> Iterator[str]:
    made = sum(one.calls for one in chapter.stages if one.subsolver == profile.own)
    if made > len(profile.replayed):
        yield f"{made - len(profile.replayed):,} of {made:,} calls of {profile.own} were not replayed"


def compared_closing(chapter: ComparedChapter, others: Sequence[object]) -> Closing:
    """Four lines on whole runs compared."""
    found = chapter.compared.comparison
    best = min(found.standings, key=lambda one: one.residual.value)
    told = [duel.verdict for duel in found.duels]
    helps = f"{'; '.join(told) or 'no two contenders share instance and seed'}."
    profile = chapter.worth.profile
    where = f"lowest on average: {best.contender}, at {best.residual} per spin over {len(found.instances)} instance(s)."
    missing = "whole runs at equal budget have no break-even factor; replay their calls for one."
    untested = ["no device was asked", f"other budgets than {found.budget:g} {found.unit}", "other instances and sizes"]
    if profile is None:
        untested.append(f"what single calls were worth: {missing_replay(chapter.worth)[1]}")
    if len(found.instances) < 2:
        untested.append("one instance, so that intervals speak of it alone")
    if not any(isinstance(one, ScalingChapter) for one in others):
        untested.append("how success scales with size: patchwalk scale")
    return Closing(helps, where, break_even_line(profile) if profile is not None else missing,
                   "; ".join(untested) + ".")  # fmt: skip


def scaling_closing(chapter: ScalingChapter) -> Closing:
    """Four lines on success against size."""
    scaled = chapter.scaled
    fitted = {curve.name: next((fit for fit in curve.fits if fit.average == "mean"), None) for curve in scaled.curves}
    known = {name: fit for name, fit in fitted.items() if fit is not None}
    guess = known.get("guessing")
    told = [f"{name} 2^(-{fit.exponent:.3f} k) [{fit.low:.3f}, {fit.high:.3f}]" for name, fit in known.items()]
    better = [name for name, fit in known.items() if guess is not None and fit.high < guess.low]
    helps = (
        f"mean success of a shot falls more slowly than guessing for {', '.join(better)}."
        if better
        else "no fall of success that is surely slower than that of guessing."
    )
    sizes = sorted({size for curve in scaled.curves for size in curve.success})
    where = f"{scaled.what}, {sizes[0]} to {sizes[-1]} spins: {'; '.join(told) or 'too few sizes for a fit'}."
    missing = "success against size has no break-even factor; solve and replay for one."
    untested = f"no device was asked; {scaled.caution}; other instances than these."
    return Closing(helps, where, missing, untested)
