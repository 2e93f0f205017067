"""Every subsolver keeps the contract: the same checks over the whole table."""

from __future__ import annotations

import pickle
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from patchwalk.subsolvers import ClusterBatch, Edges, Proposals, Status, Subsolver, make_subsolver, subsolver_names
from patchwalk.subsolvers.contract import WORK_FIELDS

TEMPLATE = Path(__file__).resolve().parents[2] / "configs" / "device-template.py"

TABLE: list[tuple[str, dict[str, Any]]] = [
    ("walk", {}),
    ("walk", {"shots": 3}),
    ("walk", {"start": "incumbent", "time_in_hops": 1.0}),
    ("walk", {"hopping": 0.7, "time": [0.2, 0.9], "times": 5}),
    ("walk", {"driver": "pairs", "start": "incumbent", "shots": 2}),
    ("walk", {"driver": "complete", "hopping": "calibrated"}),
    ("walk", {"time": "infinite", "tolerance": 1e-9}),
    ("walk", {"dephasing": 0.3}),
    ("walk", {"dephasing": 0.1, "start": "incumbent", "driver": "pairs", "shots": 2}),
    ("walk", {"control_error": 0.05}),
    ("walk", {"control_error": 0.05, "time": "infinite"}),
    ("walk", {"precision_bits": 3, "start": "incumbent"}),
    ("walk", {"readout_flip": 0.02, "shots": 3}),
    ("walk", {"dephasing": 0.2, "control_error": 0.02, "precision_bits": 6, "readout_flip": 0.01}),
    ("forward", {}),
    ("forward", {"schedule": "search", "duration_in_hops": 2, "shots": 3}),
    ("reverse", {}),
    ("reverse", {"turning_point": 0.3, "pause": 0.5, "leg_ratio": 2.0}),
    ("blend", {}),
    ("blend", {"mix": 0}),
    ("forward", {"readout_flip": 0.03, "shots": 2}),
    ("forward", {"control_error": 0.05, "schedule": "search", "duration_in_hops": 2}),
    ("reverse", {"control_error": 0.05, "precision_bits": 5}),
    ("reverse", {"precision_bits": 3, "readout_flip": 0.02}),
    ("blend", {"control_error": 0.02, "precision_bits": 6, "readout_flip": 0.01}),
    ("forward", {"dephasing": 0.2, "schedule": "search", "duration_in_hops": 2}),
    ("reverse", {"dephasing": 0.3}),
    ("reverse", {"dephasing": 0.2, "control_error": 0.02, "shots": 2}),
    ("blend", {"dephasing": 0.1, "readout_flip": 0.01, "driver": "pairs"}),
    ("enumeration", {}),
    ("enumeration", {"draw": "boltzmann"}),
    ("enumeration", {"draw": "boltzmann", "shots": 2}),
    ("elimination", {}),
    ("elimination", {"draw": "boltzmann"}),
    ("elimination", {"draw": "boltzmann", "shots": 2}),
    ("metropolis", {"sweeps": 7}),
    ("metropolis", {"draw": "boltzmann", "sweeps": 4}),
    ("tabu", {"shots": 2}),
    ("tabu", {"steps": 9, "tenure": 3}),
    ("descent", {"restarts": 2}),
    ("uniform", {"shots": 4}),
    ("external", {"command": [sys.executable, str(TEMPLATE)]}),
]
IDS = [",".join([name, *(f"{key}={value}" for key, value in parameters.items())]) for name, parameters in TABLE]


@pytest.fixture(params=TABLE, ids=IDS)
def subsolver(request: pytest.FixtureRequest) -> Subsolver:
    name, parameters = request.param
    return make_subsolver(name, **parameters)


def glass_batch(rows: int, size: int, seed: int = 5, temperature: float = 0.8) -> ClusterBatch:
    """Random conditioned clusters with Gaussian couplings and fields."""
    rng = np.random.default_rng(seed)
    couplings = rng.normal(size=(rows, size, size))
    couplings = np.triu(couplings, 1) + np.triu(couplings, 1).transpose(0, 2, 1)
    return ClusterBatch(
        fields=rng.normal(size=(rows, size)),
        spins=rng.choice(np.array([-1, 1], np.int8), size=(rows, size)),
        temperature=np.full(rows, temperature),
        seeds=rng.integers(0, 2**63, rows, dtype=np.uint64),
        couplings=couplings,
    )


def pick(batch: ClusterBatch, rows: np.ndarray) -> ClusterBatch:
    assert batch.couplings is not None
    return ClusterBatch(
        batch.fields[rows], batch.spins[rows], batch.temperature[rows], batch.seeds[rows], batch.couplings[rows]
    )


def same_bits(left: Proposals, right: Proposals) -> None:
    """Everything a proposal holds, compared bit for bit."""
    for name in ("outcomes", "status", "log_ratio", "times", "hit_probability", "noiseless_hit"):
        one, other = getattr(left, name), getattr(right, name)
        assert (one is None) == (other is None), name
        if one is not None:
            assert one.dtype == other.dtype
            assert one.tobytes() == other.tobytes(), name
    for name in WORK_FIELDS:
        one, other = getattr(left.work, name), getattr(right.work, name)
        assert (one is None) == (other is None), name
        if one is not None:
            assert one.tobytes() == other.tobytes(), name
    assert left.messages == right.messages


