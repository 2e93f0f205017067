"""What a backend claims about its probabilities, held against exact laws and against counts of its own draws.

Counts are judged by exact binomial tests. Each promise calls an honest backend broken with a probability of at most
``FALSE_ALARM``, shared out evenly where it rests on several counts.
"""

from __future__ import annotations

import dataclasses

import numpy as np
import numpy.typing as npt

from patchwalk.subsolvers.conformance_trial import (
    FALSE_ALARM,
    BrokenError,
    NotCheckedError,
    NotPromisedError,
    Trial,
    chance_of,
    configurations,
    glass,
    numbers,
    picked,
    repeated,
)
from patchwalk.subsolvers.contract import F64, ClusterBatch, Proposals
from patchwalk.subsolvers.draws import generator_for
from patchwalk.subsolvers.spectrum import cluster_energies, tie_tolerance

EXACT = 1e-9
LARGEST_ENUMERATED = 12
MOST_HIT_CALLS, FEWEST_HIT_CALLS = 512, 32


def symmetry(trial: Trial) -> str:
    """A proposal is as likely as its reverse."""
    if trial.subsolver.balance != "symmetric":
        raise NotPromisedError(f"balance is {trial.subsolver.balance}")
    _require_one_shot(trial, "symmetric")
    draws, exactly = trial.draws, ""
    if _noise_free(draws.answer) and (law := _law(trial, draws.cluster)) is not None:
        first = np.unique(draws.starts, return_index=True)[1]
        matrix = law[first]
        worst = float(np.abs(matrix - matrix.T).max())
        if worst > EXACT:
            raise BrokenError(f"its law goes between two configurations with probabilities that differ by {worst:.3g}")
        exactly = f"the {len(matrix)} x {len(matrix)} matrix of its law is symmetric within {worst:.1g}; "
    return exactly + _balanced_flows(draws.starts, draws.ends, np.ones(len(draws.ends), np.bool_))


def ratio(trial: Trial) -> str:
    """The log ratio is that of the proposal's probability and its reverse's."""
    if trial.subsolver.balance != "ratio":
        raise NotPromisedError(f"balance is {trial.subsolver.balance}")
    _require_one_shot(trial, "ratio")
    draws = trial.draws
    log_ratio = draws.answer.log_ratio
    if log_ratio is None or np.any(np.isnan(log_ratio)):
        raise BrokenError("balance is ratio, but a call reports no log_ratio")
    exactly = _ratios_of_its_laws(trial, draws.cluster.rows(0, 24), draws.answer)
    units = generator_for(17, len(log_ratio)).random(len(log_ratio))
    accepted = units < np.exp(np.minimum(log_ratio, 0.0))
    if accepted.sum() < len(accepted) / 50:
        raise BrokenError(
            f"by its log_ratio only {accepted.sum()} of {len(accepted)} proposals count, too few to be true"
        )
    return exactly + _balanced_flows(draws.starts, draws.ends, accepted)


