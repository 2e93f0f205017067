"""``sample`` from outside: what it prints follows the Boltzmann law, and what would not is refused with the reason."""

from __future__ import annotations

import contextlib
import itertools
import json
import signal
import sqlite3
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import patchwalk
from patchwalk.settings import SamplingSettings

PROGRAM = Path(sys.executable).with_name("patchwalk")
PATIENCE = 240
AVERAGES = ("energy", "heat_capacity", "magnetisation", "absolute_magnetisation", "overlap", "absolute_overlap")
RING = "6 7\n1 2 1\n2 3 1\n3 4 1\n4 5 1\n5 6 1\n1 6 1\n1 1 0.5\n"
OPTIONS: dict[str, Any] = {
    "kind": "ising", "subsolver": "walk,start=incumbent", "cluster_size": 3, "rule": "scattered", "sweeps": 1,
    "clusters_per_round": 4, "temperatures": "2.0,1.0", "rounds": 600, "burn_in": 50, "copies": 3, "seed": 5,
    "record": "all", "rule_weights": "fixed", "failures": 50,
}  # fmt: skip


def run(*words: object) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [PROGRAM, "sample", *map(str, words)], capture_output=True, text=True, timeout=PATIENCE, check=False
    )


def options(**changed: Any) -> list[str]:
    return [f"--{name.replace('_', '-')}={value}" for name, value in {**OPTIONS, **changed}.items()]


@pytest.fixture(autouse=True)
def ring(tmp_path: Path) -> None:
    """A ring of six spins, one of them in a field."""
    (tmp_path / "ring.txt").write_text(RING)


def listed(temperature: float) -> dict[str, float]:
    """The averages over all 64 configurations, from the text of the file."""
    spins = np.array(list(itertools.product([1, -1], repeat=6)))
    energies = np.zeros(64)
    for line in RING.splitlines()[1:]:
        i, j, weight = line.split()
        one, other = spins[:, int(i) - 1], spins[:, int(j) - 1]
        energies += float(weight) * (one if i == j else one * other)
    weights = np.exp(-energies / temperature)
    weights /= weights.sum()
    mean, each = weights @ energies, weights @ spins
    return {
        "energy": mean,
        "heat_capacity": weights @ (energies - mean) ** 2 / (6 * temperature**2),
        "magnetisation": each.mean(),
        "absolute_magnetisation": weights @ np.abs(spins.mean(axis=1)),
        "overlap": float(np.mean(each**2)),
    }


def test_json_holds_the_averages_with_all_that_belongs_to_them() -> None:
    done = run("ring.txt", *options(), "--json")
    assert done.returncode == 0, done.stderr
    result = json.loads(done.stdout)
    assert set(result) == {
        "levels", "status", "message", "rounds", "burn_in", "calls", "failed_calls", "sweeps", "seconds",
        "compile_seconds", "seed", "run_path",
    }  # fmt: skip
    assert (result["status"], result["rounds"], result["burn_in"], result["seed"]) == ("budget", 600, 50, 5)
    assert result["sweeps"] == 6 * 650
    assert [level["temperature"] for level in result["levels"]] == [2.0, 1.0]
    for level in result["levels"]:
        assert set(level) == {"temperature", *AVERAGES}
        expected = listed(level["temperature"])
        for name in AVERAGES:
            found = level[name]
            assert set(found) == {"value", "error", "tau", "n", "effective_n", "reliable"}
            assert found["tau"] >= 1.0
            assert found["n"] == (600 if "overlap" in name else 1800)
            assert found["effective_n"] == pytest.approx(found["n"] / found["tau"])
            assert found["reliable"] == (found["effective_n"] >= 20)
            if name in expected:
                assert abs(found["value"] - expected[name]) < 5 * found["error"], (level["temperature"], name)
    with contextlib.closing(sqlite3.connect(result["run_path"])) as database:
        assert database.execute("SELECT count(*) FROM calls").fetchone()[0] == result["calls"]
        series = database.execute("SELECT temperature, copies, energies FROM measurements ORDER BY 1 DESC").fetchall()
    for (temperature, copies, blob), level in zip(series, result["levels"], strict=True):
        energies = np.frombuffer(blob, "<f8").reshape(600, copies)
        assert temperature == level["temperature"]
        assert energies.mean() == pytest.approx(level["energy"]["value"], abs=1e-12)


