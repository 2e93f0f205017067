"""``patchwalk backends``: the list, the check and the prices; and what a stranger's plug-in can do to a run."""

from __future__ import annotations

import ast
import contextlib
import importlib
import json
import shlex
import sqlite3
import subprocess
import sys
import tomllib
from collections.abc import Iterator
from pathlib import Path
from types import ModuleType

import pytest
from click.testing import CliRunner, Result

import patchwalk
from patchwalk.interface.cli import program
from patchwalk.subsolvers import make_subsolver, subsolver_names
from patchwalk.subsolvers.registry import SubsolverError

ROOT = Path(__file__).resolve().parents[2]
TEMPLATE = ROOT / "configs" / "device-template.py"
SPELLING = f"external,command={json.dumps(shlex.join([sys.executable, str(TEMPLATE)]))}"

BIASED = """
from patchwalk.subsolvers.uniform import Uniform


class Biased(Uniform):
    def propose(self, batch):
        answer = super().propose(batch)
        return type(answer)(abs(answer.outcomes), answer.work, answer.status, answer.messages)
"""

TIMED_DEVICE = """
import json, sys
print(json.dumps({"protocol": 1, "name": "clockwork", "largest_cluster": 20, "largest_batch": 50}), flush=True)
for line in sys.stdin:
    asked = json.loads(line)
    rows = len(asked["spins"])
    reply = {"answer": asked["request"], "spins": [[own] * asked["shots"] for own in asked["spins"]]}
    reply.update(load_s=[0.5] * rows, evolve_s=[0.004] * rows, read_s=[0.002] * rows, wait_s=[None] * rows)
    print(json.dumps(reply), flush=True)
"""


def backends(*words: str) -> Result:
    return CliRunner().invoke(program, ["backends", *words])


def test_the_list_names_everything() -> None:
    listed = backends()
    assert listed.exit_code == 0
    lines = listed.stdout.splitlines()
    assert [line.split()[0] for line in lines] == ["name", *subsolver_names()]
    walk = make_subsolver("walk")
    assert lines[1].split()[:4] == ["walk", str(walk.max_spins), walk.balance, "yes"]
    rows = {row["name"]: row for row in json.loads(backends("--json").stdout)["backends"]}
    assert rows["enumeration"]["largest"] == make_subsolver("enumeration").max_spins
    assert (rows["external"]["largest"], rows["external"]["deterministic"]) == (None, None)


def test_a_strangers_broken_package_does_not_hide_the_others(monkeypatch: pytest.MonkeyPatch) -> None:
    from importlib.metadata import EntryPoint

    from patchwalk.subsolvers import registry

    stray = EntryPoint("stray", "no_such_module:Thing", registry.ENTRY_POINT_GROUP)
    monkeypatch.setattr(registry, "entry_points", lambda **_: [stray])
    rows = {row["name"]: row for row in json.loads(backends("--json").stdout)["backends"]}
    assert "no_such_module" in rows["stray"]["note"]
    assert "walk" in rows


def test_the_template_passes_the_check() -> None:
    checked = backends("--check", SPELLING, "--calls", "200", "--json")
    assert checked.exit_code == 0
    verdicts = {one["promise"]: one["outcome"] for one in json.loads(checked.stdout)["verdicts"]}
    assert set(verdicts.values()) == {"kept", "not promised"}
    assert verdicts["determinism"] == verdicts["rows alone"] == verdicts["time-outs"] == "kept"


def test_a_broken_backend_exits_with_1_and_is_named(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "biased_backend.py").write_text(BIASED)
    monkeypatch.syspath_prepend(tmp_path)
    checked = backends("--check", "biased_backend:Biased")
    assert checked.exit_code == 1
    broken = [line for line in checked.stdout.splitlines() if "BROKEN" in line]
    assert len(broken) == 1
    assert broken[0].startswith("symmetry")
    assert checked.stdout.splitlines()[-1] == "biased_backend:Biased: 1 promises broken: symmetry"


def test_prices_of_counted_work_are_toml() -> None:
    measured = backends("--time", "metropolis,sweeps=4", "--cluster-size", "8", "--calls", "60")
    assert measured.exit_code == 0
    assert 0 < tomllib.loads(measured.stdout)["prices"]["spin_updates"] < 1


def test_a_devices_own_times_become_prices(tmp_path: Path) -> None:
    (tmp_path / "clock.py").write_text(TIMED_DEVICE)
    command = json.dumps(shlex.join([sys.executable, "-S", str(tmp_path / "clock.py")]))
    measured = backends("--time", f"external,shots=4,command={command}", "--calls", "40")
    assert measured.exit_code == 0
    assert tomllib.loads(measured.stdout)["device"] == {
        "load_s": 0.5, "evolve_s_per_hop": 0.001, "read_s": 0.0005, "wait_s": 0.0,
    }  # fmt: skip
    assert measured.stdout.startswith("# clockwork: ")


def test_a_device_without_a_clock_is_timed_from_outside() -> None:
    device = tomllib.loads(backends("--time", SPELLING, "--calls", "40").stdout)["device"]
    assert device["wait_s"] > 0
    assert device["load_s"] == device["read_s"] == device["evolve_s_per_hop"] == 0


@pytest.mark.parametrize(
    ("words", "complaint"),
    [
        (["--check", "wolk"], "did you mean 'walk'"),
        (["--check", "external,command=no-such-program"], "cannot start no-such-program"),
        (["--time", "uniform", "--calls", "3"], "give --calls 7 or more"),
        (["--check", "walk", "--time", "walk"], "give one of them"),
    ],
)
def test_mistakes_are_told(words: list[str], complaint: str) -> None:
    refused = backends(*words)
    assert refused.exit_code == 2
    assert complaint in refused.stderr


