"""Profiles of calls made up for the purpose: what was planted is found, by closed forms."""

from __future__ import annotations

import html
import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from patchwalk.evidence.break_even import break_even
from patchwalk.evidence.help_tables import edges_of, explained, help_map, help_table, paired_help
from patchwalk.evidence.layout import RunFileError
from patchwalk.evidence.profile_words import NO_CLOCK, shown_names
from patchwalk.evidence.profiling import profile_of
from patchwalk.evidence.promises import Promise, judged, promise_from, promise_lines, promise_of
from patchwalk.evidence.replayed import Answers, Replayed, swept
from patchwalk.evidence.rival_families import best_settings, family, noise_limits, parts_of
from patchwalk.settings_checks import SettingsError
from patchwalk.statistics import Interval
from patchwalk.subsolvers.contract import F64

RUNS, CALLS = 6, 150
COST = 1e-3


def answers(drops: F64, cost: float = COST, evolving: float | None = None) -> Answers:
    count = len(drops)
    return Answers(
        drops=drops, errors=np.zeros(count), hits=np.full(count, np.nan), costs=np.full(count, cost),
        evolving=np.full(count, cost if evolving is None else evolving), weights=np.ones(count),
        exact=np.ones(count, np.bool_),
    )  # fmt: skip


def made_up(seed: int = 1, runs: int = RUNS, threshold: float = 0.4, **rivals: Answers) -> Replayed:
    """The walk drops by 2 from a frustration of ``threshold`` on and by 0.5 below; sweeps gain 1 in its time, and
    half as much in half of it."""
    generator = np.random.default_rng(seed)
    count = runs * CALLS
    quantities = {
        "stage": generator.uniform(0.0, 1.0, count), "temperature": generator.uniform(0.1, 1.0, count),
        "k": generator.integers(8, 13, count).astype(float), "frustration": generator.uniform(0.0, 0.8, count),
        "strain": generator.uniform(0.0, 0.8, count), "pull": generator.uniform(0.0, 3.0, count),
        "degree": np.full(count, 2.0), "distance": generator.integers(0, 4, count).astype(float),
        "stable": np.full(count, np.nan), "degeneracy": np.ones(count),
    }  # fmt: skip
    drops = np.where(quantities["frustration"] >= threshold, 2.0, 0.5) + generator.normal(0.0, 0.3, count)
    budgets, curves = np.tile([COST / 4, COST], (count, 1)), np.tile([0.25, 1.0], (count, 1))
    return Replayed(
        own="walk", run_names=tuple(f"run {run}" for run in range(runs)), runs=np.repeat(np.arange(runs), CALLS),
        quantities=quantities, moved=generator.uniform(size=count) < 0.3, asked=np.ones(count, np.bool_),
        answers={"walk": answers(drops), "none": answers(np.ones(count)), **rivals}, budgets=budgets, curves=curves,
        room=np.full(count, 5.0),
    )  # fmt: skip


def test_the_planted_feature_and_threshold_are_found() -> None:
    found = profile_of(made_up())
    assert found.verdict == "call when"
    cut = next(one for one in found.judgement.rule.conditions if one.quantity == "frustration")
    assert cut.above
    assert cut.value == pytest.approx(0.4, abs=0.8 / 24)
    assert max(found.explained, key=lambda name: found.explained[name]) == "frustration"
    assert found.map is not None
    assert found.map.first == "frustration"
    low, high = found.tables["frustration"][0], found.tables["frustration"][-1]
    assert low.help.high < 0.0 < high.help.low
    assert low.help.value == pytest.approx(-0.5, abs=0.1)
    assert high.help.value == pytest.approx(1.0, abs=0.1)


def test_text_and_json_tell_everything() -> None:
    found = profile_of(made_up())
    lines = str(found).splitlines()
    assert lines[-1].startswith("Call when: walk when frustration >= 0.")
    assert NO_CLOCK in lines[-2]
    value = json.loads(json.dumps(found.as_json(), allow_nan=False))
    assert value["callers"][1] == {"subsolver": "nothing"}
    assert value["helps"]["none"]["calls"] == RUNS * CALLS
    assert value["sentence"] == lines[-1]