def hit_probability(trial: Trial) -> str:
    """One shot lands in a minimum, found by enumeration, as often as reported."""
    batch, reported = next((b, a) for b, a in reversed(trial.good_samples) if b.size <= LARGEST_ENUMERATED)
    if reported.hit_probability is None:
        raise NotPromisedError("reports none")
    trial.require(FEWEST_HIT_CALLS + 1)
    half = max(FEWEST_HIT_CALLS, trial.left // 2)  # the other half is for balance and law
    cluster = repeated(glass(1, batch.size), min(MOST_HIT_CALLS, half))
    answer = trial.ask(cluster)
    lowest = _minima(cluster)
    if answer.hit_probability is None or np.any(np.isnan(answer.hit_probability)):
        raise BrokenError("reports a hit probability for some calls only")
    exactly = ""
    if answer.noiseless_hit is not None and (law := _law(trial, cluster.rows(0, 1))) is not None:
        truth, said = float(law[0, lowest].sum()), float(answer.noiseless_hit[0])
        if abs(truth - said) > EXACT:
            raise BrokenError(f"reports the noiseless hit probability {said:.9g}, its own law has {truth:.9g}")
        exactly = f"equals the share of its law in the minima, {truth:.4g}; "
    trials = answer.outcomes[:, :, 0].size
    hits = int(np.isin(numbers(answer.outcomes.reshape(trials, -1)), lowest).sum())
    said = float(answer.hit_probability.mean())
    if chance_of(hits, trials, said) < FALSE_ALARM:
        raise BrokenError(f"reports the hit probability {said:.4g}, {hits} of {trials} shots hit ({hits / trials:.4g})")
    return exactly + f"{hits} of {trials} shots hit, {said:.4g} reported (false alarm {FALSE_ALARM:g})"


def drawn_by_its_law(trial: Trial) -> str:
    """Draws follow the law that ``distribution`` states."""
    if not callable(getattr(trial.subsolver, "distribution", None)):
        raise NotPromisedError("states none")
    draws = trial.draws
    if not _noise_free(draws.answer):
        raise NotCheckedError("its draws are noisy, and the law it states is the noiseless one")
    law = _law(trial, draws.cluster)
    assert law is not None
    if np.any(law < -EXACT) or np.any(np.abs(law.sum(axis=1) - 1) > EXACT):
        raise BrokenError("its distribution is negative somewhere or does not sum to 1")
    states = law.shape[1]
    starts = np.array([np.arange(states) == x for x in draws.starts])
    for x in range(states):
        everywhere = [("", np.ones(len(draws.ends), np.bool_))]
        for place, rows in everywhere + [(f" from {y}", starts[:, y]) for y in range(states)]:
            count, drawn, expected = int(rows.sum()), int((draws.ends[rows] == x).sum()), float(law[rows, x].mean())
            if chance_of(drawn, count, expected) < FALSE_ALARM / (states * (states + 1)):
                raise BrokenError(
                    f"drew configuration {x}{place} {drawn} times in {count}, its law has it with {expected:.4g}"
                )
    return f"{len(draws.ends)} draws over {states} configurations (false alarm {FALSE_ALARM:g})"


def _require_one_shot(trial: Trial, balance: str) -> None:
    shots = trial.draws.answer.outcomes.shape[1]
    if shots > 1:
        raise BrokenError(f"claims balance {balance} with {shots} shots a call; the best of several keeps no balance")


def _balanced_flows(starts: npt.NDArray[np.int64], ends: npt.NDArray[np.int64], accepted: npt.NDArray[np.bool_]) -> str:
    """Between any two configurations as many accepted moves go one way as the other.

    With equal numbers of calls from every start, that is detailed balance with the uniform law, which a symmetric
    proposal keeps as it is, and one with a log ratio when min(1, exp(log ratio)) of its moves are made.
    """
    states = int(starts.max()) + 1
    flow = np.zeros((states, states), np.int64)
    np.add.at(flow, (starts[accepted], ends[accepted]), 1)
    pairs = states * (states - 1) // 2
    for x in range(states):
        for y in range(x):
            forth, back = int(flow[x, y]), int(flow[y, x])
            if chance_of(forth, forth + back, 0.5) < FALSE_ALARM / max(1, pairs):
                raise BrokenError(f"{forth} moves from one configuration to another, {back} the other way")
    return f"{int(accepted.sum())} moves between {states} configurations balance (false alarm {FALSE_ALARM:g})"


def _ratios_of_its_laws(trial: Trial, batch: ClusterBatch, answer: Proposals) -> str:
    """The log ratios of the first calls against the laws at the times drawn, where the backend states them."""
    laws = getattr(trial.subsolver, "laws", None)
    if not callable(laws) or answer.times is None or answer.log_ratio is None or not _noise_free(answer):
        return ""
    worst = 0.0
    for row in range(len(batch)):
        one, moment = batch.rows(row, row + 1), answer.times[row, :1]
        end = answer.outcomes[row, :1]
        back = dataclasses.replace(one, spins=end)
        forth_law, back_law = laws(one, moment)[0, 0], laws(back, moment)[0, 0]
        forth, return_ = forth_law[numbers(end)[0]], back_law[numbers(one.spins)[0]]
        if min(forth, return_) > 1e-6:
            worst = max(worst, abs(float(np.log(return_ / forth)) - float(answer.log_ratio[row])))
    if worst > 1e-6:
        raise BrokenError(f"a log_ratio differs by {worst:.3g} from that of its own laws at the time drawn")
    return f"equals that of its laws within {worst:.1g}; "


def _noise_free(answer: Proposals) -> bool:
    """Whether shots follow the noiseless law, as far as the answer tells."""
    hit, noiseless = answer.hit_probability, answer.noiseless_hit
    if noiseless is None:
        return True
    return hit is not None and bool(np.allclose(hit, noiseless, rtol=0, atol=EXACT))


def _law(trial: Trial, batch: ClusterBatch) -> F64 | None:
    """The law of one shot of every call, where the backend states it; rows that are the same are computed once."""
    distribution = getattr(trial.subsolver, "distribution", None)
    if not callable(distribution):
        return None
    _, first, place = np.unique(numbers(batch.spins), return_index=True, return_inverse=True)
    law: F64 = np.asarray(distribution(picked(batch, first)))
    if law.shape != (len(first), 1 << batch.size):
        raise BrokenError(f"its distribution has shape {law.shape}, expected ({len(first)}, {1 << batch.size})")
    return law[place]


def _minima(batch: ClusterBatch) -> npt.NDArray[np.int64]:
    """The numbers of the configurations of lowest energy of a batch's first cluster."""
    assert batch.couplings is not None
    energies = np.empty(len(configurations(batch.size)))
    cluster_energies(batch.fields[0], batch.couplings[0], energies)
    tolerance = tie_tolerance(batch.fields[0], batch.couplings[0])
    return np.flatnonzero(energies <= energies.min() + tolerance)
