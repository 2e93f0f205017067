"""``bound`` and ``audit`` from outside: what they print is true of the file they were given."""

from __future__ import annotations

import json
import os
import re
import signal
import sqlite3
import subprocess
import sys
import time
from collections.abc import Callable
from contextlib import closing
from pathlib import Path
from typing import Any

import networkx as nx
import numpy as np
import pytest

import patchwalk
from patchwalk.commands.bounding import _result, bounds_for, search_for
from patchwalk.evidence.runfile import RunFileError, RunWriter
from patchwalk.problem.encodings import encode_independent_set
from patchwalk.search.bound_search import BranchPlan
from patchwalk.settings_checks import SettingsError
from patchwalk.subsolvers.contract import ClusterBatch, Edges
from patchwalk.subsolvers.registry import make_subsolver

MINUTES = 300  # no run here takes a tenth of it, compiling included; beyond it something hangs
START = "from patchwalk.interface.cli import main; main()"


def command(*words: object, code: int = 0) -> dict[str, Any]:
    """What the command prints with ``--json``; standard output must hold that one object and nothing else."""
    done = subprocess.run(
        [sys.executable, "-c", START, *map(str, words), "--json"], capture_output=True, text=True, timeout=MINUTES,
        check=False,
    )  # fmt: skip
    assert done.returncode == code, done.stderr
    assert len(done.stdout.splitlines()) == 1
    result: dict[str, Any] = json.loads(done.stdout)
    return result


@pytest.fixture
def lattice(tmp_path: Path) -> Path:
    path = tmp_path / "glass.txt"
    patchwalk.write_problem(patchwalk.make("lattice2d", 10, couplings="gaussian", seed=3), path)
    return path


def test_a_lattice_with_the_walk(lattice: Path, tmp_path: Path) -> None:
    """The incumbent's improvements by the walk are in the run file, and its calls are rows like all others."""
    run = tmp_path / "proof.sqlite"
    result = command(
        "bound", lattice, "--subsolver", "walk", "--cluster-size", "8", "--sweeps", "0", "--run", run, "--quiet"
    )
    assert result["status"] == "proved_optimal"
    problem = patchwalk.read_problem(lattice)
    assert problem.energy(result["spins"]) == pytest.approx(result["energy"], abs=1e-9)
    assert result["lower_bound"] <= result["energy"] <= result["lower_bound"] + problem.tie_tolerance
    with sqlite3.connect(run) as database:
        finders = [finder for (finder,) in database.execute("SELECT finder FROM incumbents")]
        assert "clusters" in finders
        rows = database.execute(
            "SELECT rule, k, length(members), hit_probability, energy_before, change FROM calls"
        ).fetchall()
        assert len(rows) == result["calls"] > 0
        assert {(rule, k, length) for rule, k, length, *_ in rows} == {("fractional", 8, 32)}
        assert all(0.0 < hit <= 1.0 for _, _, _, hit, _, _ in rows)
        best = min(energy for (energy,) in database.execute("SELECT energy FROM incumbents"))
        assert best == pytest.approx(result["energy"], abs=1e-9)
        assert database.execute("SELECT count(*) FROM nodes").fetchone()[0] >= 1
    audited = command("audit", lattice, run)
    assert audited["status"] == "confirmed"
    assert audited["proved_optimal"]
    assert audited["lower_bound"] == result["lower_bound"]


def test_a_run_file_that_was_tampered_with(lattice: Path, tmp_path: Path) -> None:
    run = tmp_path / "proof.sqlite"
    command("bound", lattice, "--run", run, "--quiet")
    with sqlite3.connect(run) as database:
        (data,) = database.execute("SELECT data FROM certificate_arrays WHERE name = 'duals'").fetchone()
        duals = np.frombuffer(data).copy()
        duals[np.argmax(duals)] *= 1.5
        database.execute("UPDATE certificate_arrays SET data = ? WHERE name = 'duals'", (duals.tobytes(),))
    audited = command("audit", lattice, run, code=1)
    assert audited["status"] == "refuted"
    assert "multipliers of node 0" in audited["message"]
    assert not audited["proved_optimal"]
    with sqlite3.connect(run) as database:
        database.execute("DELETE FROM certificates")
    assert "nothing that holds proves it" in command("audit", lattice, run, code=1)["message"]


