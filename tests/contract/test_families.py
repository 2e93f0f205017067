"""Made instances: the same seed gives the same bits, with the promised degrees, counts and variances."""

from __future__ import annotations

import json

import numpy as np
import pytest
from click.testing import CliRunner

from patchwalk.interface import make_options
from patchwalk.problem.families import FAMILIES, make
from patchwalk.problem.files import read_problem, write_problem
from patchwalk.problem.ising import ProblemError

SIZES = {
    "sk": 20,
    "lattice2d": 6,
    "lattice3d": 4,
    "regular": 20,
    "random": 20,
    "max2sat": 20,
    "partition": 15,
    "loops": 8,
    "tiles": 6,
    "wishart": 20,
    "beacons": 60,
}
ENDINGS = {"beacons": ".csv", "max2sat": ".wcnf.gz"}


def test_every_family_is_tried_here():
    assert set(SIZES) == set(FAMILIES) == set(make_options.FAMILIES)


@pytest.mark.parametrize("family", SIZES)
def test_the_seed_alone_decides(family):
    one, same, other = (make(family, SIZES[family], seed=seed) for seed in (3, 3, 4))
    assert one.fingerprint == same.fingerprint != other.fingerprint
    assert one.details["recipe"] == same.details["recipe"] != other.details["recipe"]


def test_families_of_one_seed_draw_from_different_streams():
    assert len({family.stream for family in FAMILIES.values()}) == len(FAMILIES)


@pytest.mark.parametrize("family", SIZES)
def test_a_made_problem_is_written_and_read_back(family, tmp_path):
    problem = make(family, SIZES[family], seed=3)
    path = tmp_path / f"made{ENDINGS.get(family, '.txt.gz')}"
    write_problem(problem, path)
    again = read_problem(path)
    assert again.fingerprint == problem.fingerprint
    assert again.details.get("planted_energy") == problem.details.get("planted_energy")


@pytest.mark.parametrize("dimension", [2, 3])
@pytest.mark.parametrize("side", [2, 3, 5])
@pytest.mark.parametrize("is_open", [False, True])
def test_lattices_join_each_site_to_its_neighbours(dimension, side, is_open):
    problem = make(f"lattice{dimension}d", side, open=is_open, seed=1)
    assert len(problem) == side**dimension
    ring = side > 2 and not is_open
    assert problem.coupling_count == dimension * side ** (dimension - 1) * (side if ring else side - 1)
    assert ("L = 2" in "".join(problem.notes)) == (side == 2 and not is_open)
    places = np.array(np.unravel_index(np.arange(len(problem)), (side,) * dimension))
    for spin in range(len(problem)):
        row = problem.neighbours[problem.row_starts[spin] : problem.row_starts[spin + 1]]
        steps = np.abs(places[:, row] - places[:, [spin]])
        steps = np.where(steps == side - 1, 1, steps) if ring else steps
        assert (steps.sum(axis=0) == 1).all()
    assert set(problem.couplings) == {-1.0, 1.0}
    assert not problem.fields.any()


def test_sk_joins_every_pair():
    problem = make("sk", 40, seed=2)
    assert problem.coupling_count == 40 * 39 // 2
    signs = make("sk", 40, seed=2, couplings="pm1", fields=True)
    for values in (signs.couplings, signs.fields):
        assert set(values) == {1 / np.sqrt(40), -1 / np.sqrt(40)}


# Each mean of n draws stays within 5 standard errors: a false alarm in 2 million, once and for all as seeds are fixed.
@pytest.mark.parametrize(
    ("family", "size", "couplings", "variance"),
    [
        ("sk", 300, "gaussian", 1 / 300),
        ("sk", 300, "pm1", 1 / 300),
        ("lattice2d", 100, "gaussian", 1),
        ("lattice2d", 100, "pm1", 1),
        ("lattice3d", 25, "gaussian", 1),
        ("lattice3d", 25, "pm1", 1),
    ],
)
def test_couplings_and_fields_have_mean_zero_and_the_promised_variance(family, size, couplings, variance):
    problem = make(family, size, couplings=couplings, fields=True, seed=7)
    pairs = np.triu_indices(len(problem), 1) if family == "sk" else None
    values = problem.matrix.toarray()[pairs] if pairs else problem.couplings[problem.neighbours > _rows(problem)]
    assert len(values) == problem.coupling_count
    for draws in (values, problem.fields):
        assert abs(draws.mean()) < 5 * np.sqrt(variance / len(draws))
        excess = 2 if couplings == "gaussian" else 0  # the variance of a squared draw, in units of the variance squared
        assert abs(np.square(draws).mean() / variance - 1) <= 5 * np.sqrt(excess / len(draws)) + 1e-12


