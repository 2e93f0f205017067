"""``resume`` for runs of ``sample``: measured series and the last checkpoint belong together, and both go on."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from patchwalk.commands.interrupts import listening
from patchwalk.commands.sampling import Sampled, SampleWatcher, carry_out_one, levels_of
from patchwalk.commands.solving import hired
from patchwalk.commands.stored_tasks import bits_may_differ, changes_allowed, check_settings_file, problem_of
from patchwalk.commands.tasks import SamplingTask, policy_of
from patchwalk.evidence.layout import RunFileError, as_f64, undamaged
from patchwalk.evidence.measured import stored_parts, stored_series
from patchwalk.evidence.runfile import RunFile
from patchwalk.evidence.stored import StoredFile, StoredRun, stored_file
from patchwalk.problem.ising import Problem
from patchwalk.records import Snapshot
from patchwalk.search.observables import Observables
from patchwalk.search.sampling import BoltzmannSampling
from patchwalk.settings import SamplingSettings


def holds_sampling(path: Path) -> bool:
    """Whether the first run of this run file is one of ``sample``."""
    with stored_file(path) as stored:
        runs = stored.runs()
    return bool(runs) and "burn_in" in runs[0].settings


def carry_on_sampling(
    path: Path, given: dict[str, Any], watcher: SampleWatcher, problem: Problem | None = None
) -> Sampled:
    """Go on with a sampling run; one that has ended already is given back as it is."""
    with stored_file(path) as stored:
        run = stored.runs()[0]
        task = _task_of(path, stored, run, problem, given)
        state = stored.last_checkpoint(run.number, task.problem)
        measured = _measured(stored, run, task)
        if run.status == "budget":
            return _ended(stored, run, task, measured)
    if "rules" not in state.details:
        raise RunFileError(f"{path}: was written before sampling runs could be resumed; sample anew")
    watcher.understood([task.problem.summary(), *bits_may_differ(run)])
    with listening(watcher.stopping) as interrupted, hired(task.settings) as workers:
        sampling = BoltzmannSampling(task.problem, task.plan, run.seed, None, interrupted, workers)
        sampling.go_on_from(state)
        sampling.observables = measured
        _check_lengths(path, sampling, state)
        runfile = RunFile(path, reopen=True)
        try:
            return carry_out_one(task, sampling, runfile, watcher, (run, state))
        finally:
            runfile.close()


def _task_of(
    path: Path, stored: StoredFile, run: StoredRun, given_problem: Problem | None, given: dict[str, Any]
) -> SamplingTask:
    """The task as it was when the run began; refuses where settings or problem have changed since."""
    check_settings_file(run, "sample")
    settings = SamplingSettings.model_validate({**run.settings, **changes_allowed(given), "run": path, "start": None})
    assert settings.cluster_size is not None
    return SamplingTask(
        problem=problem_of(run, stored.problem(run.problem), settings, given_problem, "sample"), source=run.source,
        settings=settings, policy=policy_of(settings, Path(), ""), cluster_size=settings.cluster_size, start=None,
        run_path=path, settings_file=run.settings_file, settings_table=run.settings_table,
    )  # fmt: skip


def _measured(stored: StoredFile, run: StoredRun, task: SamplingTask) -> Observables:
    """Everything measured so far: of a run that has ended its series, else the parts up to the last checkpoint."""
    plan = task.plan
    levels = len(plan.temperatures)
    seen = Observables.empty(plan.rounds, levels, plan.copies)
    with undamaged(stored.path, f"the measured series of run {run.number}"):
        if run.status == "budget":
            for level, one in enumerate(stored_series(stored, run.number)):
                seen.energies[:, level] = as_f64(one.energies).reshape(-1, plan.copies)
                seen.magnetisations[:, level] = as_f64(one.magnetisations).reshape(-1, plan.copies)
                seen.overlaps[:, level] = as_f64(one.overlaps)
            seen.measured = plan.rounds
        for part in stored_parts(stored, run.number):
            overlaps = as_f64(part.overlaps).reshape(-1, levels)
            rows = slice(part.first, part.first + len(overlaps))
            seen.energies[rows] = as_f64(part.energies).reshape(-1, levels, plan.copies)
            seen.magnetisations[rows] = as_f64(part.magnetisations).reshape(-1, levels, plan.copies)
            seen.overlaps[rows] = overlaps
            seen.measured = rows.stop
    return seen


def _check_lengths(path: Path, sampling: BoltzmannSampling, state: Snapshot) -> None:
    expected = max(0, state.round - sampling.plan.burn_in)
    if sampling.observables.measured != expected:
        raise RunFileError(
            f"{path}: is damaged: {sampling.observables.measured:,} measurements are kept, {expected:,} were taken by "
            f"round {state.round:,}; sample anew"
        )


def _ended(stored: StoredFile, run: StoredRun, task: SamplingTask, measured: Observables) -> Sampled:
    """What a run that has come to its end found."""
    row = next(stored.rows("SELECT * FROM runs WHERE run = ?", (run.number,)))
    names = ("status", "message", "calls", "failed_calls", "sweeps", "seconds", "compile_seconds")
    return Sampled(
        levels=levels_of(measured, task.plan.temperatures, len(task.problem)), rounds=measured.measured,
        burn_in=task.plan.burn_in, seed=run.seed, run_path=task.run_path, **{name: row[name] for name in names},
    )  # fmt: skip