@pytest.mark.parametrize(
    "damage",
    [
        "certificate_arrays SET dtype = 'zzz'", "certificate_arrays SET dtype = '<c16'",
        "certificate_arrays SET data = x'00'", "certificate_arrays SET data = NULL",
        "certificate_arrays SET shape = '[3'", "certificates SET bound = NULL", "certificates SET bound = 'low'",
    ],
)  # fmt: skip
def test_a_damaged_certificate_is_named_with_its_file(damage: str, tmp_path: Path) -> None:
    run, ring = tmp_path / "run.sqlite", patchwalk.Problem.from_arrays([0, 1, 2], [1, 2, 0], [1.0] * 3)
    patchwalk.bound(ring, run=run)
    with closing(sqlite3.connect(run)) as database, database:
        database.execute(f"UPDATE {damage}")
    with pytest.raises(RunFileError, match=r"run\.sqlite: the certificate of run 1 is damaged"):
        patchwalk.audit(ring, run)


def test_an_energy_that_was_made_up(lattice: Path, tmp_path: Path) -> None:
    run = tmp_path / "proof.sqlite"
    command("bound", lattice, "--run", run, "--quiet")
    with sqlite3.connect(run) as database:
        database.execute("UPDATE runs SET energy = energy - 1")
    assert "the configuration has" in command("audit", lattice, run, code=1)["message"]


@pytest.mark.parametrize(
    ("damage", "said"),
    [
        ("UPDATE certificate_arrays SET data = x'010203'", "the certificate of run 1 is damaged"),
        ("UPDATE certificate_arrays SET shape = '['", "the certificate of run 1 is damaged"),
        ("UPDATE runs SET spins = x'01'", "the answer of run 1 is damaged"),
        ("UPDATE runs SET energy = NULL", "holds no finished run"),
    ],
)
def test_a_damaged_proof_is_named(damage: str, said: str, tmp_path: Path) -> None:
    run, glass = tmp_path / "proof.sqlite", patchwalk.make("lattice2d", 4, seed=1)
    patchwalk.bound(glass, seconds=20, run=run)
    assert patchwalk.audit(glass, run).status == "confirmed"
    with closing(sqlite3.connect(run)) as database, database:
        database.execute(damage)
    with pytest.raises(RunFileError, match=re.escape(f"{run}: {said}")):
        patchwalk.audit(glass, run)


def test_another_problem_is_refused(lattice: Path, tmp_path: Path) -> None:
    run, other = tmp_path / "proof.sqlite", tmp_path / "other.txt"
    command("bound", lattice, "--run", run, "--quiet")
    patchwalk.write_problem(patchwalk.make("lattice2d", 10, couplings="gaussian", seed=6), other)
    assert "another problem" in command("audit", other, run, code=1)["message"]


def test_an_answer_is_recomputed(lattice: Path, tmp_path: Path) -> None:
    answer = tmp_path / "answer.txt"
    answer.write_text(" ".join(["+1"] * 100))
    audited = command("audit", lattice, answer)
    assert audited["energy"] == pytest.approx(patchwalk.read_problem(lattice).energy([1] * 100), abs=1e-9)
    assert audited["lower_bound"] is None
    assert not audited["proved_optimal"]
    answer.write_text("+1 -1")
    command("audit", lattice, answer, code=3)


