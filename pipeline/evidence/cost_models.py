"""What a call costs, in seconds, by a written model: a device's times, or prices of counted work on a machine.

A cost model is a TOML with one table or both, all numbers in seconds:

    about = "what this models"
    [device]                    # calls that evolve: walks, anneals, external backends
    load_s = 1e-5               # per call
    evolve_s_per_hop = 1e-8     # per shot and hop of evolution
    read_s = 1e-6               # per shot
    wait_s = 0.0                # per shot
    [prices]                    # everything else; what is left out has the fixed price of patchwalk.cost
    spin_updates = 5e-9         # also amplitude_updates, energies, table_entries

Without ``[device]`` calls that evolve are priced as the simulations they are. ``patchwalk backends --time NAME``
measures such tables.
"""

from __future__ import annotations

import difflib
import math
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np

from patchwalk.cost import PRICES, priced
from patchwalk.settings_checks import SettingsError
from patchwalk.subsolvers.contract import F64, ClusterBatch, Subsolver, Work
from patchwalk.subsolvers.drivers import DRIVERS, heuristic_hopping, hop_scale, level_spread

DEVICE_KEYS = ("load_s", "evolve_s_per_hop", "read_s", "wait_s")
PRICE_KEYS = ("amplitude_updates", "spin_updates", "energies", "table_entries")
TIMES = ("evolution_time", "load_s", "evolve_s", "read_s", "wait_s")


class Costs(NamedTuple):
    """Seconds f64 (B,) of each call, by part: ``evolve`` is what a faster device, or machine, would shorten."""

    load: F64
    evolve: F64
    read: F64
    wait: F64

    @property
    def total(self) -> F64:
        """Everything (B,)."""
        return self.load + self.evolve + self.read + self.wait

    @property
    def held(self) -> F64:
        """What stays however fast the evolution becomes (B,)."""
        return self.load + self.read + self.wait


@dataclass(frozen=True)
class CostModel:
    """A device's times in seconds by the names of ``[device]``, or None, and prices per unit of counted work.

    ``about`` is what the file says of itself, ``place`` the file.
    """

    device: Mapping[str, float] | None = None
    prices: Mapping[str, float] = field(default_factory=lambda: {key: PRICES[key] for key in PRICE_KEYS})
    about: str = "the fixed prices of this program"
    place: str = ""


def read_cost_model(path: str | Path) -> CostModel:
    """The cost model of a TOML file.

    Raises :class:`SettingsError` with every mistake, each with file and key, and for an unknown key the nearest one.
    """
    try:
        table = tomllib.loads(Path(path).read_text(encoding="utf-8"))
    except OSError as error:
        raise SettingsError([f"{path}: {error.strerror or error}; give a cost model in TOML"]) from error
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise SettingsError([f"{path}: not a TOML file: {error}"]) from error
    complaints = [f"{path}: {line}" for line in _complaints(table)]
    if complaints:
        raise SettingsError(complaints)
    prices = {key: PRICES[key] for key in PRICE_KEYS} | {k: float(v) for k, v in table.get("prices", {}).items()}
    device = {key: float(value) for key, value in table["device"].items()} if "device" in table else None
    return CostModel(device, prices, table.get("about", str(path)), str(path))


def _complaints(table: Mapping[str, Any]) -> list[str]:
    found = [f"{key}: unknown{_nearest(key, KNOWN)}" for key in table if key not in KNOWN]
    if not isinstance(table.get("about", ""), str):
        found.append(f"about: is {table['about']!r}; give a sentence in quotes")
    if "device" not in table and "prices" not in table:
        found.append("needs a table [device] or [prices]")
    for name, keys in (("device", DEVICE_KEYS), ("prices", PRICE_KEYS)):
        given = table.get(name, {})
        if not isinstance(given, Mapping):
            found.append(f"{name}: is {given!r}; give a table, [{name}]")
            continue
        found.extend(f"{name}.{key}: unknown{_nearest(key, keys)}" for key in given if key not in keys)
        found.extend(
            f"{name}.{key}: is {value!r}; give seconds, a number of at least 0"
            for key, value in given.items()
            if key in keys and not _is_seconds(value)
        )
    if isinstance(table.get("device"), Mapping):
        found.extend(
            f"device.{key}: is missing; give seconds, or 0" for key in DEVICE_KEYS if key not in table["device"]
        )
    return found