def _rows(problem):
    return np.repeat(np.arange(len(problem)), np.diff(problem.row_starts))


@pytest.mark.parametrize(
    ("family", "size", "options", "parts"),
    [
        ("ring", 5, {}, ["family 'ring' is not known", "sk, lattice2d, lattice3d, regular, random"]),
        ("regular", 5, {"degree": 3}, ["degree 3: no graph of 5 spins has it"]),
        ("regular", 5, {"degree": 5}, ["degree 5", "take 1 to 4"]),
        ("regular", 5, {"degree": 2.5}, ["degree 2.5 is not a whole number"]),
        ("regular", 10**6, {"degree": 100}, ["about 50000000 couplings are out of reach"]),
        ("random", 10**6, {"density": 0.5}, ["couplings are out of reach"]),
        ("random", 10, {"density": 1.5}, ["density 1.5 is not a number above 0 and up to 1"]),
        ("max2sat", 10, {"density": float("nan")}, ["density nan"]),
        ("partition", 1000, {}, ["numbers of 1000 bits are out of reach"]),
        ("tiles", 5, {}, ["size 5 is odd"]),
        ("loops", 3, {"degree": 3}, ["size 3 is out of reach", "loops has no option degree; it belongs to: regular"]),
        ("lattice2d", 1, {}, ["size 1 is out of reach: the side L, from 2 to"]),
        ("lattice3d", 0, {}, ["size 0 is out of reach"]),
        ("sk", -3, {}, ["size -3"]),
        ("sk", 10**9, {}, ["size 1000000000 is out of reach"]),
        ("sk", 2.5, {}, ["size 2.5 is not a whole number"]),
        ("sk", True, {}, ["size True is not a whole number"]),
        ("sk", 5, {"open": True}, ["sk has no option open; it belongs to: lattice2d, lattice3d, loops, tiles"]),
        ("lattice2d", 5, {"couplings": "bimodal"}, ["couplings 'bimodal' are not known", "pm1, gaussian"]),
        (
            "beacons",
            5,
            {"couplings": "odd", "open": True, "fields": True},
            ["size 5", "no option couplings", "no option open", "no option fields", "'odd' are not known"],
        ),
    ],
)
def test_a_faulty_request_is_refused_with_all_its_faults(family, size, options, parts):
    with pytest.raises(ProblemError) as caught:
        make(family, size, **options)
    for part in parts:
        assert part in str(caught.value)


def degrees(problem):
    return np.diff(problem.row_starts)


@pytest.mark.parametrize(("size", "degree"), [(2, 1), (10, 3), (7, 4), (12, 11), (30, 17), (2000, 3), (500, 20)])
def test_a_regular_graph_has_one_degree(size, degree):
    for seed in range(3):
        problem = make("regular", size, degree=degree, seed=seed)
        assert set(degrees(problem)) == {degree}


def test_regular_graphs_of_four_vertices_come_equally_often():
    # there are three perfect matchings; 600 draws stay within 5 standard errors of a third each
    partners = np.array([make("regular", 4, degree=1, seed=seed).neighbours[0] for seed in range(600)])
    counts = np.bincount(partners, minlength=4)[1:]
    assert counts.sum() == 600
    assert np.all(np.abs(counts / 600 - 1 / 3) < 5 * np.sqrt(2 / 9 / 600))


@pytest.mark.parametrize(("size", "density"), [(100, 0.05), (60, 0.5), (60, 0.9), (3000, 0.001)])
def test_a_random_graph_has_each_pair_with_the_same_probability(size, density):
    pairs, graphs = size * (size - 1) / 2, 40
    problems = [make("random", size, density=density, seed=seed) for seed in range(graphs)]
    counts = np.array([problem.coupling_count for problem in problems])
    spread = np.sqrt(pairs * density * (1 - density))
    assert abs(counts.mean() - pairs * density) < 5 * spread / np.sqrt(graphs)
    # the mean of (count - mean)^2 has relative standard error sqrt(2 / graphs)
    assert abs(np.square(counts - pairs * density).mean() / spread**2 - 1) < 5 * np.sqrt(2 / graphs)
    of_vertex = sum(degrees(problem) for problem in problems) / graphs
    assert np.all(
        np.abs(of_vertex - density * (size - 1)) < 6 * np.sqrt(density * (1 - density) * (size - 1) / graphs) + 1
    )


def test_a_random_graph_has_four_neighbours_by_default():
    problem = make("random", 20_000)
    assert abs(degrees(problem).mean() - 4) < 5 * np.sqrt(8 / 20_000)  # 2 sqrt(m) edges over n, m = 2 n
    assert make("random", 3).coupling_count == 3  # where four are not to be had, all


