"""What a suggested rule promises, written beside its settings, and whether later runs kept it.

The promise stands in the lines of a settings file that begin with ``#:``, which are a TOML of their own.
"""

from __future__ import annotations

import json
import tomllib
from collections.abc import Sequence
from dataclasses import asdict, dataclass, replace
from pathlib import Path

import numpy as np

from patchwalk.evidence.layout import RunFileError
from patchwalk.evidence.profiling import Profile
from patchwalk.evidence.replayed import NONE, Pricing, Replayed, fixed_prices, replayed_calls
from patchwalk.evidence.rival_families import worths_of
from patchwalk.evidence.rule_learning import NOBODY
from patchwalk.evidence.stored import StoredFile
from patchwalk.settings_checks import SettingsError
from patchwalk.statistics import Interval, bootstrap, by_run, ratio

MARK = "#:"


@dataclass(frozen=True)
class Promise:
    """``worth`` of a call that the rule makes, in energy units against the baseline ``against``, between ``low`` and
    ``high``; ``called`` are the subsolvers that it calls, ``cost_model`` what the costs were."""

    called: list[str]
    against: str
    worth: float
    low: float
    high: float
    cost_model: str


@dataclass(frozen=True)
class PromiseKept:
    """``kept``, ``broken`` or ``cannot tell``, with what was promised and found, and a sentence."""

    verdict: str
    promised: Promise
    found: Interval
    sentence: str


def promise_of(profile: Profile) -> Promise:
    """What the suggested rule promises for the calls it makes."""
    found = profile.judgement
    if found.verdict == "call":
        called, spread = [profile.own], found.always
    else:
        called = [name for name in dict.fromkeys((found.rule.then, found.rule.otherwise)) if name != NOBODY]
        spread = found.promise
    return Promise(called, profile.baseline, spread.value, spread.low, spread.high, profile.cost_model)


def promise_lines(promise: Promise) -> list[str]:
    """The promise as lines of a settings file."""
    return [f"{MARK} {key} = {json.dumps(value)}" for key, value in asdict(promise).items()]


def promise_from(path: Path) -> Promise:
    """The promise in a settings file; raises :class:`SettingsError` where there is none."""
    try:
        lines = path.read_text(encoding="utf-8").splitlines()
        table = tomllib.loads("\n".join(line.removeprefix(MARK) for line in lines if line.startswith(MARK)))
        return Promise(**table)
    except OSError as error:
        raise SettingsError([f"{path}: {error.strerror or error}; give the file that --apply wrote"]) from error
    except (tomllib.TOMLDecodeError, UnicodeDecodeError, TypeError) as error:
        raise SettingsError(
            [f"{path}: holds no promise in lines that begin with {MARK}; give the file that --apply wrote"]
        ) from error


def promise_kept(
    promise: Promise, files: Sequence[StoredFile], pricing: Pricing = fixed_prices, cost_model: str = "the fixed prices"
) -> PromiseKept:
    """Whether the calls made in these runs, which were replayed, are worth what was promised."""
    found = _worth(promise, [replayed_calls(files, own, pricing) for own in _replayed_of(promise, files)])
    kept = judged(promise, found)
    if promise.against != NONE or cost_model == promise.cost_model:
        return kept
    return replace(
        kept, sentence=f"{kept.sentence} Costs differ: promised under {promise.cost_model}, now {cost_model}."
    )


def judged(promise: Promise, found: Interval) -> PromiseKept:
    """Kept where what was found lies above zero and reaches the promise, broken where it ends below either."""
    if found.known and (found.high < promise.low or found.high <= 0.0):
        verdict, word = "broken", "The promise was not kept"
    elif found.above_zero:
        verdict, word = "kept", "The promise was kept"
    else:
        verdict, word = "cannot tell", "Cannot tell whether the promise was kept"
    promised = Interval(promise.worth, promise.low, promise.high, 0)
    runs = f"{found.runs} run" + ("" if found.runs == 1 else "s")
    few = "" if found.known else "; run more seeds"
    sentence = f"{word}: promised {promised} a call against {promise.against}, found {found} in {runs}{few}."
    return PromiseKept(verdict, promise, found, sentence)


def _replayed_of(promise: Promise, files: Sequence[StoredFile]) -> list[str]:
    """Which of the subsolvers called were replayed in these files."""
    there = {row["rival"] for file in files for row in file.rows("SELECT DISTINCT rival FROM replays")}
    found = [name for name in promise.called if name in there]
    if not found or promise.against not in there:
        path = files[0].path
        raise RunFileError(
            f"{path}: {' and '.join(promise.called)} were not replayed against {promise.against}; "
            f"patchwalk replay {path} --rival {promise.against}"
        )
    return found


def _worth(promise: Promise, parts: Sequence[Replayed]) -> Interval:
    """The mean worth of the calls made, over runs; runs of several parts are told apart by their names."""
    numbers = {name: number for number, name in enumerate(dict.fromkeys(n for part in parts for n in part.run_names))}
    sums = np.zeros((len(numbers), 2))
    for part in parts:
        worths = worths_of(part, part.own, promise.against)
        known = part.asked & ~np.isnan(worths)
        weights = part.answers[promise.against].weights[known]
        own = by_run(part.runs[known], weights * worths[known], weights)
        for run, row in enumerate(own):
            sums[numbers[part.run_names[run]]] += row
    return bootstrap(sums, ratio)
