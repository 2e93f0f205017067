"""The checks that any backend must pass, ours or a stranger's: a verdict for every promise of the contract.

:func:`check` spends a bounded number of cluster calls, which on a real device cost money; what it cannot afford it says
it did not check. What rests on statistics calls an honest backend broken with a probability of at most one in a
million each (``FALSE_ALARM``). The clusters are random, the same ones every time.
"""

from __future__ import annotations

import dataclasses
import pickle
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np

from patchwalk.subsolvers.complaints import shape_complaint, value_complaint
from patchwalk.subsolvers.conformance_laws import drawn_by_its_law, hit_probability, ratio, symmetry
from patchwalk.subsolvers.conformance_trial import (
    COUNTED,
    BrokenError,
    NotCheckedError,
    NotPromisedError,
    Trial,
    close,
    first_difference,
    glass,
    joined,
    picked,
)
from patchwalk.subsolvers.contract import Proposals, Status, Subsolver
from patchwalk.subsolvers.registry import SubsolverError, subsolver_from

Outcome = Literal["kept", "broken", "not promised", "not checked"]

FORECAST_FACTOR = 3.0
LARGEST_OVERSIZE = 2_000_000
LATE = 1.5
"""A call may take this many times its time-out, and a tenth of a second, before the time-out counts as broken."""


@dataclass(frozen=True)
class Verdict:
    """How a backend stands to one promise, and why, in a sentence."""

    promise: str
    outcome: Outcome
    sentence: str


def check(backend: str | Mapping[str, Any] | Subsolver, calls: int = 2000, size: int = 6) -> list[Verdict]:
    """A verdict for every promise, spending at most ``calls`` cluster calls on clusters of up to ``size`` spins.

    ``backend`` is spelled as everywhere, or already made. Laws that a simulator computes without drawing from them cost
    no call. Raises ``SubsolverError`` for a backend that cannot be made or started.

    >>> {verdict.outcome for verdict in check("uniform", calls=400)} <= {"kept", "not promised"}
    True
    """
    made = subsolver_from(backend)
    try:
        trial = _trial(made, calls, size)
        return [_verdict(promise, test, trial) for promise, test in PROMISES.items()]
    finally:
        close(made)


def _trial(made: Subsolver, calls: int, size: int) -> Trial:
    try:
        return Trial(made, calls, size)
    except SubsolverError:
        raise
    except NotCheckedError as error:
        raise SubsolverError(f"{made.name}: {error}") from error
    except Exception as error:
        raise SubsolverError(f"{made.name}: could not get ready: {type(error).__name__}: {error}") from error


def _verdict(promise: str, test: Callable[[Trial], str], trial: Trial) -> Verdict:
    try:
        return Verdict(promise, "kept", test(trial))
    except BrokenError as news:
        return Verdict(promise, "broken", str(news))
    except NotPromisedError as news:
        return Verdict(promise, "not promised", str(news))
    except NotCheckedError as news:
        return Verdict(promise, "not checked", str(news))
    except Exception as error:
        return Verdict(promise, "broken", f"{type(error).__name__}: {error}")


def _answers(trial: Trial) -> str:
    rows = 0
    for batch, answer in trial.samples:
        if isinstance(answer, Exception):
            raise BrokenError(f"raised {type(answer).__name__}: {answer}")
        if shape_complaint(answer, batch):
            continue
        rows += len(batch)
        for status, message in zip(answer.status.tolist(), answer.messages, strict=True):
            if status == Status.FAILED:
                raise BrokenError(f"a call of {batch.size} spins failed: {message or 'without a sentence'}")
            if (status == Status.OK) != (message == ""):
                raise BrokenError(f"a call of status {status} has the message {message!r}")
    if not rows:
        raise NotCheckedError("there was no answer of the right shape to look at")
    return f"{rows} calls answered"


def _shapes(trial: Trial) -> str:
    shots = set()
    for batch, answer in trial.samples:
        if isinstance(answer, Exception):
            raise NotCheckedError("there was no answer to look at")
        if complaint := shape_complaint(answer, batch):
            raise BrokenError(complaint)
        shots.add(answer.outcomes.shape[1])
    if len(shots) > 1:
        raise BrokenError(f"gives {sorted(shots)} shots a call, depending on the batch")
    sizes = ", ".join(str(batch.size) for batch, _ in trial.samples)
    return f"clusters of {sizes} spins, {shots.pop()} shots a call"


def _values(trial: Trial) -> str:
    for _, answer in trial.good_samples:
        if complaint := value_complaint(answer):
            raise BrokenError(complaint)
        well, shots = answer.status != Status.FAILED, answer.outcomes.shape[1]
        if answer.work.shots is not None and np.any(answer.work.shots[well] != shots):
            raise BrokenError(f"counts {answer.work.shots.tolist()} shots where {shots} came back")
    return "spins are +1 and -1, probabilities within 0 and 1, work not negative"


def _determinism(trial: Trial) -> str:
    _require_determinism(trial)
    batch = glass(4, trial.size)
    if name := first_difference(trial.ask(batch), trial.ask(batch)):
        raise BrokenError(f"claims to be deterministic, but {name} differs when the same batch is asked twice")
    return "the same batch twice, the same bits"


