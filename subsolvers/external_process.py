"""A program that runs beside us and answers lines of JSON: started late, timed, restarted, and never left behind.

The program gets a session of its own, so that a Ctrl-C at the terminal does not reach it in the middle of a call. It
ends when its standard input closes; where it does not, it is terminated and then killed, with everything it started.
A guard of a few lines does that even when this process is killed outright.
"""

from __future__ import annotations

import contextlib
import json
import os
import selectors
import shlex
import signal
import subprocess
import sys
import tempfile
import threading
import time
import weakref
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any

GRACE_SECONDS = 2.0
"""How long a program may take to end by itself once its input is closed, and again once it is asked to terminate."""

HELLO_BYTES = 1 << 16
QUOTED_LINES = 3

GUARD = f"""
import os, signal, sys, time
if not os.read(0, 1):
    time.sleep({GRACE_SECONDS})
    os.killpg(int(sys.argv[1]), signal.SIGKILL)
"""
"""Waits for a byte that says all is well; when our end of its pipe closes without one, it ends the program."""


class DeviceError(Exception):
    """A program that did not answer as it should; the message is the sentence for the failed calls."""


class CommandError(DeviceError):
    """A command that cannot be started at all."""


class DeviceProcess:
    """One program, kept running from its first use on, and the rules for starting it again.

    ``timeout`` bounds the wait for every line, in seconds. After a crash or a line that makes no sense the program is
    started afresh at the next question, at most ``restarts`` times in a row without an answer in between.
    """

    def __init__(self, command: Sequence[str], timeout: float, restarts: int, log: str | None) -> None:
        self._command, self._timeout, self._restarts = tuple(command), timeout, restarts
        self._log = _Log(log)
        self._lock = threading.Lock()
        self._child: _Child | None = None
        self._hello: dict[str, Any] = {}
        self._serial = self._failures = 0
        self._last = ""

    def hello(self) -> dict[str, Any]:
        """The first line of the program, started if it does not run; raises :class:`DeviceError`."""
        with self._lock:
            self._ready()
            return self._hello

    def ask(self, question: dict[str, Any], limit: int) -> dict[str, Any]:
        """The line that answers ``question``, of at most ``limit`` bytes; raises :class:`DeviceError`."""
        with self._lock:
            child = self._ready()
            self._serial += 1
            line = json.dumps({"request": self._serial, **question}, allow_nan=False).encode() + b"\n"
            with self._blame(child):
                reply = child.exchange(line, limit, self._timeout)
                if type(reply.get("answer")) is not int or reply["answer"] != self._serial:
                    raise DeviceError(f"answered {str(reply.get('answer'))[:40]}, request {self._serial} was asked")
            self._failures = 0
            return reply

    def close(self) -> None:
        """End the program; the next question starts it again."""
        with self._lock:
            self._drop(GRACE_SECONDS)
            self._failures = 0

    def _ready(self) -> _Child:
        """The running program, started where there is none."""
        if self._child is not None and self._child.owner == os.getpid():
            return self._child
        if self._failures > self._restarts:
            raise DeviceError(
                f"not started again after {self._failures} failures in a row (restarts={self._restarts}); "
                f"the last: {self._last}"
            )
        if _on_a_dask_worker():
            raise DeviceError("runs beside the coordinator only, and this is a Dask worker; use the serial engine")
        child = self._child = _Child(self._command, self._log)
        with self._blame(child):
            self._hello = child.exchange(b"", HELLO_BYTES, self._timeout, "hello")
        return child

    @contextlib.contextmanager
    def _blame(self, child: _Child) -> Iterator[None]:
        """Stop the program where something goes wrong within the block, and quote its log in the sentence."""
        try:
            yield
        except DeviceError as error:
            self._drop(0.0)
            self._failures += 1
            self._last = f"{error}; {self._log.tail(child.log_start)}"
            raise DeviceError(self._last) from None
        except BaseException:  # an interrupt: the line in flight would answer the wrong question later
            self._drop(0.0)
            raise

    def _drop(self, grace: float) -> None:
        child, self._child = self._child, None
        if child is not None:
            child.stop(grace)


