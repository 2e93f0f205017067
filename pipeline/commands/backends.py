"""What can be plugged in, whether it keeps its promises, and what its work costs on this machine."""

from __future__ import annotations

import time
from dataclasses import dataclass

import numpy as np

from patchwalk.cost import PRICES
from patchwalk.engine import ask, prepared, release
from patchwalk.subsolvers.conformance import Verdict, check
from patchwalk.subsolvers.conformance_trial import glass
from patchwalk.subsolvers.contract import F64, ClusterBatch, Proposals, Status, Subsolver
from patchwalk.subsolvers.external import External
from patchwalk.subsolvers.registry import SubsolverError, make_subsolver, subsolver_from, subsolver_names

BATCHES = 5
BATCH_SECONDS = 0.2
DEVICE_TIMES = ("load_s", "evolve_s", "read_s", "wait_s")


@dataclass(frozen=True)
class Backend:
    """One line of the list: ``largest`` in spins; None where only its parameters or its hello will tell."""

    name: str
    largest: int | None
    balance: str | None
    deterministic: bool | None
    reports: tuple[str, ...]
    note: str = ""


@dataclass(frozen=True)
class Price:
    """Seconds per unit of work: the median over batches, with the lowest and highest."""

    key: str
    seconds: float
    lowest: float
    highest: float


@dataclass(frozen=True)
class Prices:
    """What a backend's work costs, and how that was measured. ``device`` tells whether these are a device's times."""

    name: str
    device: bool
    prices: tuple[Price, ...]
    calls: int
    size: int
    how: str

    def as_toml(self) -> str:
        """A snippet for a cost model; numbers in seconds."""
        head = [f"# {self.name}: {self.calls} calls of {self.size} spins; {self.how}"]
        head.append("[device]" if self.device else "[prices]")
        body = [
            f"{price.key} = {price.seconds:.4g}  # {price.lowest:.4g} to {price.highest:.4g}" for price in self.prices
        ]
        return "\n".join(head + body)


def listing() -> list[Backend]:
    """Everything that the registry knows, by default parameters; nothing is compiled or started."""
    return [_listed(name) for name in subsolver_names()]


def verdicts(spelling: str, calls: int, size: int) -> list[Verdict]:
    """The verdict on every promise of one backend, for at most so many cluster calls."""
    return check(spelling, calls=calls, size=size)


def timed(spelling: str, calls: int, size: int) -> Prices:
    """The prices of one backend, measured on at most ``calls`` clusters of ``size`` spins, compiling apart.

    Raises ``SubsolverError`` where there are too few calls to measure, or where calls fail.
    """
    if calls < BATCHES + 2:
        raise SubsolverError(f"{spelling}: {calls} calls are too few to measure; give --calls {BATCHES + 2} or more")
    made = subsolver_from(spelling)
    try:
        first = glass(1, size)
        subsolver = prepared(made, first)
        _, once = _asked(subsolver, first)
        rows = int(np.clip(BATCH_SECONDS / max(once, 1e-6), 1, (calls - 2) // BATCHES))
        measured = [_asked(subsolver, glass(rows, size, seed=2 + turn)) for turn in range(BATCHES)]
        device = subsolver.forecast(first).work.wait_s is not None
        prices = _device_prices(measured) if device else [_work_price(measured)]
        return Prices(
            getattr(subsolver, "device", "") or subsolver.name,
            device,
            tuple(prices),
            rows * BATCHES,
            size,
            _how(device, measured),
        )
    finally:
        release(made)


def _listed(name: str) -> Backend:
    if name == External.name:
        return Backend(name, None, External.balance, None, External.reports, "needs command; its hello says the rest")
    try:
        made = make_subsolver(name)
    except Exception as error:  # somebody else's package may fail in any way; the others are still listed
        return Backend(name, None, None, None, (), str(error))
    return Backend(name, made.max_spins, made.balance, made.deterministic, _reports(made))


def _reports(subsolver: Subsolver) -> tuple[str, ...]:
    """What it tells beside its shots: as it declares in ``reports``, or as far as its methods show."""
    declared = getattr(subsolver, "reports", None)
    if declared is not None:
        return tuple(declared)
    shown = ["log ratio"] if subsolver.balance == "ratio" else []
    if callable(getattr(subsolver, "distribution", None)):
        shown += ["hit probability", "law of a shot"]
    return tuple(shown)


def _asked(subsolver: Subsolver, batch: ClusterBatch) -> tuple[Proposals, float]:
    began = time.perf_counter()
    answer = ask(subsolver, batch)
    seconds = time.perf_counter() - began
    if np.any(answer.status == Status.FAILED):
        raise SubsolverError(next(message for message in answer.messages if message))
    return answer, seconds


def _work_price(measured: list[tuple[Proposals, float]]) -> Price:
    """Seconds per unit of the counted work that weighs most at the fixed prices."""
    counted = {name: [getattr(answer.work, name) for answer, _ in measured] for name in PRICES}
    totals = {name: np.array([part.sum() for part in parts]) for name, parts in counted.items() if parts[0] is not None}
    if not totals:
        raise SubsolverError(f"it counts none of {', '.join(PRICES)}, so that there is nothing to set a price on")
    main = max(totals, key=lambda name: float(PRICES[name] * totals[name].sum()))
    return _price(main, np.array([seconds for _, seconds in measured]) / totals[main])


def _device_prices(measured: list[tuple[Proposals, float]]) -> list[Price]:
    """Load per call, the rest per shot: the device's own times, or else the whole round trip as waiting."""
    calls = np.array([len(answer.status) for answer, _ in measured])
    shots = np.array([answer.outcomes.shape[1] for answer, _ in measured]) * calls
    own = {name: np.array([_total(answer, name) for answer, _ in measured]) for name in DEVICE_TIMES}
    if not any(seconds.any() for seconds in own.values()):
        own["wait_s"] = np.array([seconds for _, seconds in measured])
    return [
        _price("load_s", own["load_s"] / calls),
        _price("evolve_s_per_hop", own["evolve_s"] / shots),
        _price("read_s", own["read_s"] / shots),
        _price("wait_s", own["wait_s"] / shots),
    ]


def _total(answer: Proposals, name: str) -> float:
    seconds = getattr(answer.work, name)
    return 0.0 if seconds is None else float(np.nansum(seconds))


def _how(device: bool, measured: list[tuple[Proposals, float]]) -> str:
    if not device:
        return f"median of {BATCHES} batches on this machine, lowest to highest beside it"
    if any(_total(answer, name) for answer, _ in measured for name in DEVICE_TIMES):
        return "as the device tells its times itself; a shot is taken to last one hop"
    return "the device tells no times: the whole round trip, a shot"


def _price(key: str, seconds: F64) -> Price:
    return Price(key, float(np.median(seconds)), float(seconds.min()), float(seconds.max()))
