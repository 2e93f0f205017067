"""``solve`` from outside: what it prints is true of the file it was given, and every way of asking gives one answer."""

from __future__ import annotations

import contextlib
import csv
import json
import os
import sqlite3
import subprocess
import sys
from pathlib import Path
from typing import Any

import networkx as nx
import numpy as np
import pytest

import patchwalk
from patchwalk.settings import SolveSettings
from patchwalk.subsolvers.registry import subsolver_names

PROGRAM = Path(sys.executable).with_name("patchwalk")
DEMO = Path(__file__).resolve().parents[2] / "configs" / "quillmere.toml"
MINUTES = 300  # no run here takes a tenth of it, compiling included; beyond it something hangs

NUMBER = (int, float)
FIELDS: dict[str, tuple[type, ...]] = {
    "spins": (list,), "energy": NUMBER, "lower_bound": (type(None), *NUMBER), "gap": (type(None), *NUMBER),
    "feasible": (bool,), "status": (str,), "message": (str,), "seconds": NUMBER, "compile_seconds": NUMBER,
    "calls": (int,), "failed_calls": (int,), "sweeps": (int,), "seed": (int,), "start_energy": (type(None), *NUMBER),
    "run_path": (str,), "answer": (dict,), "notes": (list,), "skipped": (int,), "alternatives": (list,),
    "bound_seconds": NUMBER,
}  # fmt: skip
SPELLED = {"external": f'external,command="{sys.executable} {DEMO.with_name("device-template.py")}"'}
"""How to write those subsolvers that cannot be made from their name alone."""

MEASURED = {"seconds", "compile_seconds", "bound_seconds", "run_path"}  # may differ between two runs that are the same


def patchwalk_command(
    *words: object, folder: Path | None = None, **environment: str
) -> subprocess.CompletedProcess[str]:
    """The command line, run to its end in ``folder`` (by default the test's own)."""
    return subprocess.run(
        [PROGRAM, *map(str, words)], cwd=folder, env={**os.environ, **environment}, capture_output=True, text=True,
        timeout=MINUTES, check=False,
    )  # fmt: skip


def solved(*words: object, code: int = 0, folder: Path | None = None, **environment: str) -> dict[str, Any]:
    """What ``solve --json`` prints; standard output must hold that one object and nothing else."""
    done = patchwalk_command("solve", *words, "--json", folder=folder, **environment)
    assert done.returncode == code, done.stderr
    assert len(done.stdout.splitlines()) == 1
    result: dict[str, Any] = json.loads(done.stdout)
    return result


def rows_of(run_path: str | Path, query: str) -> list[sqlite3.Row]:
    """The answer of a run file to a query; the file must be sound."""
    with contextlib.closing(sqlite3.connect(run_path)) as database:
        database.row_factory = sqlite3.Row
        assert database.execute("PRAGMA integrity_check").fetchone()[0] == "ok"
        return database.execute(query).fetchall()


def bits_of(result: dict[str, Any]) -> tuple[Any, ...]:
    """Everything about a run that must not depend on the clock: what was printed, and the rows of its calls."""
    printed = {key: value for key, value in result.items() if key not in MEASURED}
    rows = [
        {key: row[key] for key in row.keys() if key != "seconds"}  # noqa: SIM118 - a Row iterates over its values
        for row in rows_of(result["run_path"], "SELECT * FROM calls ORDER BY run, round, place")
    ]
    return printed, rows


def edges_in(path: Path) -> list[tuple[int, int, float]]:
    """The lines ``i j w`` of an edge list, vertices from 0; a field is an edge of a spin with itself."""
    lines = [line for line in path.read_text().splitlines() if line and not line.startswith("#")]
    cells = [line.split() for line in lines[1:]]
    return [(int(i) - 1, int(j) - 1, float(weight)) for i, j, weight in cells]


def energy_in(path: Path, spins: list[int]) -> float:
    """The energy of kind ``ising``, from the file."""
    return sum(w * (spins[i] if i == j else spins[i] * spins[j]) for i, j, w in edges_in(path))


def cut_in(path: Path, spins: list[int]) -> float:
    """The cut of kind ``maxcut``, from the file."""
    return sum(w for i, j, w in edges_in(path) if spins[i] != spins[j])


def interference_in(path: Path, channels: dict[str, str]) -> tuple[float, int]:
    """The interference of an allocation of kind ``beacons`` and the number of broken repeaters, from the file."""
    interference, broken = 0.0, 0
    with path.open(newline="") as stream:
        for relation, one, other, value in csv.reader(line for line in stream if not line.startswith("#")):
            if relation == "interferes":
                interference += float(value) * (channels[one] == channels[other])
            elif relation == "prefers":
                interference += float(value) * (channels[one] != other)
            elif relation == "repeater":
                broken += channels[one] != channels[other]
    return interference, broken


