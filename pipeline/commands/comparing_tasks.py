"""What ``compare`` has to do: every contender on every instance, at one budget, checked before anything runs."""

from __future__ import annotations

import hashlib
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from patchwalk.commands.tasks import Task, task_from
from patchwalk.cost import priced, sweep_seconds
from patchwalk.engine import forecast_of
from patchwalk.evidence.compared_runs import ComparedRun, digest_text
from patchwalk.problem.ising import Problem
from patchwalk.search.calling import Caller
from patchwalk.search.replicas import Replicas
from patchwalk.settings_checks import SettingsError
from patchwalk.workers import Serial

NOBODY = ("none", "nothing")
NEVER = "k < 1"
"""The condition under which nobody is ever called: sweeps alone."""

UNITS = {"calls": "calls", "model_seconds": "model seconds", "seconds": "seconds"}
REFUSED = ("start", "answer", "bound", "seed", "target", "stall", "total_sweeps", "callers")
DECIDES_NOTHING = ("run", "workers", "engine", "scheduler", "mixed_workers", "seeds", "seed")
FEWEST_ROUNDS = 1


@dataclass(frozen=True, eq=False)
class Entry:
    """One run to be carried out: the task, whose only seed is the run's, and its name in the comparison."""

    task: Task
    compared: ComparedRun


@dataclass(frozen=True, eq=False)
class Question:
    """Inputs, contenders (tables of settings, each with a ``subsolver``), seeds and settings shared by all."""

    inputs: tuple[Problem | str | Path, ...]
    contenders: tuple[Mapping[str, Any], ...]
    settings: Mapping[str, Any]
    text: str = ""


def question_from(inputs: Sequence[Problem | str | Path], subsolvers: Sequence[Any], given: dict[str, Any]) -> Question:
    """The question of a TOML file with ``[[contenders]]``, or of inputs and subsolvers; ``given`` overrides a file."""
    table, folder, settings = {}, Path(), dict(given)
    if len(inputs) == 1 and not isinstance(inputs[0], Problem) and str(inputs[0]).endswith(".toml"):
        table, folder = _read_table(Path(inputs[0])), Path(inputs[0]).parent
    if "contenders" in table:
        named = table.pop("input", None)
        named = [named] if isinstance(named, str) else named
        if not isinstance(named, list) or not named or not all(isinstance(one, str) for one in named):
            raise SettingsError([f'{inputs[0]}: needs a key input = "FILE", or a list of files'])
        inputs = [folder / one for one in named]
        own = table.pop("contenders")
        text = str(table.pop("question", ""))
        settings = {**table, **settings}
        if any(budget in given for budget in UNITS):  # a budget given takes the place of the file's
            settings = {key: value for key, value in settings.items() if key not in UNITS or key in given}
    else:
        own, text = [], ""
    contenders = [{"subsolver": one} for one in subsolvers] or own
    return Question(tuple(inputs), tuple(_checked(contenders)), settings, text)


def _read_table(path: Path) -> dict[str, Any]:
    try:
        return tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise SettingsError([f"{path}: {error.strerror or error}"]) from error
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise SettingsError([f"{path}: not a TOML file: {error}"]) from error


def _checked(contenders: Sequence[Any]) -> list[Mapping[str, Any]]:
    if len(contenders) < 2:
        raise SettingsError(["a comparison needs at least two contenders: give --subsolver twice"])
    for place, one in enumerate(contenders):
        if not isinstance(one, Mapping) or "subsolver" not in one:
            raise SettingsError([f"contender {place + 1} needs a key subsolver"])
    names = [contender_name(one) for one in contenders]
    twice = next((name for place, name in enumerate(names) if name in names[:place]), None)
    if twice is not None:
        raise SettingsError([f"the contender {twice} is given twice; its runs would be the same"])
    return list(contenders)


def contender_name(contender: Mapping[str, Any]) -> str:
    """The subsolver as it was written, and what else sets this contender apart."""
    others = [f"{key.replace('_', ' ')} {value}" for key, value in contender.items() if key != "subsolver"]
    subsolver = contender["subsolver"]
    if isinstance(subsolver, Mapping):
        name, *rest = [subsolver.get("name", "?"), *(f"{k}={v}" for k, v in subsolver.items() if k != "name")]
        subsolver = ",".join([str(name), *rest])
    return ", ".join([subsolver if isinstance(subsolver, str) else getattr(subsolver, "name", "?"), *others])


