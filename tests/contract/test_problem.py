"""Energy, local fields and flip change agree with a sum over all pairs; what is not a problem is refused."""

from __future__ import annotations

import itertools

import networkx as nx
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from patchwalk.problem.ising import Problem, ProblemError

NUMBERS = st.floats(-100, 100, allow_nan=False)


@st.composite
def dense_problems(draw):
    """A coupling matrix (upper triangle), fields, an offset and spins of 2 to 7 spins, integers or not."""
    size = draw(st.integers(2, 7))
    pairs = list(itertools.combinations(range(size), 2))
    couplings = {pair: draw(NUMBERS | st.integers(-3, 3).map(float)) for pair in pairs if draw(st.booleans())}
    fields = draw(st.lists(NUMBERS, min_size=size, max_size=size))
    spins = draw(st.lists(st.sampled_from([1, -1]), min_size=size, max_size=size))
    return couplings, fields, draw(NUMBERS), spins


def built(couplings, fields, offset):
    heads, tails = zip(*couplings, strict=True) if couplings else ((), ())
    return Problem.from_arrays(heads, tails, list(couplings.values()), fields=fields, offset=offset)


def summed(couplings, fields, offset, spins):
    pairs = sum(weight * spins[i] * spins[j] for (i, j), weight in couplings.items())
    return offset + pairs + sum(field * spin for field, spin in zip(fields, spins, strict=True))


@given(dense_problems())
def test_energy_is_the_sum_over_pairs_fields_and_offset(case):
    couplings, fields, offset, spins = case
    assert built(couplings, fields, offset).energy(spins) == pytest.approx(summed(*case), abs=1e-9)


@given(dense_problems())
def test_flip_change_and_local_field_are_differences_of_energies(case):
    couplings, fields, offset, spins = case
    problem = built(couplings, fields, offset)
    local = problem.local_fields(spins)
    for spin in range(len(spins)):
        flipped = [-value if place == spin else value for place, value in enumerate(spins)]
        change = summed(couplings, fields, offset, flipped) - summed(*case)
        assert problem.flip_change(spins, spin) == pytest.approx(change, abs=1e-9)
        assert -2 * spins[spin] * local[spin] == pytest.approx(change, abs=1e-9)


@given(dense_problems(), st.integers(0, 2**32 - 1))
def test_repeated_pairs_are_summed_the_same_in_both_directions(case, seed):
    couplings, fields, offset, spins = case
    draws = np.random.default_rng(seed)
    parts = [(pair, weight * share) for pair, weight in couplings.items() for share in (0.1, 0.2, 0.7)]
    parts = [parts[place] for place in draws.permutation(len(parts))]
    pairs = [pair if draws.integers(2) else pair[::-1] for pair, _ in parts]
    heads, tails = zip(*pairs, strict=True) if pairs else ((), ())
    problem = Problem.from_arrays(heads, tails, [weight for _, weight in parts], fields=fields, offset=offset)
    assert problem.energy(spins) == pytest.approx(summed(*case), abs=1e-9)


def test_many_repeats_of_a_pair_keep_the_matrix_symmetric():
    draws = np.random.default_rng(5)
    heads = draws.integers(0, 4, 400)
    tails = (heads + draws.integers(1, 4, 400)) % 4
    matrix = Problem.from_arrays(heads, tails, draws.normal(size=400)).matrix.toarray()
    assert np.array_equal(matrix, matrix.T)
    assert np.count_nonzero(matrix) == 12


@pytest.mark.parametrize("number", [np.nan, np.inf, -np.inf])
def test_numbers_that_are_not_finite_are_refused(number):
    with pytest.raises(ProblemError, match="couplings: entry 0 is"):
        Problem.from_arrays([0], [1], [number])
    with pytest.raises(ProblemError, match="fields: entry 1 is"):
        Problem.from_arrays([0], [1], [1.0], fields=[0, number])
    with pytest.raises(ProblemError, match="offset is"):
        Problem.from_arrays([0], [1], [1.0], offset=number)


def test_a_coupling_of_a_spin_with_itself_is_refused():
    with pytest.raises(ProblemError, match="spin 1 is coupled to itself"):
        Problem.from_arrays([0, 1], [1, 1], [1, 1])


def test_couplings_that_are_not_symmetric_are_refused():
    halves = {"row_starts": [0, 1, 2], "neighbours": [1, 0], "fields": [0, 0]}
    assert Problem(couplings=[1.0, 1.0], **halves).coupling_count == 1
    with pytest.raises(ProblemError, match="not symmetric"):
        Problem(couplings=[1.0, 2.0], **halves)


@pytest.mark.parametrize(
    ("pairs", "options", "message"),
    [
        (([0], [2], [1]), {"size": 2}, "spin 2 does not exist: 2 spins are numbered 0 to 1"),
        (([0], [-1], [1]), {"size": 2}, "spin -1 does not exist"),
        (([0, 1], [1], [1]), {}, "2 heads, 1 tails and 1 weights"),
        (([], [], []), {}, "no spins"),
        (([0], [1], [1]), {"kind": "colours"}, "kind 'colours' is not known; it is one of: ising, maxcut"),
        (([0], [1], [1]), {"names": ["a"]}, "1 names for 2 spins"),
    ],
)
def test_what_makes_no_problem_is_refused_with_the_reason(pairs, options, message):
    with pytest.raises(ProblemError, match=message):
        Problem.from_arrays(*pairs, **options)