def test_file_command_line_and_python_are_one(tmp_path: Path) -> None:
    lines = [f"{name} = {json.dumps(value)}" for name, value in {**OPTIONS, "temperatures": [2.0, 1.0]}.items()]
    (tmp_path / "all.toml").write_text("\n".join(['input = "ring.txt"', *lines]))
    by_file, by_options = (
        json.loads(run(*words, "--json").stdout) for words in (["all.toml"], ["ring.txt", *options()])
    )
    by_python = patchwalk.sample("ring.txt", **OPTIONS).as_json()
    assert by_file["levels"] == by_options["levels"] == json.loads(json.dumps(by_python["levels"]))
    again = patchwalk.sample("ring.txt", **{**OPTIONS, "workers": 2, "seed": 5}).as_json()
    assert again["levels"] == by_python["levels"]
    other = patchwalk.sample("ring.txt", **{**OPTIONS, "seed": 6}).as_json()
    assert other["levels"] != by_python["levels"]


def test_every_setting_is_an_option() -> None:
    shown = run("--help").stdout
    assert all(f"--{name.replace('_', '-')}" in shown for name in SamplingSettings.model_fields)


def test_words_for_people() -> None:
    done = run("ring.txt", *options(rounds=100, copies=1))
    assert done.returncode == 0, done.stderr
    assert "temperature 2\n" in done.stdout
    assert "heat capacity" in done.stdout
    assert "effective n" in done.stdout
    assert "overlap" not in done.stdout, "one copy overlaps with nobody"
    assert "all 100 rounds were measured" in done.stdout
    assert "compil" in done.stderr


@pytest.mark.parametrize(
    ("changed", "words"),
    [
        ({"subsolver": "descent"}, "promises no detailed balance"),
        ({"subsolver": "walk,shots=2"}, "promises no detailed balance"),
        ({"rule": "frustrated"}, "the rule frustrated looks at the spins"),
        ({"temperatures": "0"}, "temperatures"),
        ({"temperatures": "1.0,warm"}, "temperatures"),
        ({"rounds": 1}, "rounds"),
        ({"subsolver": "walk,shot=2"}, "shots"),
        ({"hot": 1}, "hot"),
    ],
)
def test_what_cannot_be_sampled_is_refused(changed: dict[str, Any], words: str, tmp_path: Path) -> None:
    done = run("ring.txt", *options(**changed))
    assert done.returncode == 2, done.stderr
    assert words in done.stderr
    assert done.stdout == ""
    assert "Traceback" not in done.stderr
    assert not list(tmp_path.glob("*.sqlite")), "nothing was begun"


def test_conditions_that_look_are_refused(tmp_path: Path) -> None:
    plain = {key: value for key, value in OPTIONS.items() if key != "subsolver"}
    words = [f"--{name.replace('_', '-')}={value}" for name, value in plain.items()]
    cases = "[{when = 'strain > 0.1', subsolver = 'walk'}, {subsolver = 'uniform'}]"
    done = run("ring.txt", *words, "--callers", cases)
    assert done.returncode == 2
    assert "looks at the cluster's own spins (strain)" in done.stderr
    admitted = run("ring.txt", *words, "--callers", cases.replace("strain", "pull"), "--rounds", 20)
    assert admitted.returncode == 0, admitted.stderr


@pytest.mark.parametrize("during", ["burn-in", "measuring"])
def test_an_interrupt_gives_what_was_measured(during: str, tmp_path: Path) -> None:
    lengths = {"burn_in": 10**7, "rounds": 10} if during == "burn-in" else {"burn_in": 1, "rounds": 10**7}
    words = options(**lengths, record="share", subsolver="uniform")
    process = subprocess.Popen(
        [PROGRAM, "sample", "ring.txt", *words, "--json"], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )
    try:
        assert process.stderr is not None
        for line in process.stderr:  # until it says that it is at work
            if " round " in line:
                break
        time.sleep(0.3)
        process.send_signal(signal.SIGINT)
        output, errors = process.communicate(timeout=PATIENCE)
    finally:
        process.kill()
    assert process.returncode == 130, errors
    result = json.loads(output)
    assert result["status"] == "interrupted"
    assert f"{result['rounds']:,} of {lengths['rounds']:,} rounds were measured" in result["message"]
    assert (result["rounds"] == 0) == (during == "burn-in")
    assert len(result["levels"]) == (0 if during == "burn-in" else 2)
    with contextlib.closing(sqlite3.connect(result["run_path"])) as database:
        assert database.execute("PRAGMA integrity_check").fetchone()[0] == "ok"
        assert database.execute("SELECT status FROM runs").fetchall() == [("interrupted",)]
    if during == "measuring":
        for level in result["levels"]:
            assert abs(level["energy"]["value"] - listed(level["temperature"])["energy"]) < 5 * level["energy"]["error"]
