"""Rivals that are the same subsolver but for one parameter: how much noise help survives, how many shots pay.

Families are found by their spellings: NAME,key=value,... with all keys but one alike, the run's own subsolver among
them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from patchwalk.evidence.replayed import NONE, Replayed
from patchwalk.statistics import Interval, bootstrap, by_run, ratio
from patchwalk.subsolvers.contract import F64

NOISE = {"dephasing": 0.0, "control_error": 0.0, "readout_flip": 0.0, "precision_bits": np.inf}
"""Parameters of noise, and their value where there is none."""

EFFORT = {"shots": 1.0, "time": np.nan, "time_in_hops": np.nan, "times": 8.0}
"""Parameters of effort, and their value where they are not given; nan where that is no single number."""


@dataclass(frozen=True)
class Member:
    """One member: the value of the parameter, its drop per call and per second, and its worth against the baseline.

    ``worth`` is the help per call where every member is held against the baseline, for ``none`` at its own cost.
    """

    rival: str
    setting: str
    value: float
    drop: Interval
    per_second: Interval
    worth: Interval


@dataclass(frozen=True)
class NoiseLimit:
    """Where help against the baseline vanishes along one kind of noise; ``value`` nan where it does not in what was
    replayed, and ``sentence`` says which."""

    parameter: str
    members: tuple[Member, ...]
    vanishes: Interval
    sentence: str


@dataclass(frozen=True)
class BestSetting:
    """A family along a parameter of effort, and which member gives most per second and is worth most per call.

    ``over_own`` is how much more a call of the worthiest is worth than one of the run's own, paired; picked for being
    the best of them, it flatters itself a little.
    """

    parameter: str
    members: tuple[Member, ...]
    fastest: str
    worthiest: str
    over_own: Interval


def parts_of(spelling: str) -> tuple[str, dict[str, str]]:
    """The name and the parameters of a spelled subsolver; commas inside brackets do not part.

    >>> parts_of("walk,shots=4,time_in_hops=[0.5, 1.0]")
    ('walk', {'shots': '4', 'time_in_hops': '[0.5, 1.0]'})
    """
    pieces, depth = [""], 0
    for letter in spelling:
        depth += (letter in "[({") - (letter in "])}")
        if letter == "," and depth == 0:
            pieces.append("")
        else:
            pieces[-1] += letter
    pairs = [piece.partition("=") for piece in pieces[1:]]
    return pieces[0].strip(), {key.strip(): value.strip() for key, _, value in pairs}


def family(replayed: Replayed, parameter: str) -> dict[str, str]:
    """All replayed that differ from ``own`` in this parameter alone, with its spelling ('' where not given)."""
    name, given = parts_of(replayed.own)
    rest = {key: value for key, value in given.items() if key != parameter}
    found = {}
    for spelling in replayed.answers:
        other, parameters = parts_of(spelling)
        setting = parameters.pop(parameter, "")
        if other == name and parameters == rest:
            found[spelling] = setting
    return found if len(found) > 1 else {}


def noise_limits(replayed: Replayed, baseline: str) -> tuple[NoiseLimit, ...]:
    """For every kind of noise that rivals were given: where does help against the baseline vanish?"""
    found = []
    for parameter, without in NOISE.items():
        members = _members(replayed, parameter, without, baseline)
        if members:
            found.append(_limit(replayed, parameter, members, baseline))
    return tuple(found)


def best_settings(replayed: Replayed, baseline: str) -> tuple[BestSetting, ...]:
    """For shots and times: who gives most per second, who is worth most per call."""
    found = []
    for parameter, without in EFFORT.items():
        members = _members(replayed, parameter, without, baseline)
        if members:
            fastest = max(members, key=lambda one: one.per_second.value)
            worthiest = max(members, key=lambda one: one.worth.value).rival
            more = worths_of(replayed, worthiest, baseline) - worths_of(replayed, replayed.own, baseline)
            known = ~np.isnan(more)
            weights = replayed.answers[worthiest].weights[known]
            over_own = bootstrap(by_run(replayed.runs[known], weights * more[known], weights), ratio)
            found.append(BestSetting(parameter, members, fastest.rival, worthiest, over_own))
    return tuple(found)


def worths_of(replayed: Replayed, rival: str, baseline: str, costs: F64 | None = None) -> F64:
    """What a rival is worth against the baseline on each call, f64 (N,), nan where unknown.

    Against ``none``: its drop less what sweeps gain in the time it costs, or in ``costs`` f64 (N,).
    """
    answers = replayed.answers[rival]
    if baseline == NONE:
        return answers.drops - replayed.swept(answers.costs if costs is None else costs)
    return answers.drops - replayed.answers[baseline].drops


def _members(replayed: Replayed, parameter: str, without: float, baseline: str) -> tuple[Member, ...]:
    """The members of a family from the least noise, or effort, to the most, on the calls that all were replayed on;
    empty where there is no family or no such call."""
    members = []
    given = _costs(replayed, parameter)
    worths = {rival: worths_of(replayed, rival, baseline, given) for rival in family(replayed, parameter)}
    worths = {rival: own for rival, own in worths.items() if not np.isnan(own).all()}
    known = ~np.isnan(np.stack(list(worths.values()))).any(axis=0) if worths else np.zeros(len(replayed), np.bool_)
    if not known.any():
        return ()
    for rival, setting in family(replayed, parameter).items():
        if rival not in worths:
            continue
        answers, worth = replayed.answers[rival], worths[rival]
        runs, w = replayed.runs[known], answers.weights[known]
        drops, costs = answers.drops[known], (answers.costs if given is None else given)[known]
        members.append(
            Member(
                rival, setting, _number(setting, without), bootstrap(by_run(runs, w * drops, w), ratio),
                bootstrap(by_run(runs, w * drops, w * costs), ratio),
                bootstrap(by_run(runs, w * worth[known], w), ratio),
            )
        )  # fmt: skip
    sign = -1.0 if parameter == "precision_bits" else 1.0
    ordered = sorted(members, key=lambda one: (np.isnan(one.value), sign * one.value))
    return tuple(ordered) if len(ordered) > 1 else ()


def _costs(replayed: Replayed, parameter: str) -> F64 | None:
    """A noisier device takes no longer, however much work it is to simulate: noise is judged at the run's own costs."""
    return replayed.answers[replayed.own].costs if parameter in NOISE else None


