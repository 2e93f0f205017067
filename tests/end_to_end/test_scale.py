"""``scale``: success against size, for whole instances and for clusters, resumed and written out."""

from __future__ import annotations

import csv
import json
import shlex
import sqlite3
import subprocess
import sys
from contextlib import closing
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from click.testing import CliRunner

from patchwalk import make, scale, write_problem
from patchwalk.commands.scaling_instances import Instances
from patchwalk.commands.scaling_measurements import energies_of
from patchwalk.evidence.layout import RunFileError
from patchwalk.interface.cli import program
from patchwalk.settings_checks import SettingsError
from patchwalk.subsolvers import make_subsolver

PROGRAM = Path(sys.executable).with_name("patchwalk")


def test_success_is_what_the_law_of_the_walk_says() -> None:
    """The weight of the minima in the walk's own law, instance by instance."""
    found = scale("sk", [3, 4, 5], subsolvers=["walk"], instances=4, fields=True, tune=False, run="a.sqlite")
    batch, _ = Instances("sk", 4, 1, options={"fields": True}).of_size(5)
    every = np.array([[1 - 2 * ((x >> i) & 1) for i in range(5)] for x in range(32)], np.int8)
    energies = energies_of(batch, np.repeat(every[None], 4, axis=0))
    lowest = energies == energies.min(axis=1, keepdims=True)
    laws = make_subsolver("walk").distribution(batch)  # type: ignore[attr-defined]
    assert found.curve("walk").exact
    assert found.curve("walk").success[5] == pytest.approx((laws * lowest).sum(axis=1), abs=1e-5)  # walk's tolerance


def test_guessing_falls_with_exponent_one() -> None:
    found = scale("sk", [3, 4, 5, 6], instances=3, fields=True, subsolvers=["enumeration"], run="a.sqlite")
    assert [fit.exponent for fit in found.curve("guessing").fits] == pytest.approx([1.0] * 3, abs=1e-9)
    assert all(np.all(values == 1.0) for values in found.curve("enumeration").success.values())


def test_times_are_tuned_on_one_half_and_measured_on_the_other() -> None:
    found = scale("sk", [3, 4, 5], instances=6, fields=True, run="a.sqlite")
    tuned = found.curve("walk, times tuned")
    assert {len(values) for values in tuned.success.values()} == {3}
    with closing(sqlite3.connect("a.sqlite")) as database:
        for size, spelling in tuned.chosen.items():
            means = dict(
                database.execute(
                    "SELECT subsolver, avg(success) FROM scaling_rows WHERE size = ? AND instance % 2 = 0 AND "
                    "subsolver LIKE 'walk%' GROUP BY subsolver",
                    (size,),
                )
            )
            assert len(means) >= 7
            assert means[spelling] == max(means.values())


def test_what_is_measured_is_not_measured_again(monkeypatch: pytest.MonkeyPatch) -> None:
    options: dict[str, Any] = {"fields": True, "tune": False, "run": "a.sqlite"}
    first = scale("sk", [3, 4, 5], instances=3, **options)
    whole = scale("sk", [3, 4, 5, 6], instances=5, **(options | {"run": "b.sqlite"}))
    asked: list[int] = []
    plain = type(make_subsolver("walk")).propose
    monkeypatch.setattr(
        type(make_subsolver("walk")), "propose", lambda self, batch: asked.append(len(batch)) or plain(self, batch)
    )
    again = scale("sk", [3, 4, 5], instances=3, **options)
    assert asked == []
    assert again.as_json() == first.as_json()
    more = scale("sk", [3, 4, 5, 6], instances=5, **options)
    assert more.as_json() | {"run_path": ""} == whole.as_json() | {"run_path": ""}


def test_another_setup_is_refused_by_the_same_file() -> None:
    scale("sk", [3, 4, 5], instances=2, tune=False, run="a.sqlite")
    with pytest.raises(RunFileError, match="seed 1, not 2"):
        scale("sk", [3, 4, 5], instances=2, tune=False, seed=2, run="a.sqlite")


