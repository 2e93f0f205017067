"""Who carries out the work of a command, chosen by the same words everywhere."""

from __future__ import annotations

import contextlib
from collections.abc import Iterator
from dataclasses import dataclass

from patchwalk.settings_checks import SettingsError
from patchwalk.workers import Workers, cores, workers_for

ENGINES = ("threads", "dask")


@dataclass(frozen=True)
class Crew:
    """``workers`` at once, by default as many as there are cores: ``engine`` threads, or processes of a Dask cluster.

    ``scheduler`` is the address of a cluster that is there already; ``mixed_workers`` lets in Dask workers of another
    processor or other versions, whose bits may differ.
    """

    workers: int | None = None
    engine: str = "threads"
    scheduler: str | None = None
    mixed_workers: bool = False

    def complaints(self) -> list[str]:
        """What is wrong with it, a line each."""
        found = []
        if self.workers is not None and (not isinstance(self.workers, int) or isinstance(self.workers, bool)
                                         or self.workers < 1):  # fmt: skip
            found.append(f"workers: is {self.workers!r}; give a whole number of at least 1")
        if self.engine not in ENGINES:
            found.append(f"engine: is {self.engine!r}; it is one of: {', '.join(ENGINES)}")
        return found

    @contextlib.contextmanager
    def hired(self) -> Iterator[Workers]:
        """The workers, let go at the end; raises ``SettingsError``, or ``WorkersError`` for a cluster out of reach."""
        if complaints := self.complaints():
            raise SettingsError(complaints)
        count = cores() if self.workers is None else self.workers
        workers = workers_for(count, self.scheduler, self.engine == "dask", self.mixed_workers)
        try:
            yield workers
        finally:
            workers.close()