PLUG_INS = """
import dataclasses, sys
import numpy as np
from patchwalk.subsolvers.uniform import Uniform


class Good(Uniform):
    largest_batch = 2
    sizes, closed = [], []

    def propose(self, batch):
        self.sizes.append(len(batch))
        return super().propose(batch)

    def close(self):
        self.closed.append(len(self.sizes))


class Spoiled(Uniform):
    def prepare(self, sample):
        return self

    def propose(self, batch):
        return self.spoil(super().propose(batch), len(batch))


class Nothing(Spoiled):
    def spoil(self, answer, rows): return None

class NoNumber(Spoiled):
    def spoil(self, answer, rows): return dataclasses.replace(answer, outcomes=np.full(answer.outcomes.shape, np.nan))

class OddWork(Spoiled):
    def spoil(self, answer, rows):
        return dataclasses.replace(answer, work=dataclasses.replace(answer.work, shots=np.ones(rows + 1)))

class NoWork(Spoiled):
    def spoil(self, answer, rows): return dataclasses.replace(answer, work=None)

class OddStatus(Spoiled):
    def spoil(self, answer, rows): return dataclasses.replace(answer, status=np.full(rows, 9, np.uint8))

class Liar(Spoiled):
    def spoil(self, answer, rows): return dataclasses.replace(answer, hit_probability=np.full(rows, 1.5))

class Raises(Spoiled):
    def spoil(self, answer, rows): raise ZeroDivisionError("by nought")

class Leaves(Spoiled):
    def spoil(self, answer, rows): sys.exit(4)

class Unready(Uniform):
    def prepare(self, sample): raise OSError("no licence")

class Turns(Uniform):
    def prepare(self, sample): return 7
"""


@pytest.fixture
def plug_ins(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[ModuleType]:
    """A stranger's module, importable as ``strange_plug_ins``."""
    (tmp_path / "strange_plug_ins.py").write_text(PLUG_INS)
    monkeypatch.syspath_prepend(tmp_path)
    yield importlib.import_module("strange_plug_ins")
    del sys.modules["strange_plug_ins"]


@pytest.mark.parametrize(
    ("attribute", "words"),
    [
        ("Nothing", "propose gave back a NoneType"),
        ("NoNumber", "outcomes must be an int8 array"),
        ("OddWork", "work.shots must be an array of shape"),
        ("NoWork", "work is a NoneType"),
        ("OddStatus", "status holds 9"),
        ("Liar", "hit_probability holds a probability above 1"),
        ("Raises", "ZeroDivisionError: by nought"),
        ("Leaves", "SystemExit: 4"),
    ],
)
def test_whatever_a_plug_in_does_wrong_is_a_failed_call(plug_ins: ModuleType, attribute: str, words: str) -> None:
    lattice = patchwalk.make("lattice2d", 5)
    spelling = f"strange_plug_ins:{attribute}"
    solution = patchwalk.solve(lattice, subsolver=spelling, calls=12, cluster_size=4, record="all", run="run.sqlite")
    assert (solution.status, solution.calls, solution.failed_calls) == ("budget", 12, 12)
    assert solution.energy == pytest.approx(lattice.energy(solution.spins))
    with contextlib.closing(sqlite3.connect("run.sqlite")) as database:
        messages = database.execute("SELECT DISTINCT message FROM calls WHERE status = 2").fetchall()
    assert all(words in message for (message,) in messages)
    assert messages


@pytest.mark.parametrize(("attribute", "words"), [("Unready", "OSError: no licence"), ("Turns", "gave back a int")])
def test_a_plug_in_that_cannot_get_ready_ends_the_run_before_it_begins(
    plug_ins: ModuleType, attribute: str, words: str
) -> None:
    with pytest.raises(SubsolverError, match=words):
        patchwalk.solve(
            patchwalk.make("lattice2d", 5), subsolver=f"strange_plug_ins:{attribute}", calls=12, cluster_size=4
        )
    assert not list(Path().glob("*.sqlite"))


def test_a_plug_in_is_asked_its_largest_batch_and_let_go_at_the_end(plug_ins: ModuleType) -> None:
    patchwalk.solve(
        patchwalk.make("lattice2d", 8), subsolver="strange_plug_ins:Good", calls=21, cluster_size=2,
        clusters_per_round=7, seeds=[1, 2],
    )  # fmt: skip
    good = plug_ins.Good
    assert max(good.sizes[1:]) == 2
    assert len(good.closed) == 2
    assert good.closed[-1] == len(good.sizes)


def test_the_template_solves_the_demo_by_itself(tmp_path: Path) -> None:
    """With the classical sweeps off, so that whatever is found the device found."""
    words = [
        str(Path(sys.executable).with_name("patchwalk")), "solve", str(ROOT / "configs" / "quillmere.toml"),
        "--subsolver", SPELLING, "--sweeps", "0", "--calls", "1500", "--run", "run.sqlite", "--quiet", "--json",
    ]  # fmt: skip
    run = subprocess.run(words, cwd=tmp_path, capture_output=True, text=True, check=False)
    assert run.returncode == 0, run.stderr
    solution = json.loads(run.stdout)
    assert (solution["status"], solution["calls"], solution["failed_calls"]) == ("budget", 1500, 0)
    assert solution["feasible"]
    assert solution["answer"]["interference"] < solution["answer"]["greedy_interference"] - 100


def test_the_template_stands_alone() -> None:
    tree = ast.parse(TEMPLATE.read_text())
    imports = [alias.name for node in ast.walk(tree) if isinstance(node, ast.Import) for alias in node.names]
    assert not [node for node in ast.walk(tree) if isinstance(node, ast.ImportFrom)]
    assert imports
    assert set(imports) <= set(sys.stdlib_module_names)