def test_an_answer_that_breaks_a_constraint_or_lies_is_refuted(tmp_path: Path) -> None:
    """Nothing is mended on the way; every form in which answers are written is read, and held against its words."""
    graph, answer = tmp_path / "graph.csv", tmp_path / "answer.csv"
    graph.write_text("ash,bay\nbay,cob\ncob,Dünë\n")
    kind = ("--kind", "vertex_cover")
    answer.write_text("name,cover\nbay,1\ncob,1\n")
    good = command("audit", graph, answer, *kind)
    assert (good["status"], good["feasible"], good["weight"], good["energy"]) == ("confirmed", True, 2, 2)
    answer.write_text("# valid; weight 1\nname,cover\nbay,1\n")
    wrong = command("audit", graph, answer, *kind, code=1)
    assert (wrong["status"], wrong["feasible"]) == ("refuted", False)
    assert wrong["message"] == "NOT VALID: 1 constraint broken"
    assert wrong["broken"] == ["cob and Dünë are joined, and neither is in the cover"]
    solved = command("solve", graph, *kind, "--cluster-size", 3, "--calls", 30, "--quiet")
    printed = tmp_path / "printed.json"
    for change, complaint in (
        ({}, None),
        ({"weight": 1}, "it states weight 1, but it is 2"),
        ({"energy": -3.5}, "it states energy -3.5, but it is 2"),
        ({"weight": "two"}, "it states weight two, but it is 2"),
        ({"kind": "maxcut"}, "it answers a problem of kind maxcut, this one is of kind vertex_cover"),
        ({"spins": [-1, -1, -1, -1]}, "NOT VALID: 1 constraint broken"),  # the words beside it say something else
    ):
        printed.write_text(json.dumps({**solved, **change}))
        found = command("audit", graph, printed, *kind, code=int(complaint is not None))
        assert complaint is None or complaint in found["message"]
    printed.write_text('{"cover": ["elm"]}')
    command("audit", graph, printed, *kind, code=3)


def test_a_run_without_a_valid_answer_says_so(tmp_path: Path) -> None:
    graph, run = tmp_path / "graph.csv", tmp_path / "run.sqlite"
    graph.write_text("a,b\nb,c\nc,a\n")
    options = ("--kind", "colouring", "--colours", 2)
    command("solve", graph, *options, "--cluster-size", 3, "--calls", 20, "--run", run, "--quiet", code=5)
    found = command("audit", graph, run, *options)
    assert (found["status"], found["feasible"], found["conflicts"]) == ("confirmed", False, 1)
    assert "the best configuration is NOT VALID: 1 constraint broken" in found["message"]
    assert len(found["broken"]) == 1


def test_signs_and_fields_are_read_as_solve_reads_them(tmp_path: Path) -> None:
    pairs, fields = tmp_path / "pairs.csv", tmp_path / "fields.csv"
    pairs.write_text("a,b,1\nb,c,1\n")
    fields.write_text("a,5\nc,2\n")
    options = ("--kind", "ising", "--field-file", fields, "--flip-sign")
    bound = command("bound", pairs, *options, "--run", tmp_path / "run.sqlite", "--quiet")
    assert (bound["energy"], bound["lower_bound"]) == (-9, pytest.approx(-9))
    assert command("audit", pairs, tmp_path / "run.sqlite", *options)["status"] == "confirmed"


def test_python_and_command_line_agree(lattice: Path, tmp_path: Path) -> None:
    printed = command("bound", lattice, "--run", tmp_path / "one.sqlite", "--quiet")
    found = patchwalk.bound(lattice, run=tmp_path / "two.sqlite")
    assert found.as_json() | {"seconds": 0, "compile_seconds": 0, "run_path": ""} == printed | {
        "seconds": 0, "compile_seconds": 0, "run_path": "",
    }  # fmt: skip
    assert patchwalk.audit(lattice, tmp_path / "two.sqlite").proved_optimal


def test_cuts_in_the_users_own_terms(tmp_path: Path) -> None:
    path = tmp_path / "graph.csv"
    path.write_text("a,b,1\nb,c,2\nc,a,1\nc,d,1\n")
    result = command("bound", path, "--kind", "maxcut", "--cluster-size", "3", "--run", tmp_path / "run.sqlite")
    assert result["status"] == "proved_optimal"
    assert result["cut"] == result["objective_bound"] == 4.0
    assert result["lower_bound"] == -4.0


def test_complaints_come_all_at_once(lattice: Path) -> None:
    with pytest.raises(SettingsError) as refused:
        patchwalk.bound(lattice, seconds=-1, nodes=0.5, without="luck", clustersize=3)
    assert len(refused.value.complaints) == 4
    assert "did you mean 'cluster_size'" in str(refused.value)
    command("bound", lattice, "--seconds", "soon", code=2)


