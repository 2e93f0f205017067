"""``profile``: where the calls of runs helped, and the rule that follows from it."""

from __future__ import annotations

import contextlib
import json
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any

from patchwalk.evidence.cost_models import costs_of, hops_of, read_cost_model
from patchwalk.evidence.layout import RunFileError
from patchwalk.evidence.profiling import Profile, profile_of
from patchwalk.evidence.promises import PromiseKept, promise_from, promise_kept, promise_lines, promise_of
from patchwalk.evidence.replayed import Pricing, fixed_prices, replayed_calls
from patchwalk.evidence.stored import StoredFile, StoredRun, stored_file
from patchwalk.settings import SolveSettings
from patchwalk.subsolvers.contract import F64, ClusterBatch, Work
from patchwalk.subsolvers.registry import SubsolverError, subsolver_from

Runs = str | Path | Sequence[str | Path]

NOT_APPLIED = ("subsolver", "callers", "seed", "seeds", "run", "start")
"""Settings that the next solve does not take over from the runs."""

FILES = ("field_file",)


def profile(
    runs: Runs,
    cost: str | Path | None = None,
    *,
    subsolver: str | None = None,
    against: str | None = None,
    gap: bool = False,
) -> Profile:
    """Where the calls of one or more replayed run files helped; print it, or take its arrays.

    ``cost`` is a cost model in TOML, by default the fixed prices; ``subsolver``, spelled as in the run, by default the
    one that made most calls; ``against``, the rival against which tables and rule are made, by default ``none``.
    ``gap`` adds a table by the gap of the walk's Hamiltonian, of a share of the calls (:mod:`patchwalk.evidence.gaps`).
    Raises ``RunFileError`` for files that cannot be read or were not replayed, ``SettingsError`` for a cost model.
    """
    with _opened(runs) as files:
        pricing, about = _pricing(cost)
        return profile_of(replayed_calls(files, subsolver, pricing, gap), against, about)


def kept_promise(runs: Runs, promised: str | Path, cost: str | Path | None = None) -> PromiseKept:
    """Whether replayed runs made with the settings ``promised``, as ``--apply`` wrote them, kept their promise."""
    with _opened(runs) as files:
        return promise_kept(promise_from(Path(promised)), files, *_pricing(cost))


def apply_rule(profile: Profile, runs: Runs, path: str | Path) -> None:
    """Write the suggested rule as settings for the next ``solve``, on seeds that no run had.

    Raises :class:`RunFileError` where the profile does not advise to call, or the file cannot be written.
    """
    if profile.verdict not in ("call", "call when"):
        raise RunFileError(f"{path} is not written, for there is no rule to apply: {profile.sentence}")
    with _opened(runs) as files:
        stored = [run for file in files for run in file.runs()]
    try:
        Path(path).write_text("\n".join(_settings_lines(profile, stored)) + "\n", encoding="utf-8")
    except OSError as error:
        raise RunFileError(f"cannot write {path}: {error.strerror or error}; give a writable place") from error


@contextlib.contextmanager
def _opened(runs: Runs) -> Iterator[list[StoredFile]]:
    paths = [runs] if isinstance(runs, str | Path) else list(runs)
    if not paths:
        raise RunFileError("no run file is given; name one or more")
    with contextlib.ExitStack() as stack:
        yield [stack.enter_context(stored_file(Path(path))) for path in paths]


def _pricing(cost: str | Path | None) -> tuple[Pricing, str]:
    """How calls are priced, and what to call it."""
    if cost is None:
        return fixed_prices, "the fixed prices of counted work on one core, all of which a faster machine shortens"
    model = read_cost_model(cost)

    def price(spelling: str, batch: ClusterBatch | None, work: Work, rows: int) -> tuple[F64, F64]:
        hops = None
        with contextlib.suppress(SubsolverError):  # a rival that cannot be made here lasts one hop a shot
            if batch is not None and work.evolution_time is not None:
                hops = hops_of(subsolver_from(spelling), batch, work)
        costs = costs_of(model, work, rows, hops)
        return costs.total, costs.evolve

    return price, f"{model.about} ({cost})"


def _settings_lines(profile: Profile, runs: list[StoredRun]) -> list[str]:
    first, sources = runs[0], {run.source for run in runs}
    callers = [{"subsolver": profile.own}] if profile.verdict == "call" else profile.judgement.rule.callers
    fresh = max(run.seed for run in runs) + 1
    lines = ["# The rule that was learnt from replayed runs, as settings for the next solve. What it promises:"]
    lines += [*promise_lines(promise_of(profile)), ""]
    if len(sources) == 1 and Path(first.source).exists():
        lines.append(f"input = {json.dumps(str(Path(first.source).absolute()))}")
    else:
        lines.append('# input = "..."    the runs had no single file; name yours here')
    lines.append(f"seeds = {list(range(fresh, fresh + max(2, len(runs))))}")
    lines += [f"{key} = {_as_toml(value)}" for key, value in _taken_over(first.settings)]
    for case in callers:
        lines += ["", "[[callers]]", *(f"{key} = {json.dumps(value)}" for key, value in case.items())]
    return lines


def _taken_over(settings: dict[str, Any]) -> Iterator[tuple[str, Any]]:
    """The settings of a run that are not those every solve begins with."""
    for key, field in SolveSettings.model_fields.items():
        value = settings.get(key)
        if key in NOT_APPLIED or value is None or value == json.loads(json.dumps(field.default, default=str)):
            continue
        yield key, str(Path(value).absolute()) if key in FILES else value


def _as_toml(value: Any) -> str:
    if isinstance(value, dict):
        return "{" + ", ".join(f"{json.dumps(key)} = {_as_toml(own)}" for key, own in value.items()) + "}"
    return json.dumps(value)