@pytest.mark.parametrize("spins", [[1], [1, 0], [1, 2], [[1, -1]]])
def test_configurations_of_the_wrong_shape_or_value_are_refused(spins):
    with pytest.raises(ProblemError, match="configuration"):
        Problem.from_arrays([0], [1], [1]).spins_from(spins)


@given(st.integers(0, 2**32 - 1))
def test_maxcut_energy_is_minus_the_weight_cut(seed):
    draws = np.random.default_rng(seed)
    graph = nx.gnp_random_graph(9, 0.5, seed=seed)
    for _, _, data in graph.edges(data=True):
        data["weight"] = float(draws.integers(-5, 6))
    problem = Problem.from_networkx(graph)
    spins = draws.choice([1, -1], 9)
    cut = sum(data["weight"] for u, v, data in graph.edges(data=True) if spins[u] != spins[v])
    assert problem.energy(spins) == -cut
    assert problem.objective(problem.energy(spins)) == cut
    assert problem.energy_of(cut) == -cut


def test_from_networkx_takes_names_fields_and_parallel_edges():
    graph = nx.MultiGraph()
    graph.add_node("north", field=0.5)
    graph.add_edges_from([("north", "south", {"weight": 2}), ("south", "north", {"weight": 3}), ("south", "east", {})])
    problem = Problem.from_networkx(graph, kind="ising")
    assert problem.names == ("north", "south", "east")
    assert problem.matrix.toarray().tolist() == [[0, 5, 0], [5, 0, 1], [0, 1, 0]]
    assert problem.fields.tolist() == [0.5, 0, 0]
    with pytest.raises(ProblemError, match="node 'north' has a field"):
        Problem.from_networkx(graph)


@given(dense_problems(), st.integers(-30, 30))
def test_scales_and_energies_follow_a_power_of_two_to_the_last_bit(case, exponent):
    couplings, fields, offset, spins = case
    factor = 2.0**exponent
    problem = built(couplings, fields, offset)
    scaled = built({pair: factor * w for pair, w in couplings.items()}, [factor * h for h in fields], factor * offset)
    tiny = [abs(number) for number in [*couplings.values(), *fields, offset] if number]
    if min(tiny, default=1) < 1e-100:  # their squares leave the range of normal numbers
        return
    assert scaled.energy(spins) == factor * problem.energy(spins)
    assert scaled.field_scale == factor * problem.field_scale


def test_field_scale_is_the_median_of_typical_local_fields():
    problem = Problem.from_arrays([0, 1], [1, 2], [3, 4], size=5, fields=[0, 0, 2, 0, 0])
    assert problem.field_scale == pytest.approx(np.sqrt(20))  # of 9, 20 and 25; the two free spins do not count
    assert Problem.from_arrays([], [], [], size=2).field_scale == 0.0


def test_arrays_are_locked_and_fingerprints_tell_problems_apart():
    problem = Problem.from_arrays([0], [1], [1])
    for array in (problem.row_starts, problem.neighbours, problem.couplings, problem.fields):
        assert not array.flags.writeable
    others = [
        Problem.from_arrays([0], [1], [2]),
        Problem.from_arrays([0], [1], [1], fields=[1, 0]),
        Problem.from_arrays([0], [1], [1], offset=1),
        Problem.from_arrays([0], [1], [2], kind="maxcut", offset=1),
    ]
    assert problem.fingerprint == Problem.from_arrays([1], [0], [1]).fingerprint
    assert len({other.fingerprint for other in [problem, *others]}) == 5


def test_a_negative_zero_is_a_zero():
    zero = Problem.from_arrays([0], [1], [1], fields=[1, 0.0], offset=0.0)
    negative = Problem.from_arrays([0], [1], [1], fields=[1, -0.0], offset=-0.0)
    assert negative.fingerprint == zero.fingerprint
    assert negative.fields.tobytes() == zero.fields.tobytes()


def test_groups_are_kept_rising_and_locked_and_count_in_the_fingerprint():
    problem = Problem.from_arrays([0, 1], [1, 2], [1, 1], groups=[[2, 0], [1, 2]])
    assert [group.tolist() for group in problem.groups] == [[0, 2], [1, 2]]
    assert all(group.dtype == np.int32 and not group.flags.writeable for group in problem.groups)
    others = [
        Problem.from_arrays([0, 1], [1, 2], [1, 1]),
        Problem.from_arrays([0, 1], [1, 2], [1, 1], groups=[[0, 2]]),
        Problem.from_arrays([0, 1], [1, 2], [1, 1], groups=[[0, 1, 2]]),
    ]
    assert len({other.fingerprint for other in [problem, *others]}) == 4
    assert others[0].groups == ()
    assert others[0].encoding is None


@pytest.mark.parametrize("group", [[], [1], [0, 0], [1, 2, 1], [0, 3], [-1, 0]])
def test_what_makes_no_group_is_refused(group):
    with pytest.raises(ProblemError, match="give two or more different spins of 0 to 2"):
        Problem.from_arrays([0, 1], [1, 2], [1, 1], groups=[group])