def test_a_notebook_shows_what_is_printed() -> None:
    found = profile_of(made_up())
    shown = found._repr_html_()
    assert shown == f"<pre>{html.escape(str(found))}</pre>"
    assert "frustration &lt; 0." in shown or "frustration &gt;= 0." in shown
    assert repr(found) == f"<profile of {RUNS * CALLS} calls in {RUNS} runs: {found.sentence}>"


def test_a_program_of_the_users_is_called_by_its_own_name() -> None:
    """Two that give themselves the same name are told apart by their full spellings."""
    one, other = (f'external,command="python3 {name}.py",shots=4,device=lab,call_s=0.1' for name in ("one", "other"))
    assert shown_names([one, "walk,shots=4"]) == {one: "external,device=lab,shots=4", "walk,shots=4": "walk,shots=4"}
    assert shown_names([one, other]) == {one: one, other: other}
    lines = str(profile_of(made_up(**{one: answers(np.ones(RUNS * CALLS))}))).splitlines()
    assert f"external,device=lab,shots=4 stands for {one}" in lines
    assert "against external,device=lab,shots=4" in lines
    assert sum("one.py" in line for line in lines) == 1


def test_sweeps_that_lose_energy_are_said_to_do_so() -> None:
    """Below equilibrium any call looks good against sweeps, whatever whole runs do in the end."""
    count = RUNS * CALLS
    losing = replace(made_up(none=answers(-np.ones(count))), curves=np.tile([-0.25, -1.0], (count, 1)))
    text, usual = str(profile_of(losing)), str(profile_of(made_up()))
    assert "sweeps from where walk was called gain nothing on average" in text
    assert "what calls gain there, later sweeps may take back" in text
    assert "may take back" not in usual
    assert "whether whole runs end lower with it, patchwalk compare tells" in usual


def test_what_is_the_same_for_all_calls_takes_one_line() -> None:
    lines = str(profile_of(made_up())).splitlines()
    assert "the same for all calls: degree 2, degeneracy 1" in lines
    assert not any(line.startswith(("degree (", "stable (")) for line in lines)


def test_one_run_asks_for_more_seeds() -> None:
    found = profile_of(made_up(runs=1))
    assert found.verdict == "cannot tell"
    assert "run more seeds" in found.sentence
    assert "one run has no interval over runs: run more seeds" in str(found)
    assert not found.helps["none"].per_call.known


def test_a_walk_that_differs_in_nothing_has_no_help_at_all() -> None:
    replayed = made_up()
    twin = made_up(**{"walk,shots=1": replayed.answers["walk"]})
    found = paired_help(twin, "walk,shots=1")
    assert (found.per_call.value, found.per_call.low, found.per_call.high) == (0.0, 0.0, 0.0)
    assert found.per_second.value == 0.0


@pytest.mark.parametrize("mode", ["rival", "none"])
def test_break_even_is_the_ratio_of_drops_per_second(mode: str) -> None:
    """Against a straight curve through the origin both definitions are the same ratio, 1 / (mean drop of the walk)."""
    replayed = made_up(rival=answers(np.full(RUNS * CALLS, 3.0), cost=COST / 6.0))
    drop = float(replayed.answers["walk"].drops.mean())
    found = break_even(replayed, mode)
    assert found.factor.value == pytest.approx({"rival": 18.0, "none": 1.0}[mode] / drop, rel=0.02)
    assert found.factor.low < found.factor.value < found.factor.high


def test_with_load_and_reading_held_fixed_no_speed_may_suffice() -> None:
    """A rival as good at half of the cost: with 0.2 c of evolution the held 0.8 c are too much; with 0.8 c of it the
    0.3 c that are left ask for a factor of 8 / 3."""
    replayed = made_up()
    drops = replayed.answers["walk"].drops
    for evolving, factor in ((0.2, np.inf), (0.8, 8.0 / 3.0)):
        replayed = made_up(rival=answers(drops, cost=COST / 2.0))
        own = answers(drops, evolving=evolving * COST)
        replayed = replace(replayed, answers={**replayed.answers, "walk": own})
        found = break_even(replayed, "rival")
        assert found.factor.value == pytest.approx(2.0)
        assert found.held.value == pytest.approx(factor)
        assert ("no speed-up suffices" in str(found)) == np.isinf(factor)


