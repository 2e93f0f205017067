"""A cheap repair: variable after variable takes the value that breaks rules least and, among those, costs least.

It mends answers that nearly keep the rules, and finds, often enough, some answer that keeps them, whose cost then
bounds the best one from above (see :mod:`patchwalk.problem.choice_penalties`).
"""

from __future__ import annotations

import numpy as np
from scipy import sparse

from patchwalk.problem.choices import F64, I64, Choices, Variable
from patchwalk.problem.penalties import count_bits

MOST_ROUNDS = 50
MOST_VISITS = 20_000
"""Variables looked at in all; for a problem of more, no repair is tried, as it would not be cheap."""
ALL_NUMBERS = 64
"""A whole number of more values tries its bounds and its neighbours only."""


def repaired(choices: Choices, active: F64) -> F64 | None:
    """All features, f64 (f,), after up to 50 rounds over all variables, each made right and as good as it can be.

    None, and nothing is tried, for more than 20,000 variables.
    """
    if len(choices.variables) > MOST_VISITS:
        return None
    features = active.copy()
    linear, quadratic = choices.linear, _products(choices)
    rules, constants, least, most = _rules(choices)
    totals = constants + rules @ features
    by_feature = rules.tocsc()
    for _ in range(min(MOST_ROUNDS, MOST_VISITS // len(choices.variables))):
        before = features.copy()
        for one in choices.variables:
            own = slice(one.first_feature, one.first_feature + one.feature_count)
            options = _options(one, features[own])
            touched, effects = _effects(by_feature, own)
            rest = totals[touched] - effects @ features[own]
            sums = rest + options @ effects.T
            excess = np.maximum(np.maximum(least[touched] - sums, sums - most[touched]), 0.0).sum(axis=1)
            pull = linear[own] + quadratic[own] @ features - quadratic[own, own] @ features[own]
            inner = 0.5 * np.einsum("of,of->o", options, options @ quadratic[own, own].toarray())
            best = options[np.lexsort((options @ pull + inner, excess))[0]]  # the first among equals: as it is
            totals[touched] = rest + effects @ best
            features[own] = best
        if np.array_equal(before, features):
            break
    return features


def cheapest(choices: Choices) -> F64:
    """All features, f64 (f,), with every variable as it costs least on its own."""
    features = np.zeros(len(choices.linear))
    for form, first, end in choices.blocks:
        if form == "free":
            features[first] = float(choices.linear[first] < 0)
        else:
            features[first + int(np.argmin(choices.linear[first:end]))] = 1.0
    return features


def _products(choices: Choices) -> sparse.csr_array:
    size = len(choices.linear)
    half = sparse.coo_array((choices.weights, (choices.heads, choices.tails)), shape=(size, size))
    return sparse.csr_array(half + half.T)


def _rules(choices: Choices) -> tuple[sparse.csr_array, F64, F64, F64]:
    """Coefficients (rules, features), constants and bounds."""
    rows = [np.full(len(rule.features), place) for place, rule in enumerate(choices.rules)]
    columns = [rule.features for rule in choices.rules]
    numbers = [rule.coefficients.astype(np.float64) for rule in choices.rules]
    shape = (len(choices.rules), len(choices.linear))
    table = sparse.csr_array(shape)
    if rows:
        table = sparse.coo_array(
            (np.concatenate(numbers), (np.concatenate(rows), np.concatenate(columns))), shape
        ).tocsr()
    bounds = np.array([(rule.constant, rule.least, rule.most) for rule in choices.rules], np.float64).reshape(-1, 3)
    return table, bounds[:, 0], bounds[:, 1], bounds[:, 2]


def _effects(by_feature: sparse.csc_array, own: slice) -> tuple[I64, F64]:
    """The rules that a variable has a part in, and its coefficients there (rules, features)."""
    starts = by_feature.indptr
    touched = np.unique(by_feature.indices[starts[own.start] : starts[own.stop]]).astype(np.int64)
    effects = np.zeros((len(touched), own.stop - own.start))
    for column in range(own.start, own.stop):
        entries = slice(starts[column], starts[column + 1])
        effects[np.searchsorted(touched, by_feature.indices[entries]), column - own.start] = by_feature.data[entries]
    return touched, effects


def _options(one: Variable, now: F64) -> F64:
    """What the features of a variable may be (options, features), its present value first if it is one."""
    if one.form != "free":
        options = np.eye(one.feature_count)
        return np.concatenate([now[None], options]) if now.sum() == 1 else options
    if one.values is not None:
        return np.array([now, 1 - now])
    span = one.most - one.least
    value = int(now @ one.steps)
    near = {value, 0, span, max(value - 1, 0), min(value + 1, span)}
    tried = [value, *(range(span + 1) if span < ALL_NUMBERS else sorted(near - {value}))]
    return np.array([count_bits(number, span) for number in tried], np.float64)