def made(folder: Path, name: str, *words: object) -> Path:
    """An instance written by ``make``."""
    done = patchwalk_command("make", *words, "-o", folder / name)
    assert done.returncode == 0, done.stderr
    return folder / name


@pytest.fixture(scope="module")
def instances(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder of small problems: glass.txt (36 spins, fields), graph.txt, pairs.csv, coast.csv, tiny.txt."""
    folder = tmp_path_factory.mktemp("instances")
    made(folder, "glass.txt", "lattice2d", "--size", 6, "--fields", "--couplings", "gaussian", "--seed", 4)
    made(folder, "coast.csv", "beacons", "--size", 40, "--seed", 2)
    made(folder, "tiny.txt", "lattice2d", "--size", 4, "--seed", 3)
    graph = nx.gnm_random_graph(30, 90, seed=5)
    weights = np.random.default_rng(6).integers(-3, 10, 90)
    lines = [f"{i + 1} {j + 1} {w}" for (i, j), w in zip(graph.edges, weights, strict=True)]
    (folder / "graph.txt").write_text("\n".join(["30 90", *lines]) + "\n")
    names = [f"{chr(97 + i % 26)}{i},{chr(97 + j % 26)}{j}" for i, j in graph.edges]
    (folder / "pairs.csv").write_text("\n".join(names) + "\n")
    return folder


def ground_energy(path: Path) -> float:
    """By listing all configurations of at most 16 spins, independently of every subsolver."""
    edges = edges_in(path)
    size = 1 + max(max(i, j) for i, j, _ in edges)
    spins = 1 - 2 * ((np.arange(1 << size)[:, None] >> np.arange(size)) & 1)
    return float(min(sum(w * spins[:, i] * spins[:, j] for i, j, w in edges)))


# ---------------------------------------------------------------- what is printed


@pytest.mark.parametrize(
    ("name", "kind", "objective"),
    [
        ("glass.txt", None, "energy"),
        ("glass.txt", "ising", "energy"),
        ("graph.txt", "maxcut", "cut"),
        ("graph.txt", "ising", "energy"),
        ("pairs.csv", "maxcut", "cut"),
        ("coast.csv", None, "interference"),
    ],
)
def test_every_field_is_there_with_its_type(instances: Path, name: str, kind: str | None, objective: str) -> None:
    words = ["--kind", kind] if kind else []
    result = solved(instances / name, *words, "--calls", 60, "--cluster-size", 6, "--subsolver", "enumeration")
    for field, types in {**FIELDS, objective: NUMBER}.items():
        assert isinstance(result[field], types), field
        assert isinstance(result[field], bool) == (bool in types), field
    assert set(result) == {*FIELDS, objective}
    assert set(result["spins"]) == {1, -1}
    assert result["lower_bound"] is None, "nothing was proved, so no bound may be claimed"
    assert result["gap"] is None
    assert (result["status"], result["calls"], result["seed"]) == ("budget", 60, 1)
    assert (result["failed_calls"], result["start_energy"]) == (0, None)
    assert result["feasible"] is True
    assert Path(result["run_path"]).is_file()


def test_energy_and_cut_are_those_of_the_file(instances: Path) -> None:
    options = ("--calls", 60, "--cluster-size", 6)
    ising = solved(instances / "glass.txt", *options)
    assert ising["energy"] == pytest.approx(energy_in(instances / "glass.txt", ising["spins"]), abs=1e-9)
    maxcut = solved(instances / "graph.txt", "--kind", "maxcut", *options)
    assert maxcut["cut"] == cut_in(instances / "graph.txt", maxcut["spins"]) > 0
    assert maxcut["energy"] == -maxcut["cut"]
    assert maxcut["answer"]["cut"] == maxcut["cut"]
    parts = [[place + 1 for place, spin in enumerate(maxcut["spins"]) if spin == side] for side in (1, -1)]
    assert maxcut["answer"]["parts"] == parts


def test_names_of_a_table_come_back_in_the_answer(instances: Path) -> None:
    result = solved(instances / "pairs.csv", "--kind", "maxcut", "--calls", 60, "--cluster-size", 6)
    side = {name: place for place, part in enumerate(result["answer"]["parts"]) for name in part}
    rows = [line.split(",") for line in (instances / "pairs.csv").read_text().split()]
    assert result["cut"] == sum(side[one] != side[other] for one, other in rows)


def test_standard_output_holds_nothing_but_the_result(instances: Path) -> None:
    words = ("solve", instances / "glass.txt", "--calls", 20, "--cluster-size", 6, "--seed", 3)
    loud = patchwalk_command(*words)
    assert loud.returncode == 0
    assert "energy" in loud.stdout
    assert "run file: " in loud.stdout
    assert "compil" in loud.stderr, "compiling is announced"
    assert "36 spins" in loud.stderr, "how the file was understood is said"
    assert not any(word in loud.stdout for word in ("compiling (", "36 spins", "acceptance"))
    quiet = patchwalk_command(*words, "--quiet")
    assert quiet.stderr == ""
    assert quiet.stdout.splitlines()[0] == loud.stdout.splitlines()[0]


def test_help_loads_nothing_heavy() -> None:
    script = (
        "import sys; from patchwalk.interface.cli import program; program(['--help'], standalone_mode=False); "
        "print(sorted({'numpy', 'numba', 'scipy', 'pydantic', 'rich'} & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True, timeout=MINUTES)
    assert "solve" in done.stdout
    assert done.stdout.splitlines()[-1] == "[]"


# ---------------------------------------------------------------- subsolvers and rules


@pytest.mark.parametrize("subsolver", subsolver_names())
def test_the_whole_run_with_every_subsolver(instances: Path, subsolver: str) -> None:
    glass = instances / "glass.txt"
    spelling = SPELLED.get(subsolver, subsolver)
    result = solved(glass, "--subsolver", spelling, "--cluster-size", 6, "--calls", 100, "--record", "all")
    assert (result["status"], result["calls"], result["failed_calls"]) == ("budget", 100, 0)
    assert result["energy"] == pytest.approx(energy_in(glass, result["spins"]), abs=1e-9)
    (run,) = rows_of(result["run_path"], "SELECT * FROM runs")
    assert run["subsolver"].split(",")[0] == subsolver
    assert len(rows_of(result["run_path"], "SELECT * FROM calls")) == 100
    first = rows_of(result["run_path"], "SELECT energy FROM incumbents")[0]["energy"]
    assert result["energy"] < first, "a hundred calls and their sweeps find something better than a random start"


@pytest.mark.parametrize("rule", ["ball", "scattered"])
def test_clusters_follow_the_rule_and_do_not_touch(instances: Path, rule: str) -> None:
    result = solved(
        instances / "glass.txt", "--rule", rule, "--cluster-size", 5, "--calls", 80, "--record", "all", "--replicas", 1,
    )  # fmt: skip
    graph = nx.Graph((i, j) for i, j, _ in edges_in(instances / "glass.txt") if i != j)
    rounds: dict[int, list[set[int]]] = {}
    for row in rows_of(result["run_path"], "SELECT round, rule, k, members FROM calls ORDER BY round, place"):
        members = set(np.frombuffer(row["members"], "<i4").tolist())
        assert (row["rule"], row["k"], len(members)) == (rule, 5, 5)
        rounds.setdefault(row["round"], []).append(members)
    # the first cluster of a round has the whole lattice to itself, later balls what is left of it
    in_one_piece = [nx.is_connected(graph.subgraph(clusters[0])) for clusters in rounds.values()]
    assert all(in_one_piece) if rule == "ball" else not all(in_one_piece)
    assert max(map(len, rounds.values())) > 1, "several clusters fit into a round"
    for clusters in rounds.values():
        for place, members in enumerate(clusters):
            around = members.union(*(graph[spin] for spin in members))
            assert not any(around & other for other in clusters[place + 1 :])


def test_the_run_file_tells_the_whole_story(instances: Path, tmp_path: Path) -> None:
    """Without sweeps the calls alone lead from the start to the end; every energy on the way is that of the file."""
    glass = instances / "glass.txt"
    start = np.random.default_rng(1).choice([-1, 1], 36)
    (tmp_path / "start.txt").write_text(" ".join(map(str, start)))
    result = solved(
        glass, "--start", tmp_path / "start.txt", "--sweeps", 0, "--calls", 150, "--cluster-size", 6, "--record", "all",
        "--subsolver", "walk,shots=2", "--replicas", 1,
    )  # fmt: skip
    spins = start.copy()
    lowest = [energy_in(glass, spins.tolist())]
    for row in rows_of(result["run_path"], "SELECT * FROM calls ORDER BY round, place"):
        members = np.frombuffer(row["members"], "<i4")
        assert row["energy_before"] == pytest.approx(energy_in(glass, spins.tolist()), abs=1e-9)
        assert np.array_equal(np.frombuffer(row["spins_before"], np.int8), spins[members])
        turned = spins.copy()
        turned[members] = np.frombuffer(row["proposal"], np.int8)
        change = energy_in(glass, turned.tolist()) - row["energy_before"]
        assert row["change"] == pytest.approx(change, abs=1e-9)
        if row["accepted"]:
            spins = turned
        lowest.append(min(lowest[-1], energy_in(glass, spins.tolist())))
    assert result["energy"] == pytest.approx(lowest[-1], abs=1e-9)
    assert result["start_energy"] == pytest.approx(lowest[0], abs=1e-9)
    assert result["energy"] < result["start_energy"]


# ---------------------------------------------------------------- budgets, target, start


def test_no_sweeps_when_none_are_wanted(instances: Path) -> None:
    result = solved(instances / "glass.txt", "--sweeps", 0, "--calls", 50, "--cluster-size", 6)
    assert result["sweeps"] == 0
    finders = {row["finder"] for row in rows_of(result["run_path"], "SELECT finder FROM incumbents")}
    assert finders == {"start", "clusters"}


@pytest.mark.parametrize("calls", [1, 37, 64])
def test_a_budget_of_calls_is_kept_exactly(instances: Path, calls: int) -> None:
    result = solved(
        instances / "glass.txt", "--calls", calls, "--clusters-per-round", 3, "--cluster-size", 6, "--record", "all"
    )
    assert (result["status"], result["calls"]) == ("budget", calls)
    assert len(rows_of(result["run_path"], "SELECT * FROM calls")) == calls


def test_a_budget_of_sweeps_is_kept_exactly(instances: Path) -> None:
    result = solved(instances / "glass.txt", "--total-sweeps", 7, "--sweeps", 3, "--cluster-size", 6, "--replicas", 1)
    assert (result["status"], result["sweeps"]) == ("budget", 7)
    together = solved(instances / "glass.txt", "--total-sweeps", 7, "--sweeps", 3, "--cluster-size", 6)
    assert (together["status"], together["sweeps"]) == ("budget", 16), "replicas on a ladder are swept together"


def test_the_first_budget_to_run_out_ends_the_run(instances: Path) -> None:
    options = ("--cluster-size", 6, "--clusters-per-round", 2, "--sweeps", 1, "--replicas", 1)
    by_calls = solved(instances / "glass.txt", "--calls", 10, "--total-sweeps", 1000, *options)
    assert by_calls["calls"] == 10
    by_sweeps = solved(instances / "glass.txt", "--calls", 1000, "--total-sweeps", 4, *options)
    assert by_sweeps["sweeps"] == 4
    assert by_sweeps["calls"] <= 8


def test_a_budget_of_seconds_is_spent_and_hardly_overrun(instances: Path) -> None:
    result = solved(instances / "glass.txt", "--seconds", 1, "--cluster-size", 6)
    assert result["status"] == "budget"
    assert 1 <= result["seconds"] < 10, "a slice lasts about a second"
    (run,) = rows_of(result["run_path"], "SELECT * FROM runs")
    assert (run["seconds"], run["calls"]) == (result["seconds"], result["calls"])


def test_nothing_is_compiled_once_the_clock_runs(instances: Path, tmp_path: Path) -> None:
    script = f"""
from numba.core import event
from patchwalk.commands.solving import Silent, carry_out, task_from

class Ear(event.Listener):
    heard = None
    def on_start(self, news):
        if Ear.heard is not None:
            Ear.heard.append(news.data["dispatcher"].py_func.__name__)
    def on_end(self, news):
        pass

class Watcher(Silent):
    def compiled(self, seconds):
        Ear.heard = []

event.register("numba:compile", Ear())
settings = dict(calls=20, cluster_size=6, subsolver="uniform", run="run.sqlite")
carry_out(task_from({str(instances / "glass.txt")!r}, settings), Watcher())
print(Ear.heard)
"""
    fresh = {**os.environ, "NUMBA_CACHE_DIR": str(tmp_path / "kernels")}
    done = subprocess.run(
        [sys.executable, "-c", script], env=fresh, capture_output=True, text=True, check=True, timeout=MINUTES
    )
    assert done.stdout.strip() == "[]"


@pytest.mark.parametrize("kind", ["ising", "maxcut"])
def test_a_target_in_the_users_own_terms_ends_the_run(instances: Path, tmp_path: Path, kind: str) -> None:
    tiny = tmp_path / "tiny.txt"
    tiny.write_text((instances / "tiny.txt").read_text().replace("# kind = ising", ""))
    total = sum(weight for _, _, weight in edges_in(tiny))
    energy = ground_energy(tiny)
    target = energy if kind == "ising" else (total - energy) / 2
    result = solved(tiny, "--kind", kind, f"--target={target}", "--calls", 100_000, "--cluster-size", 6)
    assert result["status"] == "target_reached"
    assert result["calls"] < 100_000
    assert result["energy" if kind == "ising" else "cut"] == target
    assert (energy_in if kind == "ising" else cut_in)(tiny, result["spins"]) == target


def test_a_start_is_accepted_and_never_made_worse(instances: Path, tmp_path: Path) -> None:
    tiny, ground = instances / "tiny.txt", ground_energy(instances / "tiny.txt")
    options = ("--cluster-size", 6, "--calls", 200)
    found = patchwalk_command("solve", tiny, f"--target={ground}", *options, "--json")
    best = json.loads(found.stdout)
    assert best["energy"] == ground
    (tmp_path / "best.json").write_text(found.stdout)
    (tmp_path / "best.txt").write_text("\n".join(f"{spin:+d}" for spin in best["spins"]))
    for start in ("best.json", "best.txt"):
        done = patchwalk_command(
            "solve", tiny, "--start", start, *options, "--hot", 50, "--cold", 50, "--subsolver", "uniform", "--json"
        )
        result = json.loads(done.stdout)
        assert result["start_energy"] == result["energy"] == ground
        assert result["spins"] == best["spins"], "no other configuration is as good, or this one was found first"
        assert "start accepted" in done.stderr
        assert f"{ground:g}" in done.stderr
        (row,) = rows_of(result["run_path"], "SELECT energies FROM checkpoints ORDER BY round DESC LIMIT 1")
        assert np.frombuffer(row["energies"]).max() > ground, "so hot a search has left the start behind"


# ---------------------------------------------------------------- several seeds, same bits


def test_several_seeds_go_into_one_file(instances: Path, tmp_path: Path) -> None:
    options = ("--calls", 64, "--cluster-size", 6, "--record", "all", "--sweeps", 0)
    several = solved(instances / "glass.txt", "--seeds", "1..3", *options, "--run", "several.sqlite")
    assert [run["seed"] for run in several["runs"]] == [1, 2, 3]
    assert {run["run_path"] for run in several["runs"]} == {"several.sqlite"}
    assert several["energy"] == min(run["energy"] for run in several["runs"])
    assert [path.name for path in tmp_path.iterdir()] == ["several.sqlite"]
    assert [run["seed"] for run in rows_of("several.sqlite", "SELECT seed FROM runs ORDER BY run")] == [1, 2, 3]
    assert len({tuple(run["spins"]) for run in several["runs"]}) > 1
    for place, run in enumerate(several["runs"], 1):
        alone = solved(instances / "glass.txt", "--seed", run["seed"], *options)
        assert {**alone, **{key: run[key] for key in MEASURED}} == run
        columns = "round, place, seed, members, proposal, change, accepted"
        together = rows_of("several.sqlite", f"SELECT {columns} FROM calls WHERE run = {place} ORDER BY round, place")
        apart = rows_of(alone["run_path"], f"SELECT {columns} FROM calls ORDER BY round, place")
        assert [tuple(row) for row in together] == [tuple(row) for row in apart]


@pytest.mark.parametrize("subsolver", ["walk,shots=3", "metropolis,sweeps=4"])
def test_same_seed_same_bits(instances: Path, subsolver: str) -> None:
    words = (
        instances / "glass.txt", "--subsolver", subsolver, "--calls", 200, "--cluster-size", 7, "--record", "all",
    )  # fmt: skip
    one, same = solved(*words, PYTHONHASHSEED="0"), solved(*words, PYTHONHASHSEED="1")
    assert bits_of(one) == bits_of(same)
    other = solved(*words, "--seed", 2)
    assert bits_of(one)[1] != bits_of(other)[1]


def test_a_share_of_the_rows_changes_nothing_but_the_rows(instances: Path) -> None:
    words = (instances / "glass.txt", "--subsolver", "uniform", "--calls", 400, "--cluster-size", 6)
    everything, share = (solved(*words, "--record", record) for record in ("all", "share"))
    assert bits_of(everything)[0] == bits_of(share)[0]
    columns = "round, place, seed, change, accepted"
    rows = {tuple(row) for row in rows_of(everything["run_path"], f"SELECT {columns} FROM calls")}
    kept = {tuple(row) for row in rows_of(share["run_path"], f"SELECT {columns} FROM calls")}
    assert kept < rows
    (tally,) = rows_of(share["run_path"], "SELECT sum(calls) AS calls, sum(accepted) AS accepted FROM tallies")
    assert tally["calls"] == 400 - len(kept)
    assert tally["accepted"] == sum(row[-1] for row in rows - kept)


# ---------------------------------------------------------------- file, command line, Python


EVERY_SETTING: dict[str, Any] = {
    "kind": "ising", "subsolver": "walk,shots=2,time_in_hops=[0.5, 1.0]", "cluster_size": 5, "rule": "scattered",
    "clusters_per_round": 3, "sweeps": 1, "seconds": 250.0, "calls": 90, "total_sweeps": 400, "target": -500.0,
    "seed": 7, "record": "all", "hot": 0.8, "cold": 0.2, "coolings": 2, "failures": 9, "flip_sign": True,
    "rule_weights": "fixed", "workers": 2, "replicas": 3, "tempering": "adaptive", "acceptance": "threshold",
    "stall": 5000, "restart_after": 4, "keep": 3, "distance": 5, "mixed_workers": True,
}  # fmt: skip
ELSEWHERE = {
    "start", "run", "seeds", "answer", "callers", "field_file",  # paths, and what cannot stand beside others: below
    "colours",  # of another kind: below
    "engine", "scheduler", "bound",  # test_workers, test_bound
}  # fmt: skip


def test_every_setting_is_tried() -> None:
    assert {*EVERY_SETTING, *ELSEWHERE} == set(SolveSettings.model_fields)
    defaults = SolveSettings()
    assert all(getattr(defaults, name) != value for name, value in EVERY_SETTING.items())


def toml_value(value: object) -> str:
    return json.dumps(value)


def option(name: str, value: object) -> str:
    """A setting as it is written on a command line."""
    dashed = f"--{name.replace('_', '-')}"
    return dashed if value is True else f"{dashed}={value}"


def test_file_command_line_and_python_are_one(instances: Path, tmp_path: Path) -> None:
    glass = instances / "glass.txt"
    lines = [f"{name} = {toml_value(value)}" for name, value in EVERY_SETTING.items()]
    (tmp_path / "all.toml").write_text("\n".join([f"input = {toml_value(str(glass))}", *lines]))
    options = [option(name, value) for name, value in EVERY_SETTING.items()]
    by_file, by_options = solved("all.toml", "--run", "1.sqlite"), solved(glass, *options, "--run", "2.sqlite")
    solution = patchwalk.solve(glass, **EVERY_SETTING, run="3.sqlite")
    by_python = json.loads(json.dumps(solution.as_json()))
    assert bits_of(by_file) == bits_of(by_options) == bits_of(by_python)
    assert by_file["calls"] == 90
    assert by_file["sweeps"] > 0
    stored = [json.loads(rows_of(f"{i}.sqlite", "SELECT settings FROM runs")[0]["settings"]) for i in (1, 2, 3)]
    for settings in stored:
        settings.pop("run")
    assert stored[0] == stored[1] == stored[2]
    given = {**EVERY_SETTING, "subsolver": stored[0]["subsolver"], "seed": None, "seeds": [EVERY_SETTING["seed"]]}
    assert {**stored[0], **given} == stored[0]
    assert isinstance(solution.spins, np.ndarray)
    assert solution.spins.dtype == np.int8
    assert solution.run_path == Path("3.sqlite")


def test_colours_are_the_same_in_file_command_line_and_python(tmp_path: Path) -> None:
    (tmp_path / "graph.csv").write_text("a,b\nb,c\nc,a\nc,d\n")
    options = ("--subsolver", "enumeration", "--cluster-size", 6, "--calls", 60)
    (tmp_path / "job.toml").write_text('input = "graph.csv"\nkind = "colouring"\ncolours = 3\n')
    by_file = solved("job.toml", *options)
    by_options = solved("graph.csv", "--kind", "colouring", "--colours", 3, *options)
    by_python = patchwalk.solve(
        "graph.csv", kind="colouring", colours=3, subsolver="enumeration", cluster_size=6, calls=60
    )
    assert bits_of(by_file) == bits_of(by_options) == bits_of(json.loads(json.dumps(by_python.as_json())))
    assert by_file["conflicts"] == 0
    assert len(by_file["spins"]) == 12
    assert patchwalk.forecast("job.toml").structure.spins == 12
    bound = patchwalk.bound("job.toml", colours=2, seconds=20, run="bound.sqlite")
    assert len(bound.spins) == 8
    assert bound.lower_bound == pytest.approx(1), "a triangle has no two colours"
    again = patchwalk.resume(by_options["run_path"])
    assert again.answer == by_options["answer"]
    with pytest.raises(patchwalk.settings_checks.SettingsError, match="colours: must be greater than or equal to 2"):
        patchwalk.solve("graph.csv", kind="colouring", colours=1)
    with pytest.raises(
        patchwalk.settings_checks.SettingsError,
        match="colours is 3, but the problem is given as it is; leave colours out",
    ):
        patchwalk.solve(patchwalk.make("sk", 10), colours=3)


CALLERS = [
    {"when": "stage < 0.3", "subsolver": "nothing"},
    {"when": "pull > 0.5", "subsolver": "walk,shots=2"},
    {"subsolver": "metropolis,sweeps=2"},
]


def test_callers_are_the_same_in_file_command_line_and_python(instances: Path, tmp_path: Path) -> None:
    glass, options = instances / "glass.txt", ("--cluster-size", 6, "--calls", 100, "--record", "all")
    cases = ["\n".join(f"{key} = {toml_value(value)}" for key, value in case.items()) for case in CALLERS]
    tables = "".join(f"[[callers]]\n{case}\n" for case in cases)
    (tmp_path / "callers.toml").write_text(f"input = {toml_value(str(glass))}\n{tables}")
    inline = ", ".join("{" + ", ".join(f"{k} = '{v}'" for k, v in case.items()) + "}" for case in CALLERS)
    by_file = solved("callers.toml", *options)
    by_options = solved(glass, "--callers", f"[{inline}]", *options)
    solution = patchwalk.solve(glass, callers=CALLERS, cluster_size=6, calls=100, record="all")
    assert bits_of(by_file) == bits_of(by_options) == bits_of(json.loads(json.dumps(solution.as_json())))
    assert by_file["calls"] + by_file["skipped"] == 100
    assert 25 <= by_file["skipped"] <= 64
    asked = {row["subsolver"].split(",")[0] for row in rows_of(by_file["run_path"], "SELECT subsolver FROM calls")}
    assert asked == {"walk", "metropolis"}


def test_the_answer_is_written_in_the_problems_own_terms(instances: Path, tmp_path: Path) -> None:
    options = {"kind": "maxcut", "calls": 60, "cluster_size": 6}
    words = [option(name, value) for name, value in options.items()]
    pairs = instances / "pairs.csv"
    (tmp_path / "job.toml").write_text(
        f'input = {toml_value(str(pairs))}\nkind = "maxcut"\ncalls = 60\ncluster_size = 6\nanswer = "file.csv"\n'
    )
    by_file, by_options = solved("job.toml"), solved(pairs, *words, "--answer", "option.csv")
    patchwalk.solve(pairs, **options, answer="python.csv")  # type: ignore[arg-type]
    texts = {name: (tmp_path / f"{name}.csv").read_text() for name in ("file", "option", "python")}
    assert len(set(texts.values())) == 1
    assert by_file["spins"] == by_options["spins"]
    for ending in ("txt", "json"):
        solved(pairs, *words, "--answer", f"answer.{ending}")
    read = json.loads((tmp_path / "answer.json").read_text())
    assert "cut" in json.dumps(read)
    names = {name for part in by_file["answer"]["parts"] for name in part}
    for text in (texts["file"], (tmp_path / "answer.txt").read_text(), (tmp_path / "answer.json").read_text()):
        assert all(name in text for name in names), "every name of the input stands in the answer"


@pytest.mark.parametrize(
    ("answer", "words"), [("no/such/folder/answer.json", "no/such/folder"), ("answer.csv", "these spins have no names")]
)
def test_an_answer_that_cannot_be_written_is_refused_before_the_search(
    instances: Path, tmp_path: Path, answer: str, words: str
) -> None:
    done = patchwalk_command("solve", instances / "tiny.txt", "--cluster-size", 4, "--answer", answer)
    assert done.returncode == 2
    assert f"answer: {words}" in done.stderr.replace("the folder ", "")
    assert not list(tmp_path.iterdir()), "nothing was begun"


def test_fields_from_a_file_of_their_own(tmp_path: Path) -> None:
    (tmp_path / "pairs.csv").write_text("a,b,1\nb,c,2\nc,d,-1\n")
    (tmp_path / "fields.csv").write_text("a,0.5\nd,-3\n")
    (tmp_path / "job.toml").write_text(
        'input = "pairs.csv"\nkind = "ising"\nfield_file = "fields.csv"\ncalls = 30\ncluster_size = 3\nrecord = "all"\n'
    )
    options = ("--kind", "ising", "--calls", 30, "--cluster-size", 3, "--record", "all")
    by_file, by_option = solved("job.toml"), solved("pairs.csv", "--field-file", "fields.csv", *options)
    by_python = patchwalk.solve(
        "pairs.csv", kind="ising", field_file="fields.csv", calls=30, cluster_size=3, record="all"
    )
    assert bits_of(by_file) == bits_of(by_option) == bits_of(json.loads(json.dumps(by_python.as_json())))
    assert by_file["energy"] == -1 - 2 - 1 - 3 + 0.5, "a, c and d up, b down: only the field of a is not obeyed"


def test_a_problem_made_in_python_is_solved_like_its_file(instances: Path) -> None:
    problem = patchwalk.read_problem(instances / "graph.txt", kind="maxcut")
    result = patchwalk.solve(problem, calls=60, cluster_size=6, record="all")
    by_file = solved(instances / "graph.txt", "--kind", "maxcut", "--calls", 60, "--cluster-size", 6, "--record", "all")
    assert bits_of(json.loads(json.dumps(result.as_json()))) == bits_of(by_file)


def test_a_settings_file_may_stand_anywhere_and_is_overridden(instances: Path, tmp_path: Path) -> None:
    away = tmp_path / "away"
    away.mkdir()
    (away / "start.txt").write_text("1 " * 36)
    (away / "mine.toml").write_text('name = "walk"\nshots = 3\n')
    (away / "glass.txt").write_text((instances / "glass.txt").read_text())
    (away / "job.toml").write_text(
        'input = "glass.txt"\nstart = "start.txt"\nrun = "job.sqlite"\nsubsolver = "@mine.toml"\n'
        'cluster_size = 6\ncalls = 40\nrecord = "all"\nseeds = [4, 5]\n'
    )
    result = solved("away/job.toml", "--seed", 9, "--calls", 30)
    assert (result["seed"], result["calls"]) == (9, 30), "the command line has the last word"
    assert "runs" not in result, "seed overrides the file's seeds"
    assert result["start_energy"] == pytest.approx(energy_in(away / "glass.txt", [1] * 36))
    assert (away / "job.sqlite").exists()
    assert rows_of(away / "job.sqlite", "SELECT subsolver FROM runs")[0]["subsolver"] == "walk,shots=3"
    spelled_out = solved(
        away / "glass.txt", "--subsolver", "walk,shots=3", "--cluster-size", 6, "--calls", 30, "--record", "all",
        "--seed", 9, "--start", "away/start.txt",
    )  # fmt: skip
    result["run_path"] = str(away / "job.sqlite")
    assert bits_of(result) == bits_of(spelled_out)
    (tmp_path / "here.toml").write_text('name = "walk"\nshots = 3\n')
    from_here = solved("away/job.toml", "--seed", 9, "--calls", 30, "--subsolver", "@here.toml", "--run", "here.sqlite")
    assert bits_of(from_here) == bits_of(spelled_out), "a path on the command line is relative to where one stands"


def test_a_subsolver_of_ones_own(instances: Path, tmp_path: Path) -> None:
    (tmp_path / "bench.py").write_text(
        "from patchwalk.subsolvers.enumeration import Enumeration\n"
        "class Mine(Enumeration):\n"
        "    name = 'mine'\n"
        "class Broken(Enumeration):\n"
        "    name = 'broken'\n"
        "    def propose(self, batch):\n"
        "        if batch.temperature.max() > 0:\n"
        "            raise OSError('the bench is dark')\n"
        "        return super().propose(batch)\n"
    )
    words = (instances / "glass.txt", "--calls", 50, "--cluster-size", 6, "--record", "all", "--failures", 5)
    mine = solved(*words, "--subsolver", "bench:Mine,shots=2", PYTHONPATH=search_path(tmp_path))
    ours = solved(*words, "--subsolver", "enumeration,shots=2")
    assert mine["spins"] == ours["spins"]
    broken = solved(
        *words, "--subsolver", "bench:Broken", "--clusters-per-round", 1, code=1, PYTHONPATH=search_path(tmp_path)
    )
    assert broken["status"] == "error"
    assert "the bench is dark" in broken["message"]
    assert broken["failed_calls"] == broken["calls"] == 5
    rows = rows_of(broken["run_path"], "SELECT accepted, message FROM calls")
    assert all("the bench is dark" in row["message"] for row in rows)
    assert broken["energy"] == pytest.approx(energy_in(instances / "glass.txt", broken["spins"]))


def search_path(folder: Path) -> str:
    """A PYTHONPATH that finds modules in ``folder`` as well."""
    return os.pathsep.join(filter(None, [os.environ.get("PYTHONPATH"), str(folder)]))


def test_packed_files_are_read(instances: Path) -> None:
    packed = made(Path.cwd(), "packed.txt.gz", "lattice2d", "--size", 4, "--seed", 3)
    options = ("--calls", 30, "--cluster-size", 6, "--record", "all")
    assert bits_of(solved(packed, *options)) == bits_of(solved(instances / "tiny.txt", *options))


# ---------------------------------------------------------------- the demo


@pytest.fixture(scope="module")
def demo(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Any]:
    """The demo at a fifth of its budget."""
    return solved(DEMO, "--calls", 4000, folder=tmp_path_factory.mktemp("demo"))


def test_the_demo_gives_an_allocation_that_holds(demo: dict[str, Any]) -> None:
    answer = demo["answer"]
    assert set(answer) == {
        "channels", "interference", "broken_repeaters", "feasible", "counts", "preferences_kept", "preferences",
        "greedy_interference", "caution",
    }  # fmt: skip
    interference, broken = interference_in(DEMO.with_name("quillmere.csv"), answer["channels"])
    assert (broken, answer["broken_repeaters"], answer["feasible"], demo["feasible"]) == (0, [], True, True)
    for stated in (answer["interference"], demo["interference"], demo["energy"]):
        assert stated == pytest.approx(interference, abs=1e-6)
    assert interference < answer["greedy_interference"]
    assert answer["counts"] == {channel: list(answer["channels"].values()).count(channel) for channel in "AB"}
    assert "no licence or navigation advice" in answer["caution"]


def test_the_demo_in_words(demo: dict[str, Any]) -> None:
    done = patchwalk_command("solve", DEMO, "--calls", 50)
    assert done.returncode in (0, 5), "fifty calls need not keep every repeater"
    assert "a simple greedy rule gives" in done.stdout
    assert "no licence or navigation advice" in done.stdout
    assert all(name in " ".join(done.stdout.split()) for name in demo["answer"]["channels"])


def test_an_answer_that_breaks_the_rules_is_called_so() -> None:
    options = ("--calls", 1, "--sweeps", 0)
    result = solved(DEMO, *options, code=5)
    _, broken = interference_in(DEMO.with_name("quillmere.csv"), result["answer"]["channels"])
    assert result["feasible"] is False
    assert len(result["answer"]["broken_repeaters"]) == broken > 0
    assert "NOT VALID" in patchwalk_command("solve", DEMO, *options).stdout
