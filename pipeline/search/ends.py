"""When a search stops: budgets in calls, sweeps and seconds, a target, a standstill, whichever comes first."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Spent:
    """What a search has spent: cluster calls, sweeps, seconds without compiling, rounds since its best energy."""

    calls: int
    sweeps: int
    seconds: float
    rounds_without_gain: int


@dataclass(frozen=True)
class Ends:
    """When to stop: so many cluster calls, sweeps, seconds (without compiling), rounds without a new best energy
    (``stall``), or an energy that is reached. All are totals, also for a run that is resumed.
    """

    calls: int | None = None
    sweeps: int | None = None
    seconds: float | None = None
    energy: float | None = None
    stall: int | None = None

    def stage(self, spent: Spent) -> float:
        """The fraction of the budget spent: of the counted budgets where there are any, else of the seconds."""
        counted = [done / limit for done, limit in ((spent.calls, self.calls), (spent.sweeps, self.sweeps)) if limit]
        if not counted and self.seconds:
            counted = [spent.seconds / self.seconds]
        return min(1.0, max(counted, default=0.0))

    def out_of_time(self, seconds: float) -> bool:
        """Whether the budget in seconds is spent."""
        return self.seconds is not None and seconds >= self.seconds

    def reached(self, energy: float, tolerance: float) -> bool:
        """Whether the target is reached."""
        return self.energy is not None and energy <= self.energy + tolerance

    def fired(self, spent: Spent) -> tuple[str, str] | None:
        """The status and the sentence of the budget that is spent, or None."""
        if self.calls is not None and spent.calls >= self.calls:
            return "budget", f"the budget of {self.calls:,} calls is spent"
        if self.sweeps is not None and spent.sweeps >= self.sweeps:
            return "budget", f"the budget of {self.sweeps:,} sweeps is spent"
        if self.out_of_time(spent.seconds):
            return "budget", f"the budget of {self.seconds:g} seconds is spent"
        if self.stall is not None and spent.rounds_without_gain >= self.stall:
            return "stalled", f"no better configuration was found in {self.stall:,} rounds"
        return None
