"""Made instances: the same seed gives the same bits, with the promised degrees, counts and variances."""

from __future__ import annotations

import numpy as np
import pytest

from patchwalk.problem.families import FAMILIES, make
from patchwalk.problem.files import read_problem, write_problem
from patchwalk.problem.ising import ProblemError

SIZES = {"sk": 20, "lattice2d": 6, "lattice3d": 4, "beacons": 60}


def test_every_family_is_tried_here():
    assert set(SIZES) <= set(FAMILIES)


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
    path = tmp_path / ("made.csv" if family == "beacons" else "made.txt.gz")
    write_problem(problem, path)
    assert read_problem(path).fingerprint == problem.fingerprint


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
        ("ring", 5, {}, ["family 'ring' is not known", "sk, lattice2d, lattice3d, beacons"]),
        ("lattice2d", 1, {}, ["size 1 is out of reach: the side L, from 2 to"]),
        ("lattice3d", 0, {}, ["size 0 is out of reach"]),
        ("sk", -3, {}, ["size -3"]),
        ("sk", 10**9, {}, ["size 1000000000 is out of reach"]),
        ("sk", 2.5, {}, ["size 2.5 is not a whole number"]),
        ("sk", True, {}, ["size True is not a whole number"]),
        ("sk", 5, {"open": True}, ["sk has no option open; it belongs to: lattice2d, lattice3d"]),
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


def test_the_recipe_names_every_option():
    problem = make("lattice3d", 3, seed=9, couplings="gaussian", open=True, fields=True)
    assert problem.details["recipe"] == ("make lattice3d --size 3 --couplings gaussian --open --fields --seed 9",)
    assert make("beacons", 20).details["recipe"] == ("make beacons --size 20 --seed 1",)