def joined(parts: list[Proposals]) -> Proposals:
    """Proposals of single rows put together again."""
    first = parts[0]

    def join(values: list[Any]) -> Any:
        return None if values[0] is None else np.concatenate(values)

    optional = ("log_ratio", "times", "hit_probability", "noiseless_hit")
    work = type(first.work)(**{name: join([getattr(part.work, name) for part in parts]) for name in WORK_FIELDS})
    return Proposals(
        outcomes=join([part.outcomes for part in parts]),
        work=work,
        status=join([part.status for part in parts]),
        messages=tuple(message for part in parts for message in part.messages),
        **{name: join([getattr(part, name) for part in parts]) for name in optional},
    )


def test_the_table_covers_the_registry() -> None:
    assert {name for name, _ in TABLE} == set(subsolver_names())


@pytest.mark.parametrize("size", [1, 2, 3, 5, 8, 10])
def test_shapes_and_values(subsolver: Subsolver, size: int) -> None:
    batch = glass_batch(4, size)
    proposals = subsolver.prepare(batch).propose(batch)
    shots = proposals.outcomes.shape[1]
    assert proposals.outcomes.shape == (4, shots, size)
    assert proposals.outcomes.dtype == np.int8
    assert set(np.unique(proposals.outcomes)) <= {-1, 1}
    assert proposals.status.tolist() == [Status.OK] * 4
    assert proposals.messages == ("",) * 4
    if proposals.hit_probability is not None:
        assert np.all((proposals.hit_probability > 0) & (proposals.hit_probability <= 1 + 1e-12))
    assert proposals.work.shots is not None
    assert proposals.work.shots.tolist() == [shots] * 4
    counts = ("amplitude_updates", "spin_updates", "energies", "table_entries")
    counted = [getattr(proposals.work, name) for name in counts]
    assert any(work is not None and np.all(work > 0) for work in counted)
    assert (proposals.log_ratio is not None) == (subsolver.balance == "ratio")


def test_inputs_are_locked_and_untouched(subsolver: Subsolver) -> None:
    batch = glass_batch(3, 6)
    before = pickle.dumps(batch)
    subsolver.propose(batch)
    assert pickle.dumps(batch) == before
    with pytest.raises(ValueError, match="read-only"):
        batch.fields[0, 0] = 1.0
    again = pickle.loads(before)
    with pytest.raises(ValueError, match="read-only"):
        again.spins[0, 0] = 1


def test_a_row_depends_on_itself_alone(subsolver: Subsolver) -> None:
    batch = glass_batch(64, 7)
    whole = subsolver.propose(batch)
    same_bits(whole, joined([subsolver.propose(batch.rows(row, row + 1)) for row in range(64)]))
    order = np.random.default_rng(3).permutation(64)
    permuted = subsolver.propose(pick(batch, order))
    back = np.argsort(order)
    assert permuted.outcomes[back].tobytes() == whole.outcomes.tobytes()
    for name in ("log_ratio", "times", "hit_probability"):
        if getattr(whole, name) is not None:
            assert getattr(permuted, name)[back].tobytes() == getattr(whole, name).tobytes()


def test_equal_parameters_equal_bits_also_after_pickling(subsolver: Subsolver) -> None:
    batch = glass_batch(5, 6)
    twin = pickle.loads(pickle.dumps(subsolver))
    assert twin == subsolver
    same_bits(subsolver.propose(batch), twin.propose(pickle.loads(pickle.dumps(batch))))


def test_other_seeds_other_draws(subsolver: Subsolver) -> None:
    if subsolver.name in ("enumeration", "elimination") and getattr(subsolver, "draw", "") == "minimum":
        pytest.skip("the minimum of a Gaussian cluster is unique, whatever the seed")
    batch = glass_batch(40, 6)
    other = ClusterBatch(batch.fields, batch.spins, batch.temperature, batch.seeds + np.uint64(1), batch.couplings)
    assert subsolver.propose(batch).outcomes.tobytes() != subsolver.propose(other).outcomes.tobytes()


@pytest.mark.parametrize("power", [20, -30])
def test_a_common_power_of_two_changes_no_drawn_bit(subsolver: Subsolver, power: int) -> None:
    if getattr(subsolver, "time", None) is not None:
        pytest.skip("an absolute time is not in units of the couplings")
    batch, scale = glass_batch(16, 7), 2.0**power
    assert batch.couplings is not None
    scaled = ClusterBatch(
        batch.fields * scale, batch.spins, batch.temperature * scale, batch.seeds, batch.couplings * scale
    )
    one, other = subsolver.propose(batch), subsolver.propose(scaled)
    assert one.outcomes.tobytes() == other.outcomes.tobytes()
    for name in ("log_ratio", "hit_probability"):
        if getattr(one, name) is not None:
            assert getattr(one, name).tobytes() == getattr(other, name).tobytes()


