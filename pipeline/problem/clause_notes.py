"""What is odd about clauses, though it may be meant so."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import numpy.typing as npt

I64 = npt.NDArray[np.int64]
F64 = npt.NDArray[np.float64]


def notes_on(literals: I64, weights: F64) -> list[str]:
    """Sentences about clauses, literals i64 (m, width), 0 where there is none, and weights f64 (m,)."""
    ordered = np.sort(literals, axis=1)
    span = 2 * int(np.abs(literals).max(initial=0)) + 1
    if span ** literals.shape[1] < 2**62:  # one number for each clause sorts much faster
        keys = np.sort(ordered @ span ** np.arange(literals.shape[1]))[:, None]
    else:
        keys = ordered[np.lexsort(ordered.T)]
    repeated = int(np.count_nonzero(np.all(keys[1:] == keys[:-1], axis=1)))
    always = np.zeros(len(literals), bool)
    for one, other in combinations(literals.T, 2):
        always |= (one == -other) & (one != 0)
    counts = {
        "like an earlier one; each counts": repeated,
        "empty and never satisfied": int(np.count_nonzero(~np.any(literals, axis=1))),
        "satisfied always, by a variable and its negation": int(np.count_nonzero(always)),
        "of weight 0 and left out": int(np.count_nonzero(weights == 0)),
    }
    return [f"{count} clause{'s are' if count > 1 else ' is'} {what}" for what, count in counts.items() if count]