@pytest.mark.parametrize(("size", "method"), [(60, "cycles"), (150, "semidefinite"), (150, "clusters")])
def test_stopped_early_it_says_budget(size: int, method: str, tmp_path: Path) -> None:
    """Dense problems far beyond half a second: a true bound, held against the best configuration known."""
    problem = patchwalk.make("sk", size, seed=1)
    found = patchwalk.bound(problem, method=method, seconds=0.5, run=tmp_path / "run.sqlite")
    assert found.status == "budget"
    assert found.lower_bound < found.energy
    assert patchwalk.audit(problem, tmp_path / "run.sqlite").status == "confirmed"


@pytest.mark.parametrize("method", ["cycles", "semidefinite", "clusters"])
def test_an_interrupt_keeps_the_bound(method: str, tmp_path: Path) -> None:
    path, run = tmp_path / "dense.txt", tmp_path / "run.sqlite"
    patchwalk.write_problem(patchwalk.make("sk", 90, seed=1), path)
    words = ["bound", str(path), "--run", str(run), "--method", method, "--seconds", "200", "--json"]
    process = subprocess.Popen(
        [sys.executable, "-c", START, *words], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )
    deadline = time.monotonic() + MINUTES
    while time.monotonic() < deadline:  # until the clock of the search has started
        assert process.stderr is not None
        if "compiled" in process.stderr.readline():
            break
    time.sleep(0.5)
    os.kill(process.pid, signal.SIGINT)
    out, _ = process.communicate(timeout=MINUTES)
    assert process.returncode == 130
    result = json.loads(out)
    assert result["status"] == "interrupted"
    assert result["lower_bound"] < result["energy"]
    assert command("audit", path, run)["status"] == "confirmed"


def test_a_stopped_run_is_gone_on_with(tmp_path: Path) -> None:
    stopped, proved = tmp_path / "one.sqlite", tmp_path / "two.sqlite"
    problem = patchwalk.Problem.from_networkx(nx.complete_graph(10))
    first = patchwalk.bound(problem, method="cycles", nodes=2, run=stopped)
    assert first.status == "budget"
    second = patchwalk.bound(problem, earlier=stopped, run=proved)
    assert second.status == "proved_optimal"
    assert second.objective == 25.0  # floor(n^2 / 4)
    assert second.nodes > first.nodes
    assert patchwalk.audit(problem, proved).proved_optimal
    with pytest.raises(RunFileError, match="another problem"):
        patchwalk.bound(patchwalk.make("sk", 20, seed=1), earlier=stopped, run=tmp_path / "three.sqlite")


def test_a_dense_tree_is_not_gone_on_with(tmp_path: Path) -> None:
    problem, run = patchwalk.make("sk", 30, seed=1), tmp_path / "run.sqlite"
    assert patchwalk.bound(problem, nodes=1, run=run).certificate.method == "semidefinite"
    with pytest.raises(SettingsError, match=r"semidefinite; only trees of cycles and clusters .* --start FILE"):
        patchwalk.bound(problem, earlier=run, run=tmp_path / "later.sqlite")
    (tmp_path / "answer.txt").write_text("+1 " * 30)
    (tmp_path / "later.sqlite").unlink(missing_ok=True)
    with pytest.raises(SettingsError, match="no certificate to go on from"):
        patchwalk.bound(problem, earlier=tmp_path / "answer.txt", run=tmp_path / "later.sqlite")


def test_dense_glasses_are_proved_by_semidefinite_duals(tmp_path: Path) -> None:
    problem, run = patchwalk.make("sk", 40, seed=1), tmp_path / "run.sqlite"
    found = patchwalk.bound(problem, run=run)
    assert found.status == "proved_optimal"
    assert found.certificate.method == "semidefinite"
    assert found.calls > 0
    by_cycles = patchwalk.bound(patchwalk.make("sk", 16, seed=1), method="cycles", run=tmp_path / "two.sqlite")
    by_duals = patchwalk.bound(patchwalk.make("sk", 16, seed=1), run=tmp_path / "three.sqlite")
    assert by_cycles.energy == pytest.approx(by_duals.energy, abs=1e-9)
    assert patchwalk.audit(problem, run).proved_optimal
    with sqlite3.connect(run) as database:
        (data,) = database.execute("SELECT data FROM certificate_arrays WHERE name = 'diagonals'").fetchone()
        raised = np.frombuffer(data) + 1e-3
        database.execute("UPDATE certificate_arrays SET data = ? WHERE name = 'diagonals'", (raised.tobytes(),))
    assert patchwalk.audit(problem, run).status == "refuted"