def test_temperature_zero_is_allowed(subsolver: Subsolver) -> None:
    proposals = subsolver.propose(glass_batch(8, 5, temperature=0.0))
    assert proposals.status.tolist() == [Status.OK] * 8


def test_forecast_counts_what_is_then_done(subsolver: Subsolver) -> None:
    batch = glass_batch(6, 8)
    forecast, done = subsolver.forecast(batch), subsolver.propose(batch).work
    assert forecast.bytes > 0
    for name in ("amplitude_updates", "spin_updates", "energies", "table_entries"):
        expected, counted = getattr(forecast.work, name), getattr(done, name)
        assert (expected is None) == (counted is None)
        if counted is not None:
            assert np.all(expected <= 3 * counted)
            assert np.all(counted <= 3 * expected)


@pytest.mark.parametrize("name", ["walk", "enumeration"])
def test_oversize_is_refused_with_the_limit(name: str) -> None:
    subsolver = make_subsolver(name)
    size = subsolver.max_spins + 1
    batch = ClusterBatch(
        np.zeros((1, size)), np.ones((1, size)), np.zeros(1), np.zeros(1), couplings=np.zeros((1, size, size))
    )
    for ask in (subsolver.propose, subsolver.forecast if name == "walk" else subsolver.propose):
        with pytest.raises(ValueError, match=rf"{size} spins.*stops at {subsolver.max_spins}.*smaller clusters"):
            ask(batch)


@pytest.mark.parametrize("name", ["metropolis", "tabu", "descent", "elimination", "uniform"])
def test_large_clusters_come_as_edges(name: str) -> None:
    size = 100
    ring = np.stack([np.arange(size), np.roll(np.arange(size), -1)], axis=1)
    ring.sort(axis=1)
    spins = np.random.default_rng(2).choice(np.array([-1, 1], np.int8), (2, size))
    batch = ClusterBatch(
        np.zeros((2, size)), spins, np.ones(2), np.arange(2),
        edges=Edges(np.array([0, size, 2 * size]), np.concatenate([ring, ring]), np.ones(2 * size)),
    )  # fmt: skip
    subsolver = make_subsolver(name)
    whole = subsolver.propose(batch)
    assert whole.outcomes.shape == (2, 1, size)
    same_bits(whole, joined([subsolver.propose(batch.rows(row, row + 1)) for row in range(2)]))
    if name != "uniform":
        assert np.all((whole.outcomes[:, 0] * np.roll(whole.outcomes[:, 0], 1, axis=1)).sum(axis=1) < -size // 2)


@pytest.mark.parametrize(
    ("name", "parameters", "words"),
    [
        ("wolk", {}, "did you mean 'walk'"),
        ("walk", {"shot": 2}, "did you mean 'shots'"),
        ("walk", {"shots": 0}, "shots is 0"),
        ("walk", {"time": -1.0}, "time is -1.0"),
        ("walk", {"time_in_hops": [2, 1]}, "an interval"),
        ("walk", {"driver": "ladder"}, "driver is 'ladder'"),
        ("walk", {"hopping": 0}, "hopping is 0"),
        ("walk", {"hopping_factor": float("nan")}, "hopping_factor is nan"),
        ("walk", {"start": "left"}, "uniform or incumbent"),
        ("enumeration", {"draw": "maximum"}, "minimum or boltzmann"),
        ("elimination", {"draw": "maximum"}, "minimum or boltzmann"),
        ("elimination", {"max_width": 27}, "max_width is 27"),
        ("metropolis", {"sweeps": 0}, "sweeps is 0"),
        ("metropolis", {"hot": 0.1, "cold": 1.0}, "hot >= cold"),
        ("metropolis", {"draw": "boltzmann", "sweeps": 3}, "even number"),
        ("tabu", {"steps": -1}, "steps is -1"),
        ("descent", {"restarts": 0}, "restarts is 0"),
        ("uniform", {"shots": True}, "shots is True"),
        ("no.such.module:Thing", {}, "module:Object"),
        ("math:pi", {}, "math:pi"),
    ],
)
def test_mistakes_are_named(name: str, parameters: dict[str, Any], words: str) -> None:
    with pytest.raises(ValueError, match=words):
        make_subsolver(name, **parameters)


@pytest.mark.parametrize(
    ("field", "value", "words"),
    [
        ("fields", np.zeros(3), "fields has shape"),
        ("spins", np.ones((2, 4)), "spins has shape"),
        ("temperature", np.zeros(3), "temperature has shape"),
        ("couplings", None, "exactly one of couplings and edges"),
        ("couplings", np.zeros((2, 3, 4)), "couplings has shape"),
    ],
)
def test_a_batch_checks_its_shapes(field: str, value: Any, words: str) -> None:
    good: dict[str, Any] = {
        "fields": np.zeros((2, 3)), "spins": np.ones((2, 3)), "temperature": np.zeros(2), "seeds": np.zeros(2),
        "couplings": np.zeros((2, 3, 3)),
    }  # fmt: skip
    ClusterBatch(**good)
    with pytest.raises(ValueError, match=words):
        ClusterBatch(**{**good, field: value})
