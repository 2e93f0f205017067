"""The chapters of the page, section by section."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from patchwalk.clusters.features import FEATURES
from patchwalk.clusters.policy import QUANTITIES
from patchwalk.commands.reporting import (
    CallsWorth,
    Chapter,
    ComparedChapter,
    RunsChapter,
    ScalingChapter,
    settings_told,
)
from patchwalk.evidence.profile_words import exact_sentence
from patchwalk.evidence.profiling import Profile
from patchwalk.evidence.replayed import NONE
from patchwalk.evidence.scaling import AVERAGES
from patchwalk.interface.page import help_figures, run_figures, whole_figures, words
from patchwalk.interface.page.drawing import Picture
from patchwalk.interface.page.markup import Markup, Table, download, element, joined, listed, sentence
from patchwalk.problem.decoding import verdict
from patchwalk.statistics import bootstrap

SHOWN_RUNS, KEPT_SPINS = 60, 5000


def chapter_of(chapter: Chapter, number: int, everyone: Sequence[Chapter]) -> Markup:
    """One chapter, from its answer to its four lines."""
    others = [one for one in everyone if one is not chapter]
    name = f"c{number}"
    if isinstance(chapter, RunsChapter):
        parts, closing = _runs_parts(chapter, name, others), words.runs_closing(chapter, others)
    elif isinstance(chapter, ComparedChapter):
        parts, closing = _compared_parts(chapter, name), words.compared_closing(chapter, others)
    else:
        parts, closing = _scaling_parts(chapter, name), words.scaling_closing(chapter)
    heading = element("h2", title_of(chapter), id=name)
    return element("section", heading, *parts, _closing(closing), aria_labelledby=name)


def title_of(chapter: Chapter) -> str:
    """What a chapter is about."""
    if isinstance(chapter, RunsChapter):
        return f"Runs on {Path(chapter.source).name}"
    if isinstance(chapter, ComparedChapter):
        found = chapter.compared.comparison
        return f"{len(found.standings)} contenders at {found.budget:g} {found.unit}"
    return "Success against size"


def pictures(*found: Picture | None) -> Markup:
    """Pictures beside each other where the page is wide enough."""
    return element("div", *(one.as_html() for one in found if one is not None), class_="pictures")


def _runs_parts(chapter: RunsChapter, name: str, others: Sequence[Chapter]) -> Iterator[Markup]:
    yield element("p", chapter.problem.summary(), class_="soft")
    yield from _answer(chapter, name)
    yield element("h3", "The search")
    yield pictures(
        run_figures.progress(chapter, f"{name}-progress"), run_figures.fates(chapter.stages, f"{name}-fates")
    )
    if chapter.averages:
        rows = [
            [temperature, one.value, one.error if one.reliable else "too few samples", one.tau, one.effective]
            for temperature, one in chapter.averages
        ]
        header = ["temperature", "mean energy", "standard error", "autocorrelation time, rounds", "effective values"]
        yield Table(header, rows).as_html("Energies averaged over the Boltzmann law")
    yield from _worth(chapter.worth, name)
    yield from _scaling_elsewhere(others)
    yield from _runs_table(chapter)
    yield from _made_of(chapter.runs[0].versions, settings_told(chapter.runs))
    yield element("h3", "Cautions")
    yield listed(words.cautions(chapter))


def _answer(chapter: RunsChapter, name: str) -> Iterator[Markup]:
    """The answer in the user's terms, how good it is, and how that is known."""
    problem, best, answer = chapter.problem, chapter.best, chapter.answer
    bound, word = chapter.lower_bound, problem.objective_name.replace("_", " ")
    facts: list[tuple[str, Any]] = [(word, f"{answer.objective:,.10g}")]
    facts.append(("answer", verdict(len(answer.broken), len(answer.mended)) if chapter.checked else "not checked"))
    if "greedy_interference" in answer.value:
        facts.append(("a simple greedy rule gives", f"{answer.value['greedy_interference']:,.10g}"))
    if problem.objective(1.0) != 1.0 or problem.encoding is not None:
        facts.append(("energy", f"{best.energy:,.10g}"))
    if bound is not None:
        gap = max(0.0, best.energy - bound) / max(1.0, abs(best.energy))
        facts += [(f"bound on the {word}", f"{problem.objective(bound):,.10g}"), ("gap", f"{100 * gap:.3g} %")]
    state = "proved optimal" if words.proved(chapter) else best.status.replace("_", " ")
    facts += [("status", state), ("calls", f"{best.calls:,}"), ("seed", best.seed)]
    yield element("h3", "The answer")
    yield element("dl", *(element("div", element("dt", key), element("dd", value)) for key, value in facts),
                  class_="facts")  # fmt: skip
    said = [best.message] if best.message else []
    if words.proved(chapter) and best.status != "proved_optimal":
        said.append("the bound of another of these runs reaches its energy; patchwalk audit checks the certificate")
    if bound is None:
        said.append(f"no bound was computed; {words.command('bound', chapter.source)} looks for one")
    yield element("p", sentence("; ".join(said))) if said else Markup("")
    yield listed(map(sentence, chapter.notes))
    if chapter.spoken:
        yield element("pre", "\n".join(chapter.spoken))
    left = f"{chapter.left_out:,} more lines are left out here. " if chapter.left_out else ""
    if len(problem) <= KEPT_SPINS:
        names = problem.names or [""] * len(problem)
        rows = [[place + 1, names[place], int(spin)] for place, spin in enumerate(answer.spins)]
        link = download(Table(["number", "name", "spin"], rows), f"{name}-answer", "all spins as CSV")
        yield element("p", left, link)
    elif left or not chapter.spoken:
        wanted = element("code", words.command("resume", best.file, "--json"))
        yield element("p", left, "The whole answer is in the run file; ", wanted, " prints it.")


