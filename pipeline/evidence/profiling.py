"""The profile of runs: where calls helped, from their replayed calls."""

from __future__ import annotations

import dataclasses
import html
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from patchwalk.clusters.policy import QUANTITIES
from patchwalk.evidence import profile_words
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
from patchwalk.evidence.rule_learning import Judgement, Lesson, suggested
from patchwalk.statistics import Interval, binomial_interval, bootstrap, by_run, ratio


@dataclass(frozen=True, eq=False, repr=False)
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
        return profile_words.sentence_of(self)

    def __str__(self) -> str:
        return "\n".join(profile_words.lines_of(self))

    def __repr__(self) -> str:
        return f"<profile of {len(self.replayed):,} calls in {len(self.replayed.run_names)} runs: {self.sentence}>"

    def _repr_html_(self) -> str:
        """What a notebook shows: all that is printed, in columns."""
        return f"<pre>{html.escape(str(self))}</pre>"

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
