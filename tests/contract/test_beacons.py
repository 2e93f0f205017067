"""The beacons: the energy is the planner's objective, no optimum parts mates, and the map survives a file."""

from __future__ import annotations

import itertools
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from patchwalk.problem.beacons import CAUTION, BeaconMap, beacon_map, describe, greedy_allocation
from patchwalk.problem.families import make
from patchwalk.problem.files import read_problem, write_problem
from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.quillmere import FIRST_WORDS, SECOND_WORDS

CONFIGS = Path(__file__).parents[2] / "configs"
COSTS = st.integers(0, 500).map(lambda hundredths: hundredths / 100)


@st.composite
def small_maps(draw):
    """Maps of 2 to 8 beacons, with chains of repeaters, mates that interfere, and costs of zero."""
    size = draw(st.integers(2, 8))
    pairs = list(itertools.combinations(range(size), 2))
    interferes = [(*pair, draw(COSTS)) for pair in pairs if draw(st.booleans())]
    repeaters = draw(st.lists(st.sampled_from(pairs), max_size=4, unique=True))
    prefers = [(one, draw(st.sampled_from("AB")), draw(COSTS)) for one in range(size) if draw(st.booleans())]
    names = [f"Place {letter}" for letter in "pqrstuvw"[:size]]
    positions = [(float(one), one / 4) for one in range(size)]
    return BeaconMap(*map(tuple, (names, positions, interferes, repeaters, prefers)))


def allocations(size):
    return itertools.product([1, -1], repeat=size)


def objective(sites, spins):
    """The planner's objective, straight from the relations."""
    total = sum(weight for one, two, weight in sites.interferes if spins[one] == spins[two])
    return total + sum(cost for one, channel, cost in sites.prefers if "AB"[int(spins[one] < 0)] != channel)


def keeps_mates(sites, spins):
    return all(spins[one] == spins[two] for one, two in sites.repeaters)


@given(small_maps())
def test_energy_is_the_objective_wherever_mates_agree(sites):
    problem = sites.problem()
    for spins in allocations(len(sites.names)):
        told = describe(problem, spins)
        assert told["interference"] == pytest.approx(objective(sites, spins), abs=1e-9)
        assert told["feasible"] == keeps_mates(sites, spins)
        if told["feasible"]:
            assert problem.energy(spins) == pytest.approx(told["interference"], abs=1e-9)
        else:
            assert problem.energy(spins) > told["interference"]


@given(small_maps())
def test_no_optimum_parts_mates(sites):
    problem = sites.problem()
    levels = {spins: problem.energy(spins) for spins in allocations(len(sites.names))}
    best = min(levels.values())
    assert all(keeps_mates(sites, spins) for spins, level in levels.items() if level <= best + 1e-9)
    assert best == pytest.approx(min(objective(sites, s) for s in levels if keeps_mates(sites, s)), abs=1e-9)


@given(small_maps())
def test_a_map_is_written_and_read_back_whole(tmp_path_factory, sites):
    problem = sites.problem()
    path = tmp_path_factory.mktemp("round") / "map.csv"
    write_problem(problem, path)
    if not problem.coupling_count and not problem.fields.any():
        with pytest.raises(ProblemError, match="nothing to decide"):
            read_problem(path)
        return
    again = read_problem(path)
    assert beacon_map(again) == sites
    assert again.fingerprint == problem.fingerprint
    assert again.names == sites.names


@given(small_maps())
def test_greedy_keeps_mates_together_and_is_no_better_than_the_optimum(sites):
    problem = sites.problem()
    spins = greedy_allocation(problem)
    assert set(spins) <= {1, -1}
    assert keeps_mates(sites, spins)
    best = min(objective(sites, s) for s in allocations(len(sites.names)) if keeps_mates(sites, s))
    assert objective(sites, spins) >= best - 1e-9
    assert np.array_equal(spins, greedy_allocation(problem))


def test_greedy_places_the_busiest_first_by_hand():
    """Weights 5 (p q), 4 (q r), 3 (p r): q takes A, p takes B, and r keeps away from q, its worse neighbour."""
    sites = BeaconMap(("p", "q", "r"), ((0, 0),) * 3, ((0, 1, 5.0), (1, 2, 4.0), (0, 2, 3.0)), (), ())
    spins = greedy_allocation(sites.problem())
    assert spins.tolist() == [-1, 1, -1]
    assert describe(sites.problem(), spins) == {
        "channels": {"p": "B", "q": "A", "r": "B"},
        "interference": 3.0,
        "broken_repeaters": [],
        "feasible": True,
        "counts": {"A": 1, "B": 2},
        "preferences_kept": 0,
        "preferences": 0,
    }


def test_broken_repeaters_and_refused_preferences_are_told():
    sites = BeaconMap(("p", "q"), ((0, 0),) * 2, (), ((0, 1),), ((0, "A", 2.0), (1, "A", 1.0)))
    told = describe(sites.problem(), [1, -1])
    assert told["broken_repeaters"] == [("p", "q")]
    assert not told["feasible"]
    assert (told["interference"], told["preferences_kept"], told["preferences"]) == (1.0, 1, 2)