def _worth(worth: CallsWorth, name: str) -> Iterator[Markup]:
    """What calls were worth: everything that rests on replayed rivals, or how to get it."""
    yield element("h3", "What the calls were worth")
    if worth.profile is None:
        reason, wanted = words.missing_replay(worth)
        yield element("p", f"Help by stage, the map of help, rivals and break-even are missing: {reason}.")
        yield element("p", "This replays rivals on the very same clusters: ", element("code", wanted))
        return
    profile = worth.profile
    yield element("p", profile.sentence, class_="lead")
    runs = len(profile.replayed.run_names)
    alone = " One run has no interval over runs: run more seeds." if runs == 1 else ""
    yield element("p", f"{len(profile.replayed):,} calls of {profile.own} in {runs} run{'s' * (runs != 1)}; "
                  f"{profile.moved.value:.1%} of them changed a spin. Costs: {profile.cost_model}.{alone}")  # fmt: skip
    if NONE in profile.helps:
        yield element("p", words.SIGNED, class_="caution")
    yield element("h4", "By stage and by what a cluster looks like")
    yield pictures(
        help_figures.help_by_stage(profile, f"{name}-stage"), help_figures.map_of_help(profile, f"{name}-map"),
        help_figures.help_by_feature(profile, f"{name}-features"),
    )  # fmt: skip
    yield _glossary(profile)
    yield element("h4", "Rivals and break-even")
    yield pictures(help_figures.rivals_figure(profile, f"{name}-rivals"),
                   help_figures.break_even_figure(profile, f"{name}-breakeven"))  # fmt: skip
    yield from _rival_tables(profile)
    yield from _families(profile)
    yield element("h4", "The rule that follows")
    yield listed(_rule(profile))


def _glossary(profile: Profile) -> Markup:
    told = {**QUANTITIES, **{key: feature.sentence for key, feature in FEATURES.items()}}
    order = sorted(profile.tables, key=lambda key: -profile.explained[key])
    rows = [[key, f"{max(profile.explained[key], 0.0):.1%}", told.get(key, "")] for key in order]
    return Table(["quantity", "share of variance", "what it is"], rows).as_html(
        f"How much of the variance of help against {profile.baseline} each quantity explains"
    )


