"""Averages with their errors: of correlated series, of functions of averages.

An average without an error bar is no result. Of a correlated series only n / tau values count, tau being the integrated
autocorrelation time, 1 + 2 sum of the autocorrelations: (1 + a) / (1 - a) for an AR(1) series with coefficient a.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from patchwalk.subsolvers.contract import F64

WINDOW = 6.0
"""The sum of autocorrelations is cut at this many autocorrelation times (Madras & Sokal)."""

FEWEST = 20.0
"""With fewer effective values than this an error bar is not to be relied upon."""


@dataclass(frozen=True)
class Estimate:
    """A value with its standard error, autocorrelation time ``tau`` (in values), and how many values count.

    ``n`` values were averaged, worth ``effective`` independent ones; ``reliable`` is False where those are too few.
    """

    value: float
    error: float
    tau: float
    n: int

    @property
    def effective(self) -> float:
        """Independent values the series is worth."""
        return self.n / self.tau

    @property
    def reliable(self) -> bool:
        """Whether there are enough independent values for the error bar to mean something."""
        return self.effective >= FEWEST

    def __str__(self) -> str:
        note = "" if self.reliable else "; too few samples for an error bar"
        return f"{self.value:.6g} +- {self.error:.2g} (tau {self.tau:.3g}, effective n {self.effective:,.0f}{note})"


def autocorrelation_time(series: F64) -> float:
    """The integrated autocorrelation time, in steps, at least 1, of a series (n,), or of C independent copies (n, C).

    Automatic window: Madras & Sokal, J. Stat. Phys. 50 (1988) 109. Copies are held against their common mean, so that
    copies which have not yet seen what the others saw make it long. A constant series has 1.
    """
    values = np.asarray(series, np.float64)
    count, columns = len(values), values.reshape(len(values), -1)
    deviations = columns - columns.mean()
    variance = float(np.sum(deviations * deviations))
    if count < 2 or variance <= 1e-24 * columns.size * max(1.0, float(np.abs(columns).max())) ** 2:
        return 1.0
    padded = 1 << (2 * count - 1).bit_length()
    spectrum = np.fft.rfft(deviations, padded, axis=0)
    powers = (spectrum * spectrum.conj()).real.sum(axis=1)
    correlations = np.fft.irfft(powers, padded)[:count] / variance
    taus = 2.0 * np.cumsum(correlations) - 1.0
    window = np.arange(count) >= WINDOW * taus
    cut = int(np.argmax(window)) if np.any(window) else count - 1
    return max(1.0, float(taus[cut]))


def mean_of(series: F64) -> Estimate:
    """The mean of a correlated series (n,), or of C independent copies of one (n, C), with its error.

    >>> mean_of(np.array([1.0, 3.0] * 50)).value
    2.0
    """
    values = np.asarray(series, np.float64)
    tau = autocorrelation_time(values)
    spread = float(values.std(ddof=1)) if values.size > 1 else float("inf")
    return Estimate(float(values.mean()), spread * (tau / values.size) ** 0.5, tau, values.size)


def function_of(series: F64, function: Callable[[F64], float]) -> Estimate:
    """A function of all values (m,) of a correlated series (n,) or of C independent copies (n, C), such as their
    variance, with its error by the blocked jackknife, which also takes the leading bias out of the value.

    Blocks are several autocorrelation times long, of the series and of its squared deviations, and at least 20 in
    number where the series allows it.
    """
    values = np.asarray(series, np.float64)
    count, copies = values.reshape(len(values), -1).shape
    tau = max(autocorrelation_time(values), autocorrelation_time((values - values.mean()) ** 2))
    each = int(min(100 // min(copies, 50), max(min(-(-20 // copies), count), count / (4.0 * tau))))
    flat = values.reshape(count, copies).T.ravel()  # copy after copy
    bounds = np.linspace(0, count, each + 1).astype(np.int64)
    starts = [(copy * count + int(first), copy * count + int(last))
              for copy in range(copies) for first, last in itertools.pairwise(bounds)]  # fmt: skip
    plain, blocks = float(function(flat)), len(starts)
    if blocks < 2:
        return Estimate(plain, float("inf"), tau, values.size)
    without = np.array([function(np.delete(flat, slice(first, last))) for first, last in starts])
    error = float(np.sqrt((blocks - 1) * np.mean((without - without.mean()) ** 2)))
    return Estimate(blocks * plain - (blocks - 1) * float(without.mean()), error, tau, values.size)
