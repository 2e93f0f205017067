"""``sample``: averages over the Boltzmann law, exactly and with error bars, every cluster call recorded."""

from __future__ import annotations

import time
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Protocol

from patchwalk.commands.interrupts import listening
from patchwalk.commands.solving import hired
from patchwalk.commands.tasks import SamplingTask, sample_task_from
from patchwalk.evidence.kept_answers import KeptAnswers
from patchwalk.evidence.layout import packed
from patchwalk.evidence.measured import Measured, MeasuredPart
from patchwalk.evidence.runfile import RunFacts, RunFile, RunWriter
from patchwalk.evidence.stored import StoredRun
from patchwalk.problem.ising import Problem
from patchwalk.records import Snapshot
from patchwalk.search.observables import Level, Observables
from patchwalk.search.sampling import BoltzmannSampling
from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.registry import spelled


@dataclass(frozen=True, eq=False)
class Sampled:
    """What was measured: ``levels``, one for each temperature, and how it was come by.

    ``status`` is ``budget`` or ``interrupted``; ``rounds`` those measured, ``burn_in`` those thrown away. Of a problem
    whose objective is not its energy (MaxCut), energies are E all the same.
    """

    levels: tuple[Level, ...]
    status: str
    message: str
    rounds: int
    burn_in: int
    calls: int
    failed_calls: int
    sweeps: int
    seconds: float
    compile_seconds: float
    seed: int
    run_path: Path

    def as_json(self) -> dict[str, Any]:
        """Plain values for ``--json``."""
        names = (
            "status", "message", "rounds", "burn_in", "calls", "failed_calls", "sweeps", "seconds", "compile_seconds",
            "seed",
        )  # fmt: skip
        return {
            "levels": [level.as_json() for level in self.levels],
            **{name: getattr(self, name) for name in names},
            "run_path": str(self.run_path),
        }


class SampleWatcher(Protocol):
    """Somebody who is told how sampling is going."""

    def understood(self, lines: list[str]) -> None: ...

    def compiling(self) -> None: ...

    def compiled(self, seconds: float) -> None: ...

    def measured(self, sampling: BoltzmannSampling, elapsed: float) -> None: ...

    def stopping(self) -> None: ...


class SilentSampleWatcher:
    """Watches and says nothing."""

    def understood(self, lines: list[str]) -> None:
        pass

    def compiling(self) -> None:
        pass

    def compiled(self, seconds: float) -> None:
        pass

    def measured(self, sampling: BoltzmannSampling, elapsed: float) -> None:
        pass

    def stopping(self) -> None:
        pass


def sample(problem: Problem | str | Path, **settings: Any) -> Sampled:
    """Averages over the Boltzmann law at the ``temperatures`` given, with cluster proposals of an admissible subsolver.

    Keywords are the names of :class:`patchwalk.settings.SamplingSettings`. Raises ``InadmissibleError`` for what
    would sample another law, and what :func:`patchwalk.solve` raises for problem and settings.

    >>> import os, tempfile
    >>> pair = Problem.from_arrays([0], [1], [1.0])
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     result = sample(pair, subsolver="walk,start=incumbent", cluster_size=2, temperatures=[1.0], rounds=400,
    ...                     run=os.path.join(folder, "pair.sqlite"))
    >>> energy = result.levels[0].energy  # exactly -tanh(1) = -0.7616
    >>> abs(energy.value + 0.7616) < 5 * energy.error
    True
    """
    return carry_out(sample_task_from(problem, settings), SilentSampleWatcher())


def carry_out(task: SamplingTask, watcher: SampleWatcher) -> Sampled:
    """:func:`sample`, watched."""
    watcher.understood([task.problem.summary(), *task.problem.notes])
    seed = 1 if task.settings.seed is None else task.settings.seed
    plan = task.plan  # refused combinations before anything is written
    with listening(watcher.stopping) as interrupted, hired(task.settings) as workers:
        sampling = BoltzmannSampling(task.problem, plan, seed, task.start, interrupted, workers)
        runfile = RunFile(task.run_path)
        try:
            return carry_out_one(task, sampling, runfile, watcher)
        finally:
            runfile.close()