def _rival_tables(profile: Profile) -> Iterator[Markup]:
    rows = [
        [rival, one.drop, one.rival_drop, str(one.per_call), str(one.per_second), f"{one.exact:.0%}"]
        for rival, one in profile.helps.items()
    ]
    header = ["rival", "drop of the call", "drop of the rival", "help per call", "help per second", "exact"]
    yield Table(header, rows).as_html("Rivals on the very same clusters, in energy units")
    factors = [[rival, str(one)] for rival, one in profile.break_evens.items()]
    yield Table(["rival", "break-even factor"], factors).as_html("How many times faster calls must become")
    exact = exact_sentence(profile)
    if exact:
        yield element("p", sentence(exact), class_="soft")


def _families(profile: Profile) -> Iterator[Markup]:
    """Noise, shots and times, where rivals differ in them alone."""
    for limit in profile.noise:
        yield element("p", f"Noise, {limit.parameter}: {limit.sentence}.")
    for best in profile.settings:
        rows = [[one.setting or "default", str(one.drop), str(one.per_second), str(one.worth)] for one in best.members]
        yield Table([best.parameter, "drop", "drop per second", f"worth against {profile.baseline}"], rows).as_html(
            f"{best.parameter}: most drop per second {best.fastest}; worth most a call {best.worthiest}, "
            f"{best.over_own} more than {profile.own}"
        )


def _rule(profile: Profile) -> Iterator[str]:
    found = profile.judgement
    if len(profile.replayed.run_names) < 2:
        yield "One run cannot be parted into runs to learn a rule on and others to judge it on: run more seeds."
        return
    yield f"Learnt on {found.learnt_on} of the runs: {found.rule}"
    yield f"Judged on the other {found.judged_on}: worth {found.worth} a cluster, {found.called_share:.0%} called"
    yield f"Always calling: worth {found.always}; the rule over always: {found.over_always}; never calling: 0"


def _scaling_elsewhere(others: Sequence[Chapter]) -> Iterator[Markup]:
    yield element("h3", "Scaling fit")
    if any(isinstance(one, ScalingChapter) for one in others):
        yield element("p", "Success against size stands in a chapter of its own on this page.")
        return
    wanted = element("code", words.command("scale", "sk", "--fields", "--sizes", "5..10", "--run", "scale.sqlite"))
    told = "These runs say nothing of how success falls with size. Measure it, and report on its file as well: "
    yield element("p", told, wanted)


def _runs_table(chapter: RunsChapter) -> Iterator[Markup]:
    yield element("h3", "Runs")
    word = chapter.problem.objective_name
    names = [word] if word == "energy" else [word, "energy"]
    rows = []
    for run in chapter.runs[:SHOWN_RUNS]:
        values = [chapter.problem.objective(run.energy)] + ([run.energy] if len(names) == 2 else [])
        rows.append([run.name, *values, run.status.replace("_", " "), run.calls, run.failed_calls, run.sweeps,
                     round(run.seconds, 3), run.subsolver, f"{run.file}, run {run.number}"])  # fmt: skip
    header = ["run", *names, "status", "calls", "failed", "sweeps", "seconds", "subsolver", "where"]
    yield Table(header, rows).as_html()
    if len(chapter.runs) > SHOWN_RUNS:
        yield element("p", f"{len(chapter.runs) - SHOWN_RUNS} more runs are left out here.")
    energies = np.array([run.energy for run in chapter.runs if run.command == "solve"])
    if len(energies) > 1:
        spread = bootstrap(np.stack([energies, np.ones(len(energies))], axis=1), lambda sums: sums[:, 0] / sums[:, 1])
        yield element("p", f"Mean energy of {len(energies)} runs: {spread}, a 95 % interval over runs.")
    elif len(energies) == 1:
        yield element("p", "One run has no interval; solve with --seeds 1..5 for one.")


def _made_of(versions: Any, settings: Sequence[tuple[str, list[Any]]]) -> Iterator[Markup]:
    yield element("h3", "Settings, seeds and versions")
    told = [(key.replace("_", " "), _values(values)) for key, values in settings]
    yield _pairs(told)
    yield _pairs([(key, str(value)) for key, value in versions.items()])


