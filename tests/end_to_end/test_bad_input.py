"""Whatever is wrong with the input is said in a sentence with place and way out, and nothing is left behind."""

from __future__ import annotations

import contextlib
import gzip
import json
import os
import re
import sqlite3
import subprocess
import sys
from collections.abc import Mapping
from pathlib import Path
from typing import NamedTuple

import pytest

import patchwalk
from patchwalk.settings_checks import SettingsError

PROGRAM = Path(sys.executable).with_name("patchwalk")
SETTINGS, PROBLEM, MEMORY, ERROR = 2, 3, 4, 1  # exit codes
PLAIN = ("--kind", "maxcut", "--calls", "5", "--cluster-size", "2")
TRIANGLE = "3 3\n1 2 1\n2 3 1\n1 3 1\n"
PATIENCE = 240


class Mistake(NamedTuple):
    """Words after ``solve``, what the complaint must say in how many lines (0: any number), and the files there are."""

    words: tuple[str, ...]
    code: int
    says: tuple[str, ...]
    files: Mapping[str, str | bytes] = {}
    lines: int = 1


def edge_list(text: str, *says: str) -> Mistake:
    """A problem file that cannot be read; the complaint names it."""
    return Mistake(("graph.txt", *PLAIN), PROBLEM, ("graph.txt", *says), {"graph.txt": text})


def option(words: str, code: int, *says: str, lines: int = 1, files: Mapping[str, str | bytes] = {}) -> Mistake:
    """A good problem with options that do not go with it."""
    return Mistake(("good.txt", *PLAIN, *words.split()), code, says, files, lines)


def settings_file(text: str, code: int, *says: str, lines: int = 1, files: Mapping[str, str | bytes] = {}) -> Mistake:
    """A settings file with a mistake in it."""
    return Mistake(("job.toml",), code, says, {"job.toml": text, **files}, lines)


GOOD_JOB = 'input = "good.txt"\nkind = "maxcut"\ncluster_size = 2\ncalls = 5\n'

