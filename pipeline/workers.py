"""Who carries work out: this thread, a few threads, or the workers of a Dask cluster. One promise: results in order.

Whatever is handed over is a function of its own input alone, so that the number and the kind of the workers change no
bit of any result. Compiled kernels let go of Python's lock, which is why threads are enough on one machine.
"""

from __future__ import annotations

import collections
import itertools
import os
import platform
import sys
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from importlib.metadata import version
from typing import Any, Protocol, TypeVar

Item = TypeVar("Item")
Result = TypeVar("Result")


PATIENCE_SECONDS = 10.0
"""So long a Dask cluster may take to answer."""


class WorkersError(RuntimeError):
    """Workers that cannot be had, must not be used, or are lost; the message says which and what to do."""


class Workers(Protocol):
    """Somebody who carries out independent work."""

    @property
    def count(self) -> int:
        """How many pieces are worked on at the same time."""
        ...

    @property
    def smallest_task_seconds(self) -> float:
        """A piece shorter than this is not worth handing over."""
        ...

    @property
    def same_memory(self) -> bool:
        """Whether the workers see this process's own arrays."""
        ...

    def ordered(self, function: Callable[[Item], Result], items: Iterable[Item]) -> Iterator[Result]:
        """The results in the order of the items; closing the iterator forgets what has not begun."""
        ...

    def close(self) -> None:
        """Let the workers go."""
        ...


class Serial:
    """Everything in this thread, one after the other."""

    count = 1
    smallest_task_seconds = 0.0
    same_memory = True

    def ordered(self, function: Callable[[Item], Result], items: Iterable[Item]) -> Iterator[Result]:
        return map(function, items)

    def close(self) -> None:
        pass


class Threads:
    """A pool of ``count`` threads of this process."""

    smallest_task_seconds = 5e-4
    same_memory = True

    def __init__(self, count: int) -> None:
        self.count = count
        self._pool = ThreadPoolExecutor(count, thread_name_prefix="patchwalk")

    def ordered(self, function: Callable[[Item], Result], items: Iterable[Item]) -> Iterator[Result]:
        return _in_order(lambda item: self._pool.submit(function, item), items, 4 * self.count)

    def close(self) -> None:
        self._pool.shutdown(wait=True, cancel_futures=True)


class DaskWorkers:
    """The workers of a Dask cluster: of an existing one at ``scheduler`` (tcp://...), else ``count`` local processes.

    Every worker must have the same versions of what decides bits, and the same kind of processor; ``mixed`` lets
    others in. Raises :class:`WorkersError` for a cluster that cannot be reached or must not be used.
    """

    smallest_task_seconds = 0.02
    same_memory = False

    def __init__(self, count: int = 2, scheduler: str | None = None, mixed: bool = False) -> None:
        import distributed

        self._cluster: Any = None
        library: Any = distributed  # it publishes no types
        try:
            if scheduler is None:
                self._cluster = library.LocalCluster(
                    n_workers=count,
                    threads_per_worker=1,
                    processes=True,
                    dashboard_address="127.0.0.1:0",
                    silence_logs=50,
                )
            self._client: Any = library.Client(
                self._cluster or scheduler, timeout=PATIENCE_SECONDS, set_as_default=False
            )
            self._client.wait_for_workers(1, timeout=30)
        except Exception as error:
            self.close()
            place = "a local Dask cluster" if scheduler is None else f"the Dask cluster at {scheduler}"
            raise WorkersError(f"{place} could not be reached: {error}; check the address, or leave it out") from error
        self._check_versions(mixed)
        self.count = sum(self._client.nthreads().values())

    def _check_versions(self, mixed: bool) -> None:
        try:
            found = self._client.run(versions)
        except Exception as error:
            self.close()
            raise WorkersError(
                f"the Dask workers cannot run Patchwalk: {error}; install the same version of it there"
            ) from error
        ours = versions()
        for address, theirs in found.items():
            differing = [key for key, value in ours.items() if theirs.get(key) != value]
            if differing and not mixed:
                key = differing[0]
                self.close()
                raise WorkersError(
                    f"the Dask worker {address} has {key} {theirs.get(key)}, here it is {ours[key]}, so bits may "
                    "differ; give it the same, or allow it with --mixed-workers"
                )

    def ordered(self, function: Callable[[Item], Result], items: Iterable[Item]) -> Iterator[Result]:
        from distributed import CancelledError, KilledWorker

        def submit(item: Item) -> Any:
            return self._client.submit(function, item, pure=False)

        try:
            yield from _in_order(submit, items, 4 * max(1, self.count))
        except (KilledWorker, CancelledError, OSError, TimeoutError) as error:
            raise WorkersError(f"the Dask workers are lost: {error}; resume the run with others") from error

    def close(self) -> None:
        for held in (getattr(self, "_client", None), self._cluster):
            if held is not None:
                held.close()


def _in_order(submit: Callable[[Item], Future[Result]], items: Iterable[Item], ahead: int) -> Iterator[Result]:
    """Results in order, with at most ``ahead`` pieces handed over and not yet taken back."""
    remaining = iter(items)
    waiting = collections.deque(submit(item) for item in itertools.islice(remaining, ahead))
    try:
        while waiting:
            result = waiting.popleft().result()
            waiting.extend(submit(item) for item in itertools.islice(remaining, 1))
            yield result
    finally:
        left = [future for future in waiting if not future.cancel()]
        for future in left:  # in flight: it uses what the caller is about to change
            if isinstance(future, Future):
                future.exception()


def workers_for(count: int, scheduler: str | None, dask: bool, mixed: bool) -> Workers:
    """The workers that settings ask for."""
    if scheduler is not None or dask:
        return DaskWorkers(count, scheduler, mixed)
    return Threads(count) if count > 1 else Serial()


def cores() -> int:
    """Processor cores that this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def versions() -> dict[str, str]:
    """What the bits of a run depend on beside its seed: library versions and the kind of processor."""
    import llvmlite.binding as llvm

    found = {name: version(name) for name in ("patchwalk", "numpy", "scipy", "numba", "llvmlite")}
    return {
        **found, "python": platform.python_version(), "system": sys.platform, "processor": llvm.get_host_cpu_name()
    }  # fmt: skip