class _Child:
    """One start of the program, with its pipes."""

    def __init__(self, command: tuple[str, ...], log: _Log) -> None:
        self.owner = os.getpid()
        with log.opened() as errors:
            self.log_start = errors.tell()
            try:
                self._process = subprocess.Popen(
                    command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, stderr=errors, start_new_session=True
                )
            except OSError as error:
                raise CommandError(
                    f"cannot start {shlex.join(command)}: {error.strerror or error}; give a command that this machine "
                    "can run"
                ) from error
        self._guard = subprocess.Popen(
            [sys.executable, "-I", "-S", "-c", GUARD, str(self._process.pid)], stdin=subprocess.PIPE,
            stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, start_new_session=True,
        )  # fmt: skip
        self._finalizer = weakref.finalize(self, _end, self._process, self._guard, self.owner)
        self._pending = bytearray()
        for pipe in (self._process.stdin, self._process.stdout):
            assert pipe is not None
            os.set_blocking(pipe.fileno(), False)

    def stop(self, grace: float) -> None:
        """End the program, leaving it ``grace`` seconds to do so by itself."""
        if self._finalizer.detach():
            _end(self._process, self._guard, self.owner, grace)

    def exchange(self, line: bytes, limit: int, timeout: float, awaited: str = "answer") -> dict[str, Any]:
        """Send ``line`` and read the next one as a JSON object; raises :class:`DeviceError` with what went wrong."""
        answer = self._next_line(line, limit, time.monotonic() + timeout, f"no {awaited} within {timeout:g} s")
        if not answer.strip():
            raise DeviceError(f"sent an empty line where its {awaited} was due")
        try:
            value = json.loads(answer, parse_constant=_refuse_constant)
        except (ValueError, RecursionError) as error:
            raise DeviceError(f"sent a line that is not JSON ({error}): {_shown(answer)}") from None
        if not isinstance(value, dict):
            raise DeviceError(f"sent a line that is no JSON object: {_shown(answer)}")
        return value

    def _next_line(self, out: bytes, limit: int, deadline: float, too_late: str) -> bytes:
        """Write ``out`` while reading, so that neither side waits for the other's full pipe; the next line read."""
        process, unsent = self._process, memoryview(out)
        assert process.stdin is not None
        assert process.stdout is not None
        with selectors.DefaultSelector() as selector:
            selector.register(process.stdout, selectors.EVENT_READ)
            if unsent:
                selector.register(process.stdin, selectors.EVENT_WRITE)
            while (end := self._pending.find(b"\n", 0, limit)) < 0:
                if len(self._pending) >= limit:
                    raise DeviceError(f"sent a line longer than {limit:,} bytes, the limit for this question")
                for key, _ in selector.select(max(0.0, deadline - time.monotonic())):
                    if key.fileobj is process.stdin:
                        unsent = _written(process.stdin.fileno(), unsent)
                        if not unsent:
                            selector.unregister(process.stdin)
                    else:
                        self._read(process.stdout.fileno())
                if time.monotonic() >= deadline and b"\n" not in self._pending:
                    raise DeviceError(too_late)
        answer = bytes(self._pending[:end])
        del self._pending[: end + 1]
        return answer

    def _read(self, descriptor: int) -> None:
        try:
            chunk = os.read(descriptor, 1 << 16)
        except BlockingIOError:
            return
        if not chunk:
            raise DeviceError(self._how_it_ended())
        self._pending += chunk

    def _how_it_ended(self) -> str:
        middle = " in the middle of a line" if self._pending else ""
        try:
            code = self._process.wait(GRACE_SECONDS)
        except subprocess.TimeoutExpired:
            return f"closed its standard output{middle} and runs on"
        return f"ended{middle}, {f'by signal {-code}' if code < 0 else f'with exit code {code}'}"


class _Log:
    """Where the program's standard error goes: a file that is named, or a temporary one, removed if left empty."""

    def __init__(self, path: str | None) -> None:
        self._given, self._path = path, Path(path) if path else None

    def opened(self) -> Any:
        """The log, open for appending, at its end."""
        if self._path is None:
            descriptor, name = tempfile.mkstemp(prefix="patchwalk-device-", suffix=".log")
            os.close(descriptor)
            self._path = Path(name)
            weakref.finalize(self, _remove_if_empty, self._path)
        try:
            file = self._path.open("ab")
        except OSError as error:
            raise CommandError(
                f"cannot write the log {self._path}: {error.strerror or error}; give another place with log=FILE"
            ) from error
        file.seek(0, os.SEEK_END)
        return file

    def tail(self, start: int) -> str:
        """A clause that names the log and quotes its last lines from byte ``start`` on."""
        assert self._path is not None
        with contextlib.suppress(OSError), self._path.open("rb") as file:
            end = file.seek(0, os.SEEK_END)
            file.seek(max(start, end - 2000))
            lines = [line.strip() for line in file.read().decode(errors="replace").splitlines() if line.strip()]
            if lines:
                return f"its standard error, kept in {self._path}, ends: {' / '.join(lines[-QUOTED_LINES:])}"
        return f"it wrote nothing to its standard error ({self._path})"


def _written(descriptor: int, data: memoryview) -> memoryview:
    """What is left of ``data`` after writing what the pipe takes; nothing where nobody reads it any more."""
    try:
        return data[os.write(descriptor, data[: 1 << 16]) :]
    except BlockingIOError:
        return data
    except BrokenPipeError:
        return data[:0]


def _end(
    process: subprocess.Popen[bytes], guard: subprocess.Popen[bytes], owner: int, grace: float = GRACE_SECONDS
) -> None:
    """End the program with everything it started, then its guard; does nothing in a forked copy of ours."""
    if os.getpid() != owner:
        return
    for pipe in (process.stdin, process.stdout):
        assert pipe is not None
        with contextlib.suppress(OSError):
            pipe.close()
    for number in (signal.SIGTERM, signal.SIGKILL) if grace else (signal.SIGKILL,):
        with contextlib.suppress(subprocess.TimeoutExpired):
            process.wait(grace)
        with contextlib.suppress(ProcessLookupError, PermissionError):
            os.killpg(process.pid, number)
    process.wait()
    assert guard.stdin is not None
    with contextlib.suppress(OSError):
        guard.stdin.write(b".")
        guard.stdin.close()
    guard.wait()


def _remove_if_empty(path: Path) -> None:
    with contextlib.suppress(OSError):
        if path.stat().st_size == 0:
            path.unlink()


def _refuse_constant(word: str) -> None:
    raise ValueError(f"{word} is no number of JSON")


def _shown(line: bytes) -> str:
    return repr(line[:80].decode(errors="replace")) + ("..." if len(line) > 80 else "")


def _on_a_dask_worker() -> bool:
    """Whether this code runs in a task of a Dask worker."""
    worker = sys.modules.get("distributed.worker")
    if worker is None:
        return False
    try:
        worker.get_worker()
    except ValueError:
        return False
    return True
