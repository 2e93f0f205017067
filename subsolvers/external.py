"""A user's own backend: any program, in any language, that speaks JSON lines over its standard streams.

The protocol is described in DEVELOPERS.md, a program to start from is ``configs/device-template.py``. Whatever the
program does wrong becomes a failed call with a sentence; no other method ever answers in its place.
"""

from __future__ import annotations

import math
import shlex
from collections.abc import Mapping
from dataclasses import dataclass, field, fields, replace
from typing import Any, ClassVar, Self

import numpy as np
import numpy.typing as npt

from patchwalk.subsolvers.contract import (
    F64,
    Balance,
    ClusterBatch,
    Forecast,
    Proposals,
    Status,
    Work,
    refuse_oversize,
)
from patchwalk.subsolvers.external_process import CommandError, DeviceError, DeviceProcess
from patchwalk.subsolvers.external_protocol import (
    TIME_NAMES,
    Answer,
    Hello,
    answer_bytes,
    as_request,
    question,
)
from patchwalk.subsolvers.registry import SubsolverError
from patchwalk.subsolvers.uniform import require_shots

HELD = tuple(item.name for item in fields(Hello) if item.name not in ("name", "largest_cluster"))
"""What a hello says that a prepared subsolver holds under the same name."""


@dataclass(frozen=True)
class External:
    """``shots`` shots of every cluster from the program that ``command`` starts.

    ``command`` is a text, split as a shell would but run without one, or a list. ``timeout`` bounds the wait for every
    line, in seconds; ``restarts`` is how many times in a row a program that crashed or lost the thread is started
    again; ``log`` is the file that keeps its standard error, a temporary one where none is given.

    The rest is what the program says about itself (see :class:`~patchwalk.subsolvers.external_protocol.Hello`), filled
    in by :meth:`prepare`; before that ``max_spins`` limits nothing. The program runs beside the coordinator, one for
    all copies of this object in one process, and ends with :meth:`close` or with the process. Clusters whose numbers
    were rounded into the program's precision come back ``TRUNCATED`` with a sentence about what was lost.
    """

    command: str | list[str]
    shots: int = 1
    timeout: float = 60.0
    restarts: int = 3
    log: str | None = None
    device: str = ""
    max_spins: int = 1_000_000
    largest_batch: int = 1
    deterministic: bool = False
    coupling_range: float | None = None
    field_range: float | None = None
    precision_bits: int | None = None
    call_s: float = 0.01
    _process: DeviceProcess = field(init=False, repr=False, compare=False)

    name: ClassVar[str] = "external"
    balance: ClassVar[Balance] = "none"
    reports: ClassVar[tuple[str, ...]] = ("its own times", "what precision lost")

    def __post_init__(self) -> None:
        require_shots(self.name, self.shots)
        object.__setattr__(self, "command", _one_text(self.command))
        if not isinstance(self.timeout, (int, float)) or not 0 < self.timeout < math.inf:
            raise ValueError(f"external: timeout is {self.timeout!r}; give a positive number of seconds")
        if not isinstance(self.restarts, int) or self.restarts < 0:
            raise ValueError(f"external: restarts is {self.restarts!r}; give a whole number, 0 or more")
        self._have_a_process()

    def __getstate__(self) -> dict[str, Any]:
        return {key: value for key, value in self.__dict__.items() if key != "_process"}

    def __setstate__(self, state: dict[str, Any]) -> None:
        self.__dict__.update(state)
        self._have_a_process()

    def prepare(self, sample: ClusterBatch) -> Self:
        """A copy that holds what the program says about itself.

        Raises ``SubsolverError`` for a command that cannot be started and for clusters larger than the program takes.
        A program that starts but does not introduce itself is left to the calls, which fail with the reason.
        """
        try:
            ready = self._introduced()
        except CommandError as error:
            raise SubsolverError(f"external: {error}") from error
        except DeviceError:
            return self
        try:
            ready._refuse_oversize(sample)
        except ValueError as error:
            raise SubsolverError(str(error)) from error
        return ready

    def forecast(self, batch: ClusterBatch) -> Forecast:
        rows, pairs = len(batch), batch.size**2 if batch.edges is None else len(batch.edges.weights)
        return Forecast(
            bytes=64 * rows * (batch.size * (self.shots + 2) + pairs),
            work=_work(np.full(rows, self.shots), batch.size, {"wait_s": np.full(rows, float(self.call_s))}),
        )

    def propose(self, batch: ClusterBatch) -> Proposals:
        try:
            ready = self._introduced()
            if self.device and ready != self:
                raise DeviceError("introduces itself with other limits than when it was prepared; prepare it again")
        except DeviceError as error:
            return self._failed(batch, error)
        ready._refuse_oversize(batch)
        step = ready.largest_batch
        return _joined([ready._ask(batch.rows(at, min(len(batch), at + step))) for at in range(0, len(batch), step)])

    def close(self) -> None:
        """End the program; the next call would start it again."""
        self._process.close()

    def _have_a_process(self) -> None:
        assert isinstance(self.command, str)
        process = DeviceProcess(shlex.split(self.command), self.timeout, self.restarts, self.log)
        object.__setattr__(self, "_process", process)

    def _introduced(self) -> Self:
        """The copy that the running program's hello makes, sharing the program; starts it where it does not run."""
        hello = Hello.read(self._process.hello())
        said = {name: getattr(hello, name) for name in HELD}
        ready = replace(self, device=hello.name, max_spins=hello.largest_cluster, **said)
        object.__setattr__(ready, "_process", self._process)
        return ready

    def _refuse_oversize(self, batch: ClusterBatch) -> None:
        refuse_oversize(self.name, batch.size, self.max_spins, self.device)

    def _ask(self, batch: ClusterBatch) -> Proposals:
        """One request: at most as many clusters as the program takes at once."""
        rows, size = len(batch), batch.size
        limits = (self.coupling_range, self.field_range, self.precision_bits)
        questions = [question(batch, row, *limits) for row in range(rows)]
        try:
            limit = answer_bytes(rows, self.shots, size)
            answer = Answer(self._process.ask(as_request(questions, self.shots), limit), rows)
        except DeviceError as error:
            return self._failed(batch, error)
        nothing = self._failed(batch, DeviceError())
        outcomes, status, messages = nothing.outcomes.copy(), nothing.status, list(nothing.messages)
        times = {name: np.full(rows, math.nan) for name in TIME_NAMES}
        for row, asked in enumerate(questions):
            try:
                seconds = [answer.seconds(name, row) for name in TIME_NAMES]
                outcomes[row] = answer.shots(row, self.shots, size)
            except DeviceError as error:
                messages[row] = self._sentence(error)
                continue
            for name, value in zip(TIME_NAMES, seconds, strict=True):
                times[name][row] = value
            status[row] = Status.TRUNCATED if asked.lost else Status.OK
            messages[row] = self._sentence(asked.lost) if asked.lost else ""
        shots = np.where(status == Status.FAILED, 0, self.shots)
        return Proposals(outcomes, _work(shots, size, times), status, tuple(messages))

    def _failed(self, batch: ClusterBatch, reason: DeviceError) -> Proposals:
        """Every call failed and left as it was, for one reason."""
        rows = len(batch)
        return Proposals(
            outcomes=np.repeat(batch.spins[:, None, :], self.shots, axis=1),
            work=_work(np.zeros(rows), batch.size, {}),
            status=np.full(rows, Status.FAILED, np.uint8),
            messages=(self._sentence(reason),) * rows,
        )

    def _sentence(self, what: object) -> str:
        return f"external: {self.device or self.command}: {what}"