def carry_out_one(
    task: SamplingTask,
    sampling: BoltzmannSampling,
    runfile: RunFile,
    watcher: SampleWatcher,
    earlier: tuple[StoredRun, Snapshot] | None = None,
) -> Sampled:
    """One run, or the rest of an ``earlier`` one that ``sampling`` has taken up: measured, recorded, averaged."""
    watcher.compiling()
    began = time.perf_counter()
    sampling.prepare()
    compile_seconds = time.perf_counter() - began
    watcher.compiled(compile_seconds)
    if earlier is None:
        before, writer = 0.0, runfile.begin(_facts(task, sampling), sampling.snapshot(0.0))
    else:
        run, state = earlier
        before, writer = state.seconds, runfile.take_up(run.number, task.problem, run.rows, state)
    sampling.caller.ask = KeptAnswers(runfile, writer.run).answers
    began, written = time.perf_counter(), sampling.observables.measured
    for round_ in sampling.sample():
        writer.add(round_)
        spent = before + time.perf_counter() - began
        if writer.due:
            written = _hand_over(writer, sampling, written)
            writer.close_group(sampling.snapshot(spent))
        watcher.measured(sampling, spent)
    _hand_over(writer, sampling, written)
    return _finished(task, sampling, writer, before + time.perf_counter() - began, compile_seconds)


def _hand_over(writer: RunWriter, sampling: BoltzmannSampling, written: int) -> int:
    """Give the writer what was measured since ``written`` measurements were; how many there are now."""
    seen = sampling.observables
    new = slice(written, seen.measured)
    if seen.measured > written:
        series = (seen.energies[new], seen.magnetisations[new], seen.overlaps[new])
        writer.add_part(MeasuredPart(written, *(one.tobytes() for one in series)))
    return seen.measured


def _finished(
    task: SamplingTask, sampling: BoltzmannSampling, writer: RunWriter, seconds: float, compile_seconds: float
) -> Sampled:
    measured, plan = sampling.observables.measured, sampling.plan
    whole = measured == plan.rounds
    status, message = ("budget", f"all {measured:,} rounds were measured") if whole else (
        "interrupted", f"interrupted; {measured:,} of {plan.rounds:,} rounds were measured")  # fmt: skip
    state = sampling.snapshot(seconds)
    writer.finish(
        state, status=status, message=message, calls=sampling.calls, failed_calls=sampling.failed_calls,
        skipped=sampling.caller.skipped, sweeps=sampling.sweeps, seconds=seconds, compile_seconds=compile_seconds,
        energy=state.best_energy, objective=task.problem.objective(state.best_energy), spins=packed(state.best_spins),
    )  # fmt: skip
    writer.write_measurements(_series(sampling), ended=whole)
    return Sampled(
        levels=levels_of(sampling.observables, plan.temperatures, len(task.problem)), status=status, message=message,
        rounds=measured, burn_in=plan.burn_in, calls=sampling.calls, failed_calls=sampling.failed_calls,
        sweeps=sampling.sweeps, seconds=seconds, compile_seconds=compile_seconds, seed=sampling.seed,
        run_path=task.run_path,
    )  # fmt: skip


def levels_of(seen: Observables, temperatures: F64, size: int) -> tuple[Level, ...]:
    """The averages at each temperature of a problem of ``size`` spins; none of fewer than two measured rounds."""
    if seen.measured < 2:
        return ()
    return tuple(seen.at_level(level, float(one), size) for level, one in enumerate(temperatures))


def _series(sampling: BoltzmannSampling) -> list[Measured]:
    seen, measured = sampling.observables, sampling.observables.measured
    return [
        Measured(
            float(temperature), sampling.plan.copies, seen.energies[:measured, level].tobytes(),
            seen.magnetisations[:measured, level].tobytes(), seen.overlaps[:measured, level].tobytes(),
        )
        for level, temperature in enumerate(sampling.plan.temperatures)
    ]  # fmt: skip


def _facts(task: SamplingTask, sampling: BoltzmannSampling) -> RunFacts:
    callers = "; ".join(
        "nothing" if case.subsolver is None else spelled(case.subsolver) for case in sampling.caller.policy.cases
    )
    settings = {**task.settings.model_dump(), "cluster_size": task.cluster_size, "seed": sampling.seed}
    return RunFacts(
        problem=task.problem, source=task.source, seed=sampling.seed, subsolver=callers, settings=settings,
        settings_file=task.settings_file, settings_table=task.settings_table, rows=task.settings.record,
    )  # fmt: skip