def _pairs(told: Sequence[tuple[str, str]]) -> Markup:
    """Names and values in columns."""
    lines = [element("div", element("dt", key), element("dd", value)) for key, value in told]
    return element("dl", *lines, class_="pairs")


def _values(values: Sequence[Any], most: int = 4) -> str:
    told = [("yes" if value is True else "no" if value is False else str(value)) for value in values[:most]]
    more = f" and {len(values) - most} more" if len(values) > most else ""
    return " | ".join(told) + more


def _compared_parts(chapter: ComparedChapter, name: str) -> Iterator[Markup]:
    found = chapter.compared.comparison
    yield element("p", f"{len(found.outcomes)} whole runs, each worth {found.budget:g} {found.unit}, on "
                  f"{len(found.instances)} instance(s): {_values(found.instances, 8)}")  # fmt: skip
    yield element("h3", "The answer")
    yield listed(map(sentence, found.sentences), class_="lead")
    yield pictures(
        whole_figures.residuals(chapter.compared, f"{name}-residuals"),
        whole_figures.duels_figure(chapter.compared, f"{name}-pairs"),
        whole_figures.budget_figure(chapter.compared, f"{name}-budget"),
        whole_figures.solved_figure(chapter.compared, f"{name}-solved"),
    )  # fmt: skip
    rows = [[one.contender, str(one.residual), _reached(one.solution.value, found.unit), one.solution.successes,
             one.solution.trials, one.median_reach] for one in found.standings]  # fmt: skip
    header = ["contender", "residual energy per spin", "time to solution at 99 %", "met the reference", "of runs",
              f"median {found.unit} to it"]  # fmt: skip
    yield Table(header, rows).as_html("Contenders")
    yield Table(["instance", "reference energy"], list(map(list, found.references.items()))).as_html("References")
    yield from _worth(chapter.worth, name)
    seeds = sorted({run.seed for run in found.outcomes})
    shared = [(key, [value]) for key, value in chapter.compared.settings.items()
              if value is not None and key not in ("seed", "seeds", "subsolver", "callers", "run")]  # fmt: skip
    yield from _made_of(chapter.compared.versions, [("seeds", [seeds]), *shared])
    yield element(
        "p",
        "Settings are those of the first of these runs; contenders may differ in what their names say.",
        class_="soft",
    )
    yield element("h3", "Cautions")
    yield listed([*map(sentence, found.notes), words.SIMULATED, words.SAME_BITS])


def _reached(value: float, unit: str) -> str:
    return f"{value:,.4g} {unit}" if np.isfinite(value) else "never in these runs"


def _scaling_parts(chapter: ScalingChapter, name: str) -> Iterator[Markup]:
    scaled = chapter.scaled
    yield element("p", f"{scaled.what}; {chapter.file}")
    yield pictures(whole_figures.scaling_figure(scaled, f"{name}-scaling"))
    yield whole_figures.fits_table(scaled).as_html("Fits of the mean, with 95 % intervals over instances")
    every = whole_figures.fits_table(scaled, tuple(AVERAGES))
    yield element("p", download(every, f"{name}-fits", "fits of mean, median and mean of logarithms as CSV"))
    chosen = [[curve.name, size, spelling] for curve in scaled.curves for size, spelling in curve.chosen.items()]
    if chosen:
        yield Table(["curve", "size", "tuned to"], chosen).as_html("Times that were tuned")
    yield element("h3", "Cautions")
    failed = [f"{scaled.failed:,} calls FAILED and are left out."] if scaled.failed else []
    yield listed([sentence(scaled.caution), words.SIMULATED, *failed])


def _closing(closing: Any) -> Markup:
    lines = (("Helps", closing.helps), ("Where", closing.where), ("Break-even", closing.break_even),
             ("Untested", closing.untested))  # fmt: skip
    told = [element("p", element("strong", f"{key}: "), text) for key, text in lines]
    return joined([element("h3", "In four lines"), element("div", *told, class_="closing")])
