"""Averages with their errors: of correlated series, of functions of averages.

An average without an error bar is no result. Of a correlated series only n / tau values count, tau being the integrated
autocorrelation time, 1 + 2 sum of the autocorrelations: (1 + a) / (1 - a) for an AR(1) series with coefficient a.
"""

from __future__ import annotations

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
    """The integrated autocorrelation time of a series (n,), in steps, at least 1.

    Automatic window: Madras & Sokal, J. Stat. Phys. 50 (1988) 109. A constant series has 1.
    """
    values = np.asarray(series, np.float64)
    count = len(values)
    deviations = values - values.mean()
    variance = float(deviations @ deviations)
    if count < 2 or variance <= 1e-24 * count * max(1.0, float(np.abs(values).max())) ** 2:
        return 1.0
    padded = 1 << (2 * count - 1).bit_length()
    spectrum = np.fft.rfft(deviations, padded)
    correlations = np.fft.irfft(spectrum * spectrum.conj(), padded)[:count] / variance
    taus = 2.0 * np.cumsum(correlations) - 1.0
    window = np.arange(count) >= WINDOW * taus
    cut = int(np.argmax(window)) if np.any(window) else count - 1
    return max(1.0, float(taus[cut]))


def mean_of(series: F64) -> Estimate:
    """The mean of a correlated series (n,) with its error.

    >>> mean_of(np.array([1.0, 3.0] * 50)).value
    2.0
    """
    values = np.asarray(series, np.float64)
    tau = autocorrelation_time(values)
    spread = float(values.std(ddof=1)) if len(values) > 1 else float("inf")
    return Estimate(float(values.mean()), spread * (tau / len(values)) ** 0.5, tau, len(values))


def function_of(series: F64, function: Callable[[F64], float]) -> Estimate:
    """A function of a whole correlated series (n,), such as its variance, with its error by the blocked jackknife.

    Blocks are several autocorrelation times long, of the series and of its squared deviations, and at least 20 in
    number where the series allows it.
    """
    values = np.asarray(series, np.float64)
    tau = max(autocorrelation_time(values), autocorrelation_time((values - values.mean()) ** 2))
    blocks = int(min(100, max(min(20, len(values)), len(values) / (4.0 * tau))))
    bounds = np.linspace(0, len(values), blocks + 1).astype(np.int64)
    without = np.array(
        [function(np.delete(values, slice(bounds[b], bounds[b + 1]))) for b in range(blocks)]
        if blocks > 1
        else [np.nan]
    )
    error = float(np.sqrt((blocks - 1) * np.mean((without - without.mean()) ** 2))) if blocks > 1 else float("inf")
    return Estimate(float(function(values)), error, tau, len(values))