def test_clusters_of_a_file_with_and_without_their_boundary() -> None:
    glass = make("lattice2d", 6, couplings="gaussian", seed=3)
    write_problem(glass, Path("glass.txt"))
    frozen = Instances((Path("glass.txt"),), 5, 1)
    alone = Instances((Path("glass.txt"),), 5, 1, boundary="none")
    with_boundary, origins = frozen.of_size(5)
    without, _ = alone.of_size(5)
    assert origins == ["glass.txt"] * 5
    assert np.array_equal(with_boundary.couplings, without.couplings)
    assert np.any(with_boundary.fields != 0.0)
    assert not np.any(without.fields)
    # cut in a local minimum: no single flip of a member lowers the energy
    local = with_boundary.fields + np.einsum("bij,bj->bi", with_boundary.couplings, with_boundary.spins)
    assert np.all(with_boundary.spins * local <= 1e-9)


def test_a_rival_without_an_exact_probability_is_sampled() -> None:
    found = scale("sk", [3, 4, 5], instances=3, subsolvers=["uniform"], shots=4000, fields=True, run="a.sqlite")
    curve = found.curve("uniform")
    assert not curve.exact
    for size, values in curve.success.items():
        chance = 2.0**-size
        assert np.all(np.abs(values - chance) < 5.0 * (chance * (1.0 - chance) / 4000) ** 0.5)


def test_no_two_instances_are_alike_whatever_size_or_seed() -> None:
    origins = [
        origin for seed in (1, 2) for size in (4, 5) for origin in Instances("sk", 20, seed).of_size(size)[1]
    ]  # fmt: skip
    assert len({origin.split()[-1] for origin in origins}) == 80
    batch, names = Instances("sk", 3, 1).of_size(4)
    again = make("sk", 4, seed=int(names[2].split()[-1]))
    assert batch.couplings is not None
    assert np.array_equal(batch.couplings[2], again.matrix.toarray())


@pytest.mark.parametrize(
    ("changed", "sentence"),
    [
        ({"source": "glas"}, "neither a family nor a file"),
        ({"instances": 1}, "at least 2"),
        ({"sizes": [4, 4]}, "different whole numbers"),
        ({"rule": "bal"}, "one of: ball"),
    ],
)
def test_mistakes_are_named(changed: dict[str, Any], sentence: str) -> None:
    with pytest.raises(SettingsError, match=sentence):
        scale(**({"source": "sk", "sizes": [3, 4], "run": "a.sqlite"} | changed))


@pytest.mark.parametrize(
    ("sizes", "sentence"),
    [("5..3", "--sizes: 5..3 runs downwards; write 3..5"), ("4,x", "is not a list of sizes; write 6..14 or 6,8,10")],
)
def test_sizes_that_cannot_be_read_are_named(sizes: str, sentence: str) -> None:
    told = CliRunner().invoke(program, ["scale", "sk", "--sizes", sizes])
    assert told.exit_code == 2
    assert sentence in told.stderr


def test_the_command_prints_and_writes() -> None:
    line = "scale lattice2d --within 6 --sizes 3..5 --instances 3 --no-tune --csv raw.csv --json"
    run = subprocess.run([PROGRAM, *shlex.split(line)], capture_output=True, text=True, check=False)
    assert run.returncode == 0, run.stderr
    assert [curve["name"] for curve in json.loads(run.stdout)["curves"]] == [
        "walk",
        "walk,time_in_hops=[1.0, 20.0],times=40",
        "guessing",
    ]
    with Path("raw.csv").open() as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == 18
    assert {row["exact"] for row in rows} == {"True"}


@pytest.mark.slow
def test_the_walk_on_glasses_with_fields_falls_as_it_is_known_to() -> None:
    """Averaged over times, 2^(-0.41 n) for h and J of one variance; guessing 2^-n: common practice, and computed for
    n = 4..9 (0.414 and 0.412 in two ensembles).
    """
    found = scale("sk", range(5, 13), fields=True, tune=False, run="a.sqlite")
    fit = found.curve("walk,time_in_hops=[1.0, 20.0],times=40").fits[0]
    assert fit.average == "mean"
    assert fit.low <= 0.41 <= fit.high
    assert fit.high - fit.low <= 0.04
    assert found.curve("guessing").fits[0].exponent == pytest.approx(1.0, abs=1e-9)


def test_a_success_that_rises_with_size_is_written_with_one_sign() -> None:
    from patchwalk.interface.scale_options import in_words

    found = scale("sk", [3, 4, 5], subsolvers=["walk"], instances=4, fields=True, tune=False, run="a.sqlite")
    fit = found.curve("walk").fits[0]
    assert f"2^({-fit.exponent:.4f} k), 95 % interval [{-fit.high:.4f}, {-fit.low:.4f}]" in in_words(found)
    assert "--" not in in_words(found)