MISTAKES: dict[str, Mistake] = {
    # the problem's file; finer points are held by the readers' own tests
    "missing file": Mistake(("nowhere.txt", *PLAIN), PROBLEM, ("nowhere.txt", "no such file")),
    "a folder": Mistake((".", *PLAIN), PROBLEM, ("folder",)),
    "too few lines": edge_list("3 3\n1 2 1\n2 3 1\n", "line 3", "2 edge lines", "promises 3"),
    "too many lines": edge_list("3 1\n1 2 1\n2 3 1\n", "line 3", "promises 1"),
    "vertex 0": edge_list("3 2\n0 2 1\n2 3 1\n", "line 2", "vertex 0", "1 to 3"),
    "vertex n+1": edge_list("3 2\n1 2 1\n2 4 1\n", "line 3", "vertex 4", "1 to 3"),
    "a word for a weight": edge_list("3 2\n1 2 heavy\n2 3 1\n", "line 2", "'heavy'", "number"),
    "not a number": edge_list("3 2\n1 2 1\n2 3 nan\n", "line 3", "'nan'", "finite"),
    "no edges": edge_list("3 0\n", "nothing to decide"),
    "empty file": edge_list("", "empty", "'n m'"),
    "no first line": edge_list("a b c\n", "line 1", "'n m'"),
    "self-loop": edge_list("3 2\n1 1 1\n2 3 1\n", "line 2", "vertex 1", "itself", "remove"),
    "a column missing": edge_list("3 2\n1 2 1\n2 3\n", "line 3", "3 columns"),
    "damaged gzip": Mistake(
        ("graph.txt.gz", *PLAIN), PROBLEM, ("graph.txt.gz", "damaged"),
        {"graph.txt.gz": gzip.compress(TRIANGLE.encode())[:-9]},
    ),
    "not text": Mistake(("graph.txt", *PLAIN), PROBLEM, ("graph.txt", "line 2", "UTF-8"), {"graph.txt": b"3 1\n\xff"}),
    "no kind": Mistake(("good.txt", "--calls", "5"), PROBLEM, ("good.txt", "--kind", "ising, maxcut")),
    "unknown kind": option("--kind maxcat", SETTINGS, "maxcat", "maxcut"),
    # sizes and start
    "k larger than n": option("--cluster-size 4", SETTINGS, "4", "3 spins", "--cluster-size"),
    "k larger than the subsolver takes": Mistake(
        ("long.txt", *PLAIN, "--cluster-size", "23"), SETTINGS, ("walk", "23", "22", "--cluster-size"),
        {"long.txt": "\n".join(["40 39", *(f"{i} {i + 1} 1" for i in range(1, 40))])},
    ),
    "start of the wrong length": option(
        "--start start.txt", PROBLEM, "start.txt", "2 values", "3 spins", files={"start.txt": "1 -1"}
    ),
    "start that is no configuration": option(
        "--start start.txt", PROBLEM, "start.txt, line 2", "'0'", "+1 or -1", files={"start.txt": "1 -1\n0\n"}
    ),
    # the run file
    "run file is there": option(
        "--run run.sqlite", ERROR, "run.sqlite", "there already", "--run", files={"run.sqlite": "mine"}
    ),
    "run file in an impossible place": option("--run good.txt/run.sqlite", ERROR, "good.txt/run.sqlite", "--run"),
    # options
    "unknown option": option("--cluster-sise 3", SETTINGS, "--cluster-sise", "--cluster-size", lines=0),
    "no input": Mistake((), SETTINGS, ("INPUT",), lines=0),
    "option that is no number": option("--calls many", SETTINGS, "--calls", "many", lines=0),
    "option out of range": option("--calls 0", SETTINGS, "--calls", "1", "given: 0"),
    "unknown rule": option("--rule bal", SETTINGS, "--rule", "bal", "ball", lines=0),
    "two options": option("--calls 0 --hot -1", SETTINGS, "--calls", "--hot", lines=2),
    "four options": option(
        "--calls many --rule bal --hot -1 --seeds 3..1", SETTINGS, "--calls", "--rule", "--hot", "--seeds", lines=4
    ),
    "seed and seeds": option("--seed 1 --seeds 1..2", SETTINGS, "seed and seeds"),
    "a seed twice": option("--seeds 1,1", SETTINGS, "seeds", "twice"),
    "unknown subsolver": option("--subsolver wlk", SETTINGS, "'wlk'", "did you mean 'walk'"),
    "unknown parameter": option("--subsolver walk,shoots=2", SETTINGS, "walk", "'shoots'", "did you mean 'shots'"),
    "parameter out of range": option("--subsolver walk,shots=0", SETTINGS, "walk", "shots", "0", "1,000,000"),
    "parameter of the wrong type": option("--subsolver metropolis,hot=warm", SETTINGS, "metropolis: hot", "'warm'"),
    "a walk without end": option("--subsolver walk,time=1e12", ERROR, "walk", "longest time", "measure earlier"),
    "parameter twice": option("--subsolver walk,shots=2,shots=3", SETTINGS, "shots", "twice"),
    "missing subsolver file": option("--subsolver @nowhere.toml", SETTINGS, "nowhere.toml", "a name and parameters"),
    "not a subsolver": option("--subsolver json:JSONDecoder", SETTINGS, "json:JSONDecoder", "no subsolver", "propose"),
    # settings files
    "missing settings file": Mistake(("nowhere.toml",), SETTINGS, ("nowhere.toml",)),
    "not TOML": settings_file('input = "good.txt\n', SETTINGS, "job.toml", "line 1"),
    "no input in the file": settings_file('kind = "maxcut"\n', SETTINGS, "job.toml", "input"),
    "input of the file missing": settings_file(
        GOOD_JOB.replace("good", "nowhere"), PROBLEM, "nowhere.txt", "no such file"
    ),
    "unknown key": settings_file(GOOD_JOB + "clusters_per_rond = 3\n", SETTINGS, "job.toml", "'clusters_per_round'"),
    "wrong types": settings_file(
        'input = "good.txt"\nkind = 3\ncluster_size = 2.5\ncalls = "many"\nhot = [1]\nseeds = [1, "x"]\nrule = "bal"\n'
        "sweeps = -1\ncluster_sise = 2\nstart = 7\n",
        SETTINGS,
        *("job.toml: kind", "job.toml: cluster_size", "job.toml: calls", "job.toml: hot", "job.toml: seeds"),
        *("job.toml: rule", "job.toml: sweeps", "job.toml: start", "job.toml: cluster_sise", "'cluster_size'?"),
        lines=9,
    ),
    "true for a number": settings_file(GOOD_JOB.replace("calls = 5", "calls = true"), SETTINGS, "job.toml: calls"),
    "a number for a subsolver": settings_file(GOOD_JOB + "subsolver = 7\n", SETTINGS, "job.toml: subsolver", "7"),
    "subsolver without a name": settings_file(GOOD_JOB + "[subsolver]\nshots = 2\n", SETTINGS, "name"),
    "unknown parameter in the file": settings_file(
        GOOD_JOB + '[subsolver]\nname = "walk"\nshoots = 2\n', SETTINGS, "job.toml", "'shoots'", "did you mean 'shots'"
    ),
    "settings that do not go together": settings_file(
        GOOD_JOB + "hot = 0.1\ncold = 0.2\nseed = 1\nseeds = [2, 3]\nfailures = 0\n",
        SETTINGS,
        *("job.toml: failures", "cold (0.2)", "seed and seeds"),
        lines=3,
    ),
}  # fmt: skip