KNOWN = ("about", "device", "prices")


def _is_seconds(value: object) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool) and math.isfinite(value) and value >= 0


def _nearest(word: str, known: tuple[str, ...]) -> str:
    close = difflib.get_close_matches(word, known, n=1, cutoff=0.5)
    hint = f"; did you mean {close[0]}?" if close else ";"
    return f"{hint} there are: {', '.join(known)}"


def work_of(columns: Mapping[str, Sequence[Any]]) -> Work:
    """Counted work from columns by name, as rows of a run file hold them: NULL counts as 0, a column of NULL as None.

    >>> work_of({"shots": [1, 2], "energies": [None, None]}).energies is None
    True
    """
    known: dict[str, Any] = {
        name: np.array([value or 0 for value in values], np.float64 if name in TIMES else np.int64)
        for name, values in columns.items()
        if any(value is not None for value in values)
    }
    return Work(**known)


def evolves(work: Work) -> bool:
    """Whether this is the work of a device or of a simulated one: it evolves, or tells seconds of its own."""
    return work.evolution_time is not None or work.wait_s is not None


def costs_of(model: CostModel, work: Work, rows: int, hops: F64 | None = None) -> Costs:
    """Seconds of ``rows`` calls by part.

    ``hops`` f64 (B,) is the evolution of each call, summed over its shots, in hops (:func:`hops_of`); without it every
    shot is taken to last one hop. It counts under a device's times alone.
    """
    nothing = np.zeros(rows)
    if model.device is None or not evolves(work):
        return Costs(nothing, _by_prices(model.prices, work, rows), nothing, nothing)
    shots = np.ones(rows) if work.shots is None else work.shots.astype(np.float64)
    evolved = shots if hops is None else hops
    device = model.device
    return Costs(
        np.full(rows, device["load_s"]), device["evolve_s_per_hop"] * evolved, device["read_s"] * shots,
        device["wait_s"] * shots,
    )  # fmt: skip


def cost_of(model: CostModel, work: Work, rows: int, hops: F64 | None = None) -> F64:
    """Seconds f64 (rows,) of each call; see :func:`costs_of` for the parts.

    >>> device = dict.fromkeys(DEVICE_KEYS, 0.0) | {"load_s": 2.0, "read_s": 0.5}
    >>> cost_of(CostModel(device), Work(shots=np.array([4]), evolution_time=np.array([1.0])), 1)
    array([4.])
    """
    return costs_of(model, work, rows, hops).total


def _by_prices(prices: Mapping[str, float], work: Work, rows: int) -> F64:
    """Counted work at these prices; seconds that a device tells of itself count as they are."""
    told = Work(load_s=work.load_s, evolve_s=work.evolve_s, read_s=work.read_s, wait_s=work.wait_s)
    seconds = priced(told, rows)
    for key in PRICE_KEYS:
        counted = getattr(work, key)
        if counted is not None:
            seconds = seconds + prices[key] * counted
    return seconds


def hops_of(subsolver: Subsolver, batch: ClusterBatch, work: Work) -> F64 | None:
    """The evolution of each call in hops, f64 (B,), from its evolution time; None where the work tells of none.

    A hop is 1 / (hopping rate) on the hypercube, and as long a walk in the same sense under other drivers.
    """
    if work.evolution_time is None or batch.couplings is None:
        return None
    return np.asarray(work.evolution_time * hypercube_rates(subsolver, batch))


def hypercube_rates(subsolver: Subsolver | None, batch: ClusterBatch) -> F64:
    """The hopping rate of each dense cluster f64 (B,), in energy units, as it would be on the hypercube.

    It is what the subsolver's parameters ``hopping``, ``hopping_factor`` and ``driver`` say, by default the heuristic
    one.
    """
    assert batch.couplings is not None
    rates = np.empty(len(batch))
    hopping = getattr(subsolver, "hopping", "heuristic")
    if isinstance(hopping, str):
        heuristic_hopping(batch.fields, batch.couplings, level_spread(batch.size), rates)
    else:
        driver = DRIVERS.index(getattr(subsolver, "driver", DRIVERS[0]))
        rates[:] = hopping / hop_scale(driver, batch.size)
    return np.asarray(rates * getattr(subsolver, "hopping_factor", 1.0))