@pytest.fixture(scope="module")
def quillmere():
    return read_problem(CONFIGS / "quillmere.csv")


def test_the_quillmere_file_is_what_make_writes(tmp_path):
    write_problem(make("beacons", 600, seed=1), tmp_path / "again.csv")
    assert (tmp_path / "again.csv").read_bytes() == (CONFIGS / "quillmere.csv").read_bytes()
    assert CAUTION in (CONFIGS / "quillmere.csv").read_text(encoding="utf-8")


def test_quillmere_is_as_described(quillmere):
    sites = beacon_map(quillmere)
    partners = np.bincount([end for one, two, _ in sites.interferes for end in (one, two)], minlength=600)
    assert len(set(sites.names)) == len(quillmere) == 600
    assert all(name.split()[0] in FIRST_WORDS and name.split()[1] in SECOND_WORDS for name in sites.names)
    assert 4 <= partners.mean() <= 10
    assert np.mean((partners >= 4) & (partners <= 10)) > 0.75
    assert partners.min() >= 1
    assert len({end for mates in sites.repeaters for end in mates}) == 30
    assert len(sites.prefers) == 120
    spots = np.array(sites.positions)
    for one, two, weight in sites.interferes:
        distance = np.linalg.norm(spots[one] - spots[two])
        assert 0 < weight == pytest.approx(10 * (1 - distance / 5), abs=0.0051)


def test_greedy_is_a_fair_start_on_quillmere_but_not_the_end(quillmere):
    """It saves more than a fifth of a random allocation's interference, and descent by groups 1 % more from there."""
    sites = beacon_map(quillmere)
    greedy = greedy_allocation(quillmere)
    draws = np.random.default_rng(1)
    by_chance = np.ones(600, np.int8)
    for group in sites.groups:
        by_chance[list(group)] = draws.choice([1, -1])
    improved = greedy.copy()
    for group in sites.groups * 5:
        turned = improved.copy()
        turned[list(group)] *= -1
        if quillmere.energy(turned) < quillmere.energy(improved):
            improved = turned
    best, start, chance = (describe(quillmere, s)["interference"] for s in (improved, greedy, by_chance))
    assert start < 0.8 * chance
    assert best < 0.99 * start
    assert quillmere.energy(greedy) == pytest.approx(start, rel=1e-12)


HEAD = "# kind = beacons\nrelation,beacon,other,value\n"
SITES = HEAD + "site,p,0,1\nsite,q,1.5,2\n"


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (SITES + "blocks,p,q,1\n", "line 5: relation 'blocks' is not known; it is one of: site, interferes, repeater"),
        (SITES + "interferes,p,z,1\n", "line 5: beacon 'z' has no site row"),
        (SITES + "repeater,z,q,\n", "line 5: beacon 'z' has no site row"),
        (SITES + "prefers,z,A,1\n", "line 5: beacon 'z' has no site row"),
        (SITES + "interferes,p,q,-1\n", "line 5: value '-1' is negative"),
        (SITES + "interferes,p,q,nan\n", "line 5: value 'nan' is not a finite number"),
        (SITES + "prefers,p,A,-0.5\n", "line 5: value '-0.5' is negative"),
        (SITES + "prefers,p,A,\n", "line 5: value '' is not a finite number"),
        (SITES + "interferes,p,p,1\n", "line 5: beacon 'p' is paired with itself"),
        (SITES + "repeater,q,q,\n", "line 5: beacon 'q' is paired with itself"),
        (SITES + "repeater,p,q,1\n", "line 5: a repeater has no value, but it reads '1'"),
        (SITES + "prefers,p,C,1\n", "line 5: channel 'C' does not exist; it is A or B"),
        (SITES + "site,p,3,3\n", "line 5: beacon 'p' has a site already"),
        (SITES + "site,,3,3\n", "line 5: the site has no name"),
        (SITES + "site,r,3,north\n", "line 5: position 'north' is not a finite number"),
        (SITES + "interferes,p,q,1\ninterferes,q,p,2\n", "line 6: the same interferes row stands on line 5"),
        (SITES + "prefers,p,A,1\nprefers,p,B,2\n", "line 6: the same prefers row stands on line 5"),
        (SITES + "interferes,p,q\n", "line 5: expected the 4 columns of the header, but it has 3"),
        ("# kind = beacons\nsite,p,0,1\n", "line 2: expected the header relation,beacon,other,value"),
        (HEAD, "no site rows"),
        (SITES, "there is nothing to decide"),
    ],
)
def test_a_faulty_map_is_refused_with_its_line(tmp_path, text, message):
    path = tmp_path / "map.csv"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(ProblemError) as caught:
        read_problem(path)
    said = str(caught.value).removeprefix(str(path))
    assert said.startswith((f", {message}", f": {message}"))


def test_a_problem_without_its_map_is_refused():
    with pytest.raises(ProblemError, match="without its map of beacons"):
        describe(Problem.from_arrays([0], [1], [1], kind="beacons"), [1, 1])
