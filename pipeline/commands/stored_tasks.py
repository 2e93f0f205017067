"""What a stored run was told to do: its settings and its problem, refused where either has changed since."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np

from patchwalk.commands.tasks import read_again
from patchwalk.evidence.stored import StoredRun
from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.settings import SearchSettings
from patchwalk.settings_checks import SettingsError, read_settings
from patchwalk.workers import versions

CHANGEABLE = ("workers", "engine", "scheduler", "mixed_workers")
"""Settings that change no bit of a result and may be given anew."""


def changes_allowed(given: dict[str, Any]) -> dict[str, Any]:
    """Settings of a stored run that are given anew, or forgotten; raises :class:`SettingsError` for all others."""
    unknown = [key for key in given if key not in CHANGEABLE]
    if unknown:
        raise SettingsError(
            [f"{unknown[0]} cannot be changed when a run is resumed; it may be: {', '.join(CHANGEABLE)}"]
        )
    return {"workers": None, "scheduler": None, "engine": "threads", **given}


def check_settings_file(run: StoredRun, command: str = "solve") -> None:
    """Refuse a settings file that says something else now, naming the key."""
    path = Path(run.settings_file)
    if not run.settings_file or not path.exists():
        return
    now = json.loads(json.dumps(read_settings(path)[1], default=str))
    for key in sorted({*now, *run.settings_table}):
        if now.get(key) != run.settings_table.get(key):
            raise SettingsError([
                f"{path}: {key} is {now.get(key, 'left out')!r} now, the run began with "
                f"{run.settings_table.get(key, 'none')!r}; put it back, or begin a new run with {command}"
            ])  # fmt: skip


def problem_of(
    run: StoredRun, kept: Problem, settings: SearchSettings, given: Problem | None, command: str = "solve"
) -> Problem:
    """The problem from where it came from, names and all, if it is still there and the same; else as it was kept."""
    place = "the problem given"
    found = given
    if found is None:
        if not Path(run.source).is_file():
            return kept
        place, found = run.source, read_again(run.source, settings)
    if found.fingerprint == kept.fingerprint:
        return found
    facts = ("kind", "offset", "row_starts", "neighbours", "couplings", "fields", "groups")
    differing = next(name for name in facts if not np.array_equal(getattr(found, name), getattr(kept, name)))
    words = {"row_starts": "couplings", "neighbours": "couplings"}
    raise ProblemError(
        f"{place}: the {words.get(differing, differing)} are not those the run began with; put the file back, or begin "
        f"a new run with {command}"
    )


def bits_may_differ(run: StoredRun) -> list[str]:
    """A sentence where the run began with another processor or other versions than are here; nothing else."""
    differing = [key for key, value in versions().items() if run.versions.get(key) != value]
    if not differing:
        return []
    key = differing[0]
    return [f"the run began with {key} {run.versions.get(key)}, here it is {versions()[key]}: bits may differ"]