def test_clauses_have_two_variables_and_signs_of_either_kind():
    clauses = make("max2sat", 1000, density=3.0, seed=2).encoding.literals
    assert clauses.shape == (3000, 2)
    assert np.all(np.abs(clauses[:, 0]) != np.abs(clauses[:, 1]))
    assert np.abs(clauses).max() <= 1000
    assert abs((clauses > 0).mean() - 0.5) < 5 * 0.5 / np.sqrt(6000)
    of_variable = np.bincount(np.abs(clauses).ravel(), minlength=1001)[1:]
    assert abs(of_variable.var() / 6 - 1) < 5 * np.sqrt(2 / 1000)  # as a Poisson law of mean 6 has


@pytest.mark.parametrize(("density", "bits"), [(1.0, 12), (0.5, 6), (5.0, 60)])
def test_numbers_have_the_bits_asked_for(density, bits):
    numbers = [n for seed in range(40) for n in make("partition", 12, density=density, seed=seed).encoding.numbers]
    assert min(numbers) >= 1
    assert 2 ** (bits - 1) < max(numbers) <= 2**bits
    assert abs(np.mean([number / 2**bits for number in numbers]) - 0.5) < 5 * np.sqrt(1 / 12 / 480) + 2.0**-bits


PLANTED = [("loops", 4, {"density": 0.3}), ("loops", 4, {"density": 0.6, "open": True}), ("tiles", 4, {}),
           ("tiles", 4, {"open": True}), ("wishart", 13, {}), ("wishart", 12, {"density": 0.2})]  # fmt: skip


@pytest.mark.parametrize(("family", "size", "options"), PLANTED)
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_no_configuration_lies_below_the_planted_energy(family, size, options, seed):
    problem = make(family, size, seed=seed, **options)
    numbers = np.arange(2 ** (len(problem) - 1))  # the last spin up: all others are mirror images
    spins = 1 - 2 * ((numbers[:, None] >> np.arange(len(problem))) & 1).astype(np.float64)
    lowest = problem.offset + 0.5 * np.einsum("ci,ci->c", spins @ problem.matrix.toarray(), spins).min()
    assert lowest == pytest.approx(problem.details["planted_energy"], abs=problem.tie_tolerance)


@pytest.mark.parametrize(("family", "size"), [("loops", 32), ("tiles", 32), ("wishart", 200)])
def test_the_planted_configuration_has_the_planted_energy(family, size):
    problem = make(family, size, seed=5)
    energy = problem.energy(problem.details["planted_spins"])
    assert energy == pytest.approx(problem.details["planted_energy"], abs=problem.tie_tolerance)
    assert all(problem.flip_change(problem.details["planted_spins"], spin) >= -1e-9 for spin in range(200))


def test_tiles_have_the_sizes_of_bonds_that_they_are_made_of():
    problem = make("tiles", 20, seed=1)
    assert problem.coupling_count == 2 * 20**2
    assert set(np.abs(problem.couplings)) == {1.0, 2.0}
    # a square has 2.5 weak bonds on average, with variance 1.25
    weak = (np.abs(problem.couplings) == 1.0).sum() / 2 / 200
    assert abs(weak - 2.5) < 5 * np.sqrt(1.25 / 200)


def test_wishart_couplings_annul_the_planted_configuration():
    # W't = 0, so that the local field of every spin is that of its own square: (J s)_i = -s_i sum_m W_im^2 / n
    problem = make("wishart", 50, seed=1)
    spins = problem.details["planted_spins"]
    pulls = -spins * problem.local_fields(spins)
    assert pulls.sum() / 2 == pytest.approx(-problem.details["planted_energy"])
    assert np.all(pulls > 0)


def test_make_says_the_planted_energy(tmp_path):
    run = CliRunner().invoke(
        make_options.make_command, ["tiles", "--size", "6", "-o", str(tmp_path / "t.txt"), "--json"]
    )
    said = json.loads(run.stdout)
    assert said["planted_energy"] == make("tiles", 6).details["planted_energy"]
    assert f"# planted_energy = {said['planted_energy']}" in (tmp_path / "t.txt").read_text()
    assert "# recipe: make tiles --size 6 --seed 1" in (tmp_path / "t.txt").read_text()


def test_the_recipe_names_every_option():
    problem = make("lattice3d", 3, seed=9, couplings="gaussian", open=True, fields=True)
    assert problem.details["recipe"] == ("make lattice3d --size 3 --couplings gaussian --open --fields --seed 9",)
    assert make("beacons", 20).details["recipe"] == ("make beacons --size 20 --seed 1",)
    random = make("random", 10, density=0.3, fields=True).details["recipe"]
    assert random == ("make random --size 10 --couplings pm1 --density 0.3 --fields --seed 1",)
    assert make("regular", 8, degree=3).details["recipe"] == make("regular", 8).details["recipe"]