def entries_of(question: Question, spelled_as: str = "{}") -> list[Entry]:
    """Every run of the comparison, instance by instance, seed by seed, contender by contender."""
    settings = dict(question.settings)
    refused = [key for key in REFUSED if settings.get(key) is not None]
    if refused:
        raise SettingsError([f"{spelled_as.format(key)} has no place in a comparison; leave it out" for key in refused])
    budgets = [key for key in UNITS if settings.get(key) is not None]
    if len(budgets) != 1:
        said = " and ".join(budgets) or "none"
        raise SettingsError([f"give one budget of calls, model_seconds and seconds (given: {said})"])
    unit = budgets[0]
    budget = _number(settings.pop(unit), unit)
    settings.setdefault("seeds", "1..5")
    entries = []
    for number, source in enumerate(question.inputs):
        tasks = [_task(source, contender, settings, unit, budget, spelled_as) for contender in question.contenders]
        instance = tasks[0].source if not isinstance(source, Problem) else f"problem {number + 1}"
        for seed in tasks[0].settings.every_seed:
            for contender, task in zip(question.contenders, tasks, strict=True):
                entries.append(_entry(task, instance, contender_name(contender), seed, unit, budget))
    return entries


def _number(value: Any, unit: str) -> float:
    try:
        number = float(value)
    except (TypeError, ValueError):
        number = 0.0
    if not 0.0 < number < float("inf"):
        raise SettingsError([f"{unit} must be a number above 0 (given: {value!r})"])
    return number


def _task(
    source: Problem | str | Path, contender: Mapping[str, Any], settings: Mapping[str, Any], unit: str, budget: float,
    spelled_as: str,
) -> Task:  # fmt: skip
    given = {**settings, **contender}
    if isinstance(given["subsolver"], str) and given["subsolver"] in NOBODY:
        del given["subsolver"]
        given["callers"] = f"[{{when = '{NEVER}', subsolver = 'uniform'}}]"
        if str(given.get("sweeps", "")) == "0":
            raise SettingsError(["the contender none does nothing but sweeps, and sweeps is 0; give at least 1"])
    wanted = {"calls": str(int(budget)), "seconds": str(budget), "model_seconds": "1"}[unit]
    given["seconds" if unit == "seconds" else "calls"] = wanted if "-" in spelled_as else float(wanted)
    if "calls" in given and "-" not in spelled_as:
        given["calls"] = int(given["calls"])
    task = task_from(source, given, spelled_as)
    if unit == "model_seconds":
        task = replace(task, settings=task.settings.model_copy(update={"calls": calls_worth(task, budget)}))
    return task


def calls_worth(task: Task, model_seconds: float) -> int:
    """Calls whose counted work, sweeps included, costs about so much at the fixed prices.

    A round is forecast: the clusters that the rule finds room for, at the forecast price of each, and its sweeps at a
    spin update a spin. Forecasts are upper bounds for some subsolvers, so that a run may cost less than the budget.
    """
    caller = Caller(task.problem, task.policy, task.cluster_size, task.settings.acceptance, 1, Serial())
    replicas = Replicas.random(task.problem, task.replicas, 1)
    nothing = np.zeros(len(task.problem), np.int64)
    rule = task.rules.closed(task.problem, task.cluster_size).rules[0]
    cuts = caller.cuts(rule, replicas, 0, task.settings.clusters_per_round, nothing, replicas.spins[:0])
    clusters = sum(len(cut.members) for cut in cuts)
    subsolver = task.policy.cases[0].subsolver
    calling = 0.0
    if task.policy.cases[0].when is None and subsolver is not None:
        batch = caller.question(cuts[0], replicas, np.zeros(task.replicas))
        told = forecast_of(subsolver, batch)
        if told is None:
            raise SettingsError([f"{subsolver.name} cannot forecast its work; give a budget in calls or seconds"])
        calling = float(priced(told.work, len(batch)).mean()) * clusters
    size, degree = len(task.problem), 2.0 * task.problem.coupling_count / len(task.problem)
    sweeping = task.sweeps * sweep_seconds(size, degree, task.replicas)
    if calling + sweeping <= 0.0:
        raise SettingsError(["a round of this contender has no price; give a budget in calls or seconds"])
    rounds = max(FEWEST_ROUNDS, round(model_seconds / (calling + sweeping)))
    return rounds * clusters


def _entry(task: Task, instance: str, contender: str, seed: int, unit: str, budget: float) -> Entry:
    own = replace(task, settings=task.settings.model_copy(update={"seeds": None, "seed": seed}))
    decides = {
        key: value for key, value in own.settings.model_dump().items() if key not in DECIDES_NOTHING
    }  # fmt: skip
    facts = {
        "problem": task.problem.fingerprint, "instance": instance, "contender": contender, "seed": seed, "unit": unit,
        "budget": budget, "cluster_size": task.cluster_size, "settings": decides,
    }  # fmt: skip
    identity = hashlib.sha256(digest_text(facts).encode()).hexdigest()
    return Entry(own, ComparedRun(instance, contender, seed, identity, UNITS[unit], budget))