def _number(setting: str, without: float) -> float:
    """The setting as a number: the middle of an interval, nan for a word."""
    if not setting:
        return without
    try:
        return float(np.mean([float(part) for part in setting.strip("[]() ").split(",")]))
    except ValueError:
        return float("nan")


def _limit(replayed: Replayed, parameter: str, members: tuple[Member, ...], baseline: str) -> NoiseLimit:
    """Straight lines between the levels of noise; the first level at which the worth comes down to zero."""
    levels = np.array([one.value for one in members])
    worths = np.stack([worths_of(replayed, one.rival, baseline, _costs(replayed, parameter)) for one in members])
    known = ~np.isnan(worths).any(axis=0)
    runs, w = replayed.runs[known], replayed.answers[replayed.own].weights[known]
    sums = by_run(runs, *(w * own[known] for own in worths))
    vanishes = bootstrap(sums, lambda sums: np.array([_crossing(levels, own) for own in sums]))
    least, most = members[0].worth.value, members[-1].worth.value
    if least <= 0.0:
        least_noise = f"at {members[0].setting}" if members[0].setting else "without any"
        sentence = f"calls do not help against {baseline}, not even {least_noise}"
    elif np.isnan(vanishes.value):
        sentence = (
            f"calls still help against {baseline} at {members[-1].setting or 'none'}, the most that was replayed, "
            f"worth {most:.4g} each"
        )
    else:
        sentence = f"help against {baseline} vanishes at {vanishes}"
    return NoiseLimit(parameter, members, vanishes, sentence)


def _crossing(levels: F64, worths: F64) -> float:
    """The level at which worths first come down to zero, nan where they begin there or never do."""
    down = np.flatnonzero(worths <= 0.0)
    if len(down) == 0 or down[0] == 0:
        return np.nan
    place = int(down[0])
    before, after = levels[place - 1], levels[place]
    if not (np.isfinite(before) and np.isfinite(after)):
        return float(after)
    share = worths[place - 1] / (worths[place - 1] - worths[place])
    return float(before + share * (after - before))