def test_undefined_break_even_says_why() -> None:
    found = break_even(made_up(rival=answers(np.full(RUNS * CALLS, -1.0))), "rival")
    assert np.isnan(found.factor.value)
    assert "rival is not positive" in str(found)


def test_curves_are_read_between_below_and_above_their_budgets() -> None:
    budgets = np.array([[1.0, 4.0]] * 5 + [[np.nan, np.nan], [2.0, np.nan]])
    curves = np.array([[2.0, 3.0]] * 5 + [[np.nan, np.nan], [-1.0, np.nan]])
    room = np.full(7, 5.0)
    found = swept(budgets, curves, np.array([0.5, 1.0, 2.5, 6.0, 40.0, 1.0, 4.0]), room)
    assert found == pytest.approx([1.0, 2.0, 2.5, 4.5, 5.0, np.nan, -1.0], nan_ok=True)


def test_noise_at_which_help_vanishes() -> None:
    """Worth against sweeps 1, 0.5 and -0.5 at dephasing 0, 0.1 and 0.2: zero at 0.15, whatever the precision does."""
    ones = np.ones(RUNS * CALLS)
    noise = np.random.default_rng(2).normal(0.0, 0.1, len(ones))
    rivals = {
        "walk,dephasing=0.2": answers(0.5 * ones + noise), "walk,dephasing=0.1": answers(1.5 * ones + noise),
        "walk,precision_bits=4": answers(1.5 * ones), "walk,shots=2,dephasing=0.9": answers(0.0 * ones),
    }  # fmt: skip
    replayed = made_up(**rivals)
    replayed = replace(replayed, answers={**replayed.answers, "walk": answers(2.0 * ones + noise)})
    dephasing, precision = noise_limits(replayed, "none")
    assert dephasing.parameter == "dephasing"
    assert [one.value for one in dephasing.members] == [0.0, 0.1, 0.2]
    assert dephasing.vanishes.value == pytest.approx(0.15, abs=0.01)
    assert dephasing.vanishes.low <= dephasing.vanishes.value <= dephasing.vanishes.high
    assert "calls still help against none at" in precision.sentence


def test_noise_is_judged_at_the_cost_of_a_call_without_it() -> None:
    """Dephasing takes many trajectories to simulate and no device any longer: sweeps get no more time for it."""
    ones = np.ones(RUNS * CALLS)
    rivals = {"walk,dephasing=0.1": answers(2.0 * ones, cost=50.0 * COST)}
    (dephasing,) = noise_limits(made_up(**rivals), "none")
    assert dephasing.members[1].worth.value == pytest.approx(2.0 - 1.0)
    assert dephasing.members[1].per_second.value == pytest.approx(2.0 / COST)
    assert "at 0.1, the most that was replayed, worth 1 each" in dephasing.sentence


def test_members_of_a_family_are_held_against_each_other_on_the_same_calls() -> None:
    """Replayed on the second half of the calls alone, where drops are 1 lower, the twin is not the worse for it."""
    half = np.arange(RUNS * CALLS) % 2 == 1
    drops = np.where(half, 2.0, 3.0)
    twin = answers(np.where(half, drops, np.nan))
    replayed = made_up(**{"walk,shots=2": replace(twin, weights=half.astype(float))})
    replayed = replace(replayed, answers={**replayed.answers, "walk": answers(drops)})
    own, other = best_settings(replayed, "none")[0].members
    assert own.drop.value == other.drop.value == 2.0
    assert own.worth.value == other.worth.value