def _rows_alone(trial: Trial) -> str:
    _require_determinism(trial)
    batch = glass(6, trial.size)
    whole = trial.ask(batch)
    alone = joined([trial.ask(batch.rows(row, row + 1)) for row in range(6)])
    if name := first_difference(whole, alone):
        raise BrokenError(f"{name} of a call differs between a batch of 6 and the call alone")
    order = np.array([3, 0, 5, 1, 4, 2])
    if name := first_difference(whole, trial.ask(picked(batch, order)), order):
        raise BrokenError(f"{name} of a call depends on its place in the batch")
    return "batch, single calls and another order: the same bits"


def _equal_parameters(trial: Trial) -> str:
    if not dataclasses.is_dataclass(trial.subsolver):
        raise NotCheckedError("not a dataclass, so that there is no second one to make from its parameters")
    return _same_as_a_twin(trial, dataclasses.replace(trial.subsolver), "made from the same parameters")


def _pickling(trial: Trial) -> str:
    return _same_as_a_twin(trial, pickle.loads(pickle.dumps(trial.subsolver)), "pickled and read back")


def _same_as_a_twin(trial: Trial, twin: Subsolver, how: str) -> str:
    try:
        if twin != trial.subsolver:
            raise BrokenError(f"a second one, {how}, is not equal to the first")
        if not trial.subsolver.deterministic:
            return f"a second one, {how}, is equal to the first; equal bits are not promised"
        batch = glass(4, trial.size)
        first = trial.ask(batch)
        if name := first_difference(first, trial.ask(batch, trial.prepare(twin, batch))):
            raise BrokenError(f"{name} differs from that of a second one, {how}")
        return f"a second one, {how}, is equal and gives the same bits"
    finally:
        close(twin)


def _oversize(trial: Trial) -> str:
    size = trial.subsolver.max_spins + 1
    if size > LARGEST_OVERSIZE:
        raise NotCheckedError(f"takes up to {size - 1:,} spins, too many to go beyond")
    assert trial.good_samples  # a backend that answers nothing refuses nothing
    try:
        answer = trial.raw(glass(1, size), trial.subsolver)
    except ValueError as error:
        if not {str(size), str(size - 1)} & set(re.findall(r"\d+", str(error).replace(",", ""))):
            raise BrokenError(f"refuses {size} spins without naming its limit of {size - 1}: {error}") from error
        return f"{size:,} spins refused: {error}"
    except (NotCheckedError, MemoryError) as error:
        raise NotCheckedError(str(error)) from error
    if isinstance(answer, Proposals) and np.all(answer.status == Status.FAILED):
        return f"{size:,} spins refused: {answer.messages[0]}"
    raise BrokenError(f"answers {size} spins, its limit is {size - 1}; a ValueError that names the limit is due")


def _forecast(trial: Trial) -> str:
    counted = set()
    for batch, answer in trial.good_samples:
        if np.any(answer.status == Status.FAILED):
            raise NotCheckedError("there were failed calls")
        said = trial.subsolver.forecast(batch)
        if not said.bytes > 0:
            raise BrokenError(f"forecasts {said.bytes} bytes")
        for name in COUNTED:
            expected, done = getattr(said.work, name), getattr(answer.work, name)
            if done is None:
                continue
            counted.add(name)
            if expected is None:
                raise BrokenError(f"counts {name} but does not forecast them")
            if np.any(done > FORECAST_FACTOR * expected) or np.any(expected > FORECAST_FACTOR * done):
                raise BrokenError(
                    f"forecasts {expected[0]:,.6g} {name} for a call of {batch.size} spins and counts {done[0]:,.6g}"
                )
    if not counted:
        raise BrokenError("counts no work at all, not even shots")
    return f"{', '.join(sorted(counted))} within a factor of {FORECAST_FACTOR:g}"


def _inputs_untouched(trial: Trial) -> str:
    if trial.touched:
        raise BrokenError(f"changed the {', '.join(sorted(trial.touched))} of a batch")
    return "every batch came back as it was given"


def _time_outs(trial: Trial) -> str:
    limit = getattr(trial.subsolver, "timeout", None)
    if not isinstance(limit, (int, float)):
        raise NotPromisedError("has no timeout")
    if trial.slowest > LATE * limit + 0.1:
        raise BrokenError(f"its timeout is {limit:g} s, a call took {trial.slowest:.3g} s")
    return f"its timeout is {limit:g} s, the slowest call took {trial.slowest:.2g} s"


PROMISES: dict[str, Callable[[Trial], str]] = {
    "answers": _answers,
    "shapes": _shapes,
    "values": _values,
    "determinism": _determinism,
    "rows alone": _rows_alone,
    "equal parameters": _equal_parameters,
    "pickling": _pickling,
    "oversize": _oversize,
    "forecast": _forecast,
    "hit probability": hit_probability,
    "symmetry": symmetry,
    "ratio": ratio,
    "law": drawn_by_its_law,
    "inputs untouched": _inputs_untouched,
    "time-outs": _time_outs,
}
"""Every promise by name; the cheap ones come first, and whatever calls are left go to the statistics."""


def _require_determinism(trial: Trial) -> None:
    if not trial.subsolver.deterministic:
        raise NotPromisedError("does not claim to be deterministic")