QUILLMERE = Path(__file__).resolve().parents[2] / "configs" / "quillmere.csv"


def altered(run: Path, name: str, place: int, change: float) -> None:
    """Add ``change`` to one number of the certificate in a run file."""
    with sqlite3.connect(run) as database:
        (data,) = database.execute("SELECT data FROM certificate_arrays WHERE name = ?", (name,)).fetchone()
        numbers = np.frombuffer(data).copy()
        numbers[place] += change
        database.execute("UPDATE certificate_arrays SET data = ? WHERE name = ?", (numbers.tobytes(), name))


def test_the_demo_is_narrow_and_proved(tmp_path: Path) -> None:
    """Its coast is eliminated from end to end; the kernels of the subsolver ``elimination`` find the same minimum."""
    run = tmp_path / "run.sqlite"
    found = command("bound", QUILLMERE, "--run", run, "--quiet")
    assert found["status"] == "proved_optimal"
    assert "eliminated" in found["proof"]
    audited = command("audit", QUILLMERE, run)
    assert audited["proved_optimal"]
    assert audited["method"] == "clusters"
    problem = patchwalk.read_problem(QUILLMERE)
    edges = np.argwhere(np.triu(problem.matrix.toarray())).astype(np.int32)
    whole = ClusterBatch(
        fields=problem.fields[None], spins=np.ones((1, len(problem)), np.int8), temperature=np.zeros(1),
        seeds=np.zeros(1, np.uint64),
        edges=Edges(np.array([0, len(edges)]), edges, problem.matrix.toarray()[edges[:, 0], edges[:, 1]]),
    )  # fmt: skip
    (lowest,), _ = make_subsolver("elimination").minima(whole)
    assert found["energy"] == pytest.approx(lowest + problem.offset, abs=1e-9)
    altered(run, "coupling_shares", 7, 1e-3)
    assert "do not add up" in command("audit", QUILLMERE, run, code=1)["message"]


def test_overlapping_clusters_on_a_lattice(tmp_path: Path) -> None:
    """Asked for by name where they are not the best: a true bound, turn by turn higher, and refused when a multiplier
    is altered alone, when two are so that the shares add up again, and when the bound itself is."""
    problem, run = patchwalk.make("lattice2d", 12, couplings="gaussian", seed=1), tmp_path / "run.sqlite"
    found = patchwalk.bound(problem, method="clusters", nodes=2, run=run)
    assert found.status == "budget"
    assert [line.outcome for line in found.log] == ["8 spins", "10 spins"]
    assert found.log[0].bound < found.lower_bound < found.energy
    assert found.lower_bound <= bounds_for(problem, 60.0).energy
    assert patchwalk.audit(problem, run).lower_bound == found.lower_bound
    with sqlite3.connect(run) as database:
        database.execute("UPDATE certificates SET bound = bound + 1e-6")
    assert "clusters gives" in patchwalk.audit(problem, run).message
    with sqlite3.connect(run) as database:
        database.execute("UPDATE certificates SET bound = ?", (found.lower_bound,))
    members = found.certificate.arrays["members"]
    first, second = np.flatnonzero(members == members[0])[:2]
    altered(run, "field_shares", first, 0.25)
    assert "do not add up" in patchwalk.audit(problem, run).message
    altered(run, "field_shares", second, -0.25)  # they add up again, and prove less than is stated
    assert "clusters gives" in patchwalk.audit(problem, run).message


