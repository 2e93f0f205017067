"""Scaling measurements as their file holds them, fitted anew, nothing measured again."""

from __future__ import annotations

import contextlib
import sqlite3
from collections.abc import Iterator, Mapping, Sequence

import numpy as np

from patchwalk.commands.scaling import Scaled, ScalingCurve, curve_of, guessing_curve
from patchwalk.commands.scaling_measurements import timed_variants
from patchwalk.evidence.layout import RunFileError
from patchwalk.evidence.scaling import limit_sentence
from patchwalk.evidence.scaling_rows import ScalingRow, all_rows
from patchwalk.evidence.stored import StoredFile, read_only
from patchwalk.problem.families import make
from patchwalk.problem.ising import ProblemError
from patchwalk.subsolvers.registry import NotReadyError, SubsolverError, spelled, subsolver_from

Rows = dict[int, dict[int, ScalingRow]]
"""Rows by size and number of the instance."""


def stored_scaling(file: StoredFile) -> Scaled:
    """What :func:`patchwalk.commands.scaling.scale` found, from its file alone: the curves as given, tuned, guessing.

    Spellings that only stand there because times were tuned have no curve of their own.
    """
    try:
        with contextlib.closing(read_only(file.path)) as database:
            rows = all_rows(database)
            setup = dict(database.execute("SELECT key, value FROM scaling_setup"))
    except sqlite3.Error as error:
        raise RunFileError(f"{file.path}: could not be read: {error}") from error
    if not rows:
        raise RunFileError(f"{file.path}: holds no scaling measurement; patchwalk scale takes them")
    measured = [row for row in rows if not np.isnan(row.success)]
    what = setup.get("instances", "instances of an unknown source")
    first = {row.size: row for row in reversed(rows)}
    spins = {size: _spins_of(first[size], what) for size in sorted(first)}
    by_spelling: dict[str, Rows] = {}
    for row in measured:
        by_spelling.setdefault(row.subsolver, {}).setdefault(row.size, {})[row.instance] = row
    curves = list(_curves(by_spelling, spins))
    guesses = {spins[size]: {} for size in sorted(spins)}  # type: dict[int, dict[int, float]]
    for row in rows:
        guesses[spins[row.size]][row.instance] = row.guess
    shares = {size: np.array([own[number] for number in sorted(own)]) for size, own in guesses.items()}
    return Scaled(
        what, (*curves, guessing_curve(shares)), limit_sentence(sorted(spins.values())), len(rows) - len(measured),
        "finished", file.path,
    )  # fmt: skip


def _curves(by_spelling: Mapping[str, Rows], spins: Mapping[int, int]) -> Iterator[ScalingCurve]:
    """As given, then tuned; variants come with whom they vary."""
    variants = {name: _variants(name) for name in by_spelling}
    sizes = max((own.keys() for own in by_spelling.values()), key=len, default=())
    most = max((len(one) for own in by_spelling.values() for one in own.values()), default=0)
    whole = [name for name, own in by_spelling.items() if all(len(own.get(size, ())) == most for size in sizes)]
    tuned_from = {name: next((one for one in whole if one != name and name in variants[one]), None) for name in whole}
    given = [name for name in whole if tuned_from[name] is None or _default(name, variants)]
    for name in given or list(by_spelling):
        own = by_spelling[name]
        yield curve_of(name, {spins[size]: list(own[size].values()) for size in sorted(own)})
        there = [one for one in variants[name] if one in by_spelling]
        if len(there) > 1:
            chosen = {size: _best_of(size, there, by_spelling) for size in sorted(own)}
            odd = {
                spins[size]: [row for number, row in sorted(by_spelling[one][size].items()) if number % 2]
                for size, one in chosen.items()
            }
            yield curve_of(f"{name}, times tuned", {size: own for size, own in odd.items() if own}, chosen)


def _default(name: str, variants: Mapping[str, Sequence[str]]) -> bool:
    """Whether a spelling is its own variant, and so was given like that."""
    return name in variants[name] and not any(name in own for one, own in variants.items() if one != name)


def _best_of(size: int, spellings: Sequence[str], by_spelling: Mapping[str, Rows]) -> str:
    """The spelling of largest mean success on the even instances, as ``scale`` tunes."""

    def mean(name: str) -> float:
        even = [row.success for number, row in by_spelling[name].get(size, {}).items() if number % 2 == 0]
        return float(np.mean(even)) if even else 0.0

    return max(spellings, key=mean)


def _variants(spelling: str) -> list[str]:
    try:
        return [spelled(one) for one in timed_variants(subsolver_from(spelling))]
    except (SubsolverError, NotReadyError):
        return []


def _spins_of(row: ScalingRow, what: str) -> int:
    """The number of spins: the size of a cluster, or of an instance made anew."""
    if not what.startswith("whole instances of "):
        return row.size
    with contextlib.suppress(ProblemError, ValueError, TypeError):
        family, size, _, seed = row.origin.split()
        return len(make(family, int(size), seed=int(seed)))
    return row.size