def solve_command(*words: str, **environment: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [PROGRAM, "solve", *words], env={**os.environ, **environment}, capture_output=True, text=True,
        timeout=PATIENCE, check=False,
    )  # fmt: skip


def contents(folder: Path) -> dict[str, bytes | None]:
    """Every file of a folder with its bytes, every folder with none."""
    return {str(path.relative_to(folder)): path.read_bytes() if path.is_file() else None for path in folder.rglob("*")}


@pytest.mark.parametrize("name", MISTAKES)
def test_a_mistake_is_explained_and_leaves_nothing_behind(name: str, tmp_path: Path) -> None:
    mistake = MISTAKES[name]
    for file, content in {"good.txt": TRIANGLE, **mistake.files}.items():
        (tmp_path / file).write_bytes(content if isinstance(content, bytes) else content.encode())
    before = contents(tmp_path)
    done = solve_command(*mistake.words, "--json")
    assert "Traceback" not in done.stderr
    assert done.returncode == mistake.code, done.stderr
    for fragment in mistake.says:
        assert fragment in done.stderr
    assert contents(tmp_path) == before
    if mistake.lines:
        complaints = [line for line in done.stderr.splitlines() if line.startswith("patchwalk: ")]
        assert len(complaints) == mistake.lines, "a line for each mistake"
    printed = json.loads(done.stdout)
    assert printed["status"] == "error"
    assert all(fragment in printed["message"] for fragment in mistake.says)


def test_without_json_standard_output_stays_empty(tmp_path: Path) -> None:
    done = solve_command("nowhere.txt", *PLAIN)
    assert (done.returncode, done.stdout) == (PROBLEM, "")
    assert re.fullmatch(r"patchwalk: nowhere\.txt: .+\n", done.stderr)
    assert list(tmp_path.iterdir()) == []


def test_pairs_that_come_twice_are_summed_with_a_notice(tmp_path: Path) -> None:
    (tmp_path / "twice.txt").write_text("3 4\n1 2 1\n2 1 1.5\n2 3 1\n2 3 1\n")
    done = solve_command("twice.txt", *PLAIN, "--json")
    assert done.returncode == 0
    assert "2 pairs occur more than once; their weights were summed" in done.stderr
    assert json.loads(done.stdout)["cut"] == 4.5


def test_a_loop_is_a_field_where_the_kind_has_fields(tmp_path: Path) -> None:
    (tmp_path / "field.txt").write_text("2 2\n1 1 3\n1 2 1\n")
    done = solve_command("field.txt", "--kind", "ising", "--calls", "5", "--cluster-size", "2", "--json")
    assert done.returncode == 0
    result = json.loads(done.stdout)
    assert (result["energy"], result["spins"]) == (-4.0, [-1, 1])