def test_clusters_larger_than_the_problem(tmp_path: Path) -> None:
    """Five spins are fewer than the smallest size; planar and without fields, they are not eliminated beforehand."""
    ring = patchwalk.Problem.from_arrays(range(5), [1, 2, 3, 4, 0], [1.0] * 5)
    found = patchwalk.bound(ring, method="clusters", run=tmp_path / "run.sqlite")
    assert (found.status, found.energy, found.lower_bound) == ("proved_optimal", -3, -3)
    assert "all 5 spins" in found.proof


@pytest.mark.parametrize("method", ["cycles", "semidefinite", "clusters"])
def test_a_record_that_cannot_be_kept_costs_neither_bound_nor_answer(
    method: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Not even where that shows after the first cooling, before anything was bounded."""

    def refuse(*_: object, **__: object) -> None:
        raise RunFileError("no room is left")

    monkeypatch.setattr(RunWriter, "add", refuse)
    monkeypatch.setattr(RunWriter, "finish", refuse)
    problem = patchwalk.make("sk", 12, seed=1)
    found = patchwalk.bound(problem, method=method, run=tmp_path / "run.sqlite")
    assert (found.status, found.message) == ("error", "no room is left")
    assert -np.inf < found.lower_bound <= found.energy == problem.energy(found.spins)


def test_for_callers_with_a_configuration_of_their_own() -> None:
    problem = patchwalk.make("lattice2d", 8, seed=3)
    found = bounds_for(problem, 60.0, start=np.ones(64, np.int8))
    assert found.status == "proved_optimal"
    assert found.run_path is None
    assert bounds_for(problem, 60.0, start=found.spins, nodes=1).energy == found.energy


def test_planar_problems_begin_with_their_ground_state(tmp_path: Path) -> None:
    problem = patchwalk.make("lattice2d", 9, open=True, seed=3)
    found = patchwalk.bound(problem, sweeps=0, run=tmp_path / "run.sqlite")
    assert found.status == "proved_optimal"
    with sqlite3.connect(tmp_path / "run.sqlite") as database:
        assert ("matching",) in database.execute("SELECT finder FROM incumbents").fetchall()


def test_open_instances(instance: Callable[[str], Path], tmp_path: Path) -> None:
    """G11: 564 is optimal by exact transfer over rows."""
    found = patchwalk.bound(instance("G11.txt"), kind="maxcut", run=tmp_path / "run.sqlite")
    assert found.status == "proved_optimal"
    assert found.objective == 564.0


@pytest.mark.slow
def test_a_gaussian_torus(instance: Callable[[str], Path], tmp_path: Path) -> None:
    """41684814 is the optimum of torusg3-8 (7th DIMACS challenge set; from memory)."""
    found = patchwalk.bound(instance("torusg3-8.dat"), kind="maxcut", seconds=600, run=tmp_path / "run.sqlite")
    assert found.status == "proved_optimal"
    assert found.objective == 41684814.0


def test_clusters_of_its_own_choice_can_be_answered(tmp_path: Path) -> None:
    glass = patchwalk.make("lattice2d", 12, couplings="gaussian", seed=3)
    found = patchwalk.bound(glass, run=tmp_path / "bound.sqlite")
    with closing(sqlite3.connect(tmp_path / "bound.sqlite")) as database:
        assert database.execute("SELECT count(*), max(status) FROM calls").fetchone() == (found.calls, 0)


def test_energy_and_objective_are_those_of_the_answer_that_is_told() -> None:
    edges = [(i, j) for i in range(14) for j in range(i) if (i * j) % 3 == 1]
    problem = encode_independent_set(edges, names=[f"site {i}" for i in range(14)])
    everybody = np.full(len(problem), -1, np.int8)  # broken, and mended
    search = search_for(problem, "cycles")(
        problem, make_subsolver("elimination"), BranchPlan(1.0, 1, 8, heuristic=False), 1, everybody, lambda: True
    )
    search.prepare()
    assert list(search.rounds()) == []  # interrupted at once
    found = _result(search, 0.0, None)
    assert found.feasible
    assert found.answer["repaired"]
    assert found.energy == pytest.approx(problem.energy(found.spins))
    assert found.objective == found.answer[problem.objective_name]