def test_the_best_number_of_shots() -> None:
    """Four shots for twice the cost: more drop per call, less per second."""
    ones = np.ones(RUNS * CALLS)
    rivals = {"walk,shots=4": answers(3.0 * ones, cost=2.0 * COST), "walk,shots=2": answers(2.5 * ones)}
    found = best_settings(made_up(**rivals), "none")[0]
    assert found.parameter == "shots"
    assert [one.value for one in found.members] == [1.0, 2.0, 4.0]
    assert (found.fastest, found.worthiest) == ("walk,shots=2", "walk,shots=2")
    own = float(made_up().answers["walk"].drops.mean())
    assert found.over_own.value == pytest.approx(2.5 - own)
    assert found.over_own.low < 2.5 - own < found.over_own.high
    assert found.members[2].worth.value == pytest.approx(3.0 - 2.0)  # sweeps gain twice as much in twice the time


def test_families_share_all_but_one_parameter() -> None:
    assert parts_of("walk,time=[0.5, 2],shots=3") == ("walk", {"time": "[0.5, 2]", "shots": "3"})
    ones = np.ones(RUNS * CALLS)
    replayed = made_up(**{name: answers(ones) for name in ("walk,shots=2", "walk,shots=2,times=4", "uniform")})
    assert family(replayed, "shots") == {"walk": "", "walk,shots=2": "2"}
    assert family(replayed, "times") == {}


def test_bins_of_a_quantity_with_few_values() -> None:
    assert edges_of("distance", np.array([0.0] * 90 + [2.0, 3.0])).tolist() == [2.0, 3.0]
    assert len(edges_of("k", np.full(5, 8.0))) == 0
    assert len(edges_of("stable", np.full(5, np.nan))) == 0
    replayed = made_up()
    assert [one.low for one in help_table(replayed, "none", "distance")] == [0.0, 1.0, 2.0, 3.0]
    assert help_table(replayed, "none", "stable") == ()
    assert abs(explained(replayed, "none", "pull")) < 0.02
    grid = help_map(replayed, "none")
    assert grid is not None
    assert grid.calls.sum() == RUNS * CALLS


def test_without_sweeps_the_strongest_rival_is_the_baseline() -> None:
    ones = np.ones(RUNS * CALLS)
    replayed = made_up(uniform=answers(0.1 * ones), enumeration=answers(3.0 * ones), tabu=answers(2.0 * ones))
    kept = {name: own for name, own in replayed.answers.items() if name != "none"}
    found = profile_of(replace(replayed, answers=kept))
    assert found.baseline == "enumeration"
    assert "enumeration win" in str(found)
    assert found.verdict == "do not call"


def test_a_baseline_that_was_not_replayed_is_named() -> None:
    with pytest.raises(RunFileError, match="tabu was not replayed against walk; there are: none"):
        profile_of(made_up(), "tabu")


def test_a_promise_is_read_back_as_it_was_written(tmp_path: Path) -> None:
    promise = promise_of(profile_of(made_up()))
    assert promise.called == ["walk"]
    assert promise.low < promise.worth < promise.high
    path = tmp_path / "next.toml"
    path.write_text("\n".join(["# words", *promise_lines(promise), "seeds = [7, 8]"]))
    assert promise_from(path) == promise
    path.write_text("seeds = [7, 8]")
    with pytest.raises(SettingsError, match="holds no promise"):
        promise_from(path)


@pytest.mark.parametrize(
    ("found", "verdict"),
    [
        (Interval(1.1, 0.7, 1.5, 5), "kept"),
        (Interval(3.0, 2.5, 3.5, 5), "kept"),
        (Interval(0.3, 0.1, 0.5, 5), "broken"),
        (Interval(-0.3, -0.5, -0.1, 5), "broken"),
        (Interval(0.6, -0.5, 1.7, 5), "cannot tell"),
        (Interval(1.0, np.nan, np.nan, 1), "cannot tell"),
    ],
)
def test_whether_a_promise_was_kept(found: Interval, verdict: str) -> None:
    kept = judged(Promise(["walk"], "none", 1.0, 0.8, 1.2, "the fixed prices"), found)
    assert kept.verdict == verdict
    assert ("run more seeds" in kept.sentence) == (found.runs == 1)