def _one_text(command: object) -> str:
    """A command, text or list, as one text that splits into its words again."""
    if isinstance(command, (list, tuple)) and all(isinstance(word, str) for word in command):
        command = shlex.join(command)
    try:
        if isinstance(command, str) and shlex.split(command):
            return command
    except ValueError as error:
        raise ValueError(f"external: command is {command!r}: {error}") from error
    raise ValueError(f"external: command is {command!r}; give a program and its arguments, as a text or a list")


def _work(shots: npt.NDArray[Any], size: int, times: Mapping[str, F64]) -> Work:
    """Shots, the spins they set, and such of the times as were given for any call."""
    shots = shots.astype(np.int64)
    given: dict[str, Any] = {name: seconds for name, seconds in times.items() if not np.all(np.isnan(seconds))}
    return Work(shots=shots, spin_updates=shots * size, **given)


def _joined(parts: list[Proposals]) -> Proposals:
    """The answers to several requests as the answer to one batch."""
    if len(parts) == 1:
        return parts[0]
    times = {}
    for name in TIME_NAMES:
        columns = [getattr(part.work, name) for part in parts]
        blanks = [np.full(len(part.status), math.nan) for part in parts]
        times[name] = np.concatenate([b if c is None else c for c, b in zip(columns, blanks, strict=True)])
    outcomes = np.concatenate([part.outcomes for part in parts])
    status = np.concatenate([part.status for part in parts])
    shots = np.where(status == Status.FAILED, 0, outcomes.shape[1])
    messages = tuple(message for part in parts for message in part.messages)
    return Proposals(outcomes, _work(shots, outcomes.shape[2], times), status, messages)