@pytest.mark.skipif(os.geteuid() == 0, reason="root may write into a read-only folder")
def test_a_read_only_folder(tmp_path: Path) -> None:
    (tmp_path / "good.txt").write_text(TRIANGLE)
    locked = tmp_path / "locked"
    locked.mkdir(mode=0o500)
    done = solve_command("good.txt", *PLAIN, "--run", "locked/run.sqlite")
    assert done.returncode == ERROR
    assert "locked/run.sqlite" in done.stderr
    assert "--run" in done.stderr
    assert list(locked.iterdir()) == []


GREEDY = """
from dataclasses import replace
from patchwalk.subsolvers.uniform import Uniform

class Greedy(Uniform):
    name = "greedy"

    def forecast(self, batch):
        return replace(super().forecast(batch), bytes=10**15 * (batch.size > 2))

class Unready(Uniform):
    name = "unready"

    def prepare(self, sample):
        raise OSError("the bench is dark")
"""


@pytest.fixture
def bench(tmp_path: Path) -> str:
    """A PYTHONPATH with subsolvers of one's own on it; the folder also holds a good problem."""
    (tmp_path / "mine").mkdir()
    (tmp_path / "mine" / "bench.py").write_text(GREEDY)
    (tmp_path / "good.txt").write_text(TRIANGLE)
    return os.pathsep.join(filter(None, [os.environ.get("PYTHONPATH"), str(tmp_path / "mine")]))


@pytest.mark.parametrize("run", ["run.sqlite", "new/folder/run.sqlite"])
def test_what_would_not_fit_into_memory_is_refused(tmp_path: Path, bench: str, run: str) -> None:
    words = ("good.txt", *PLAIN, "--cluster-size", "3", "--subsolver", "bench:Greedy", "--run", run, "--json")
    done = solve_command(*words, PYTHONPATH=bench, PYTHONDONTWRITEBYTECODE="1")
    assert done.returncode == MEMORY
    message = json.loads(done.stdout)["message"]
    assert "greedy" in message
    assert "--cluster-size 2" in message, "the largest cluster that fits is named"
    assert sorted(path.name for path in tmp_path.iterdir()) == ["good.txt", "mine"]


def test_a_subsolver_that_cannot_get_ready_is_named(tmp_path: Path, bench: str) -> None:
    words = ("good.txt", *PLAIN, "--subsolver", "bench:Unready", "--json")
    done = solve_command(*words, PYTHONPATH=bench, PYTHONDONTWRITEBYTECODE="1")
    assert done.returncode == ERROR
    assert "Traceback" not in done.stderr
    message = json.loads(done.stdout)["message"]
    assert "unready" in message
    assert "the bench is dark" in message
    assert sorted(path.name for path in tmp_path.iterdir()) == ["good.txt", "mine"]


def test_a_run_file_is_never_overwritten(tmp_path: Path) -> None:
    (tmp_path / "good.txt").write_text(TRIANGLE)
    words = ("good.txt", *PLAIN, "--run", "run.sqlite")
    assert solve_command(*words).returncode == 0
    before = contents(tmp_path)
    assert solve_command(*words, "--seed", "2").returncode == ERROR
    assert contents(tmp_path) == before
    with contextlib.closing(sqlite3.connect("run.sqlite")) as database:
        assert database.execute("SELECT seed FROM runs").fetchall() == [(1,)]


def test_python_hears_of_all_mistakes_at_once() -> None:
    ring = patchwalk.Problem.from_arrays([0, 1, 2], [1, 2, 0], [1.0] * 3)
    with pytest.raises(SettingsError) as caught:
        patchwalk.solve(ring, cluster_sise=3, calls=0, seeds=[1, -1])
    message = str(caught.value)
    assert len(message.splitlines()) == 3
    assert "cluster_sise: there is no such setting; did you mean 'cluster_size'?" in message
    assert "calls: " in message
    assert "seeds: " in message
    assert list(Path.cwd().iterdir()) == []
