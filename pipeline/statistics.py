"""Averages with their errors: of correlated series, of functions of averages, of whole runs, of counts.

An average without an error bar is no result. Of a correlated series only n / tau values count, tau being the integrated
autocorrelation time, 1 + 2 sum of the autocorrelations: (1 + a) / (1 - a) for an AR(1) series with coefficient a.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy import special

from patchwalk.subsolvers.contract import F64, I64

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


RESAMPLES = 2000
"""Bootstrap resamples: the 2.5 % quantile is then known within about half a per cent of probability."""


@dataclass(frozen=True)
class Interval:
    """A value with a confidence interval at ``level``; ``low`` and ``high`` are nan for fewer than two runs.

    The value is nan where it is undefined and may be infinite where that is an answer.
    """

    value: float
    low: float
    high: float
    runs: int
    level: float = 0.95

    @property
    def known(self) -> bool:
        """Whether there is an interval at all."""
        return not (np.isnan(self.low) or np.isnan(self.high))

    @property
    def above_zero(self) -> bool:
        """Whether the whole interval lies above zero."""
        return bool(self.low > 0.0)

    @property
    def below_zero(self) -> bool:
        """Whether the whole interval lies below zero."""
        return bool(self.high < 0.0)

    def __str__(self) -> str:
        if np.isnan(self.value):
            return "undefined"
        return (
            f"{self.value:.4g} [{self.low:.4g}, {self.high:.4g}]" if self.known else f"{self.value:.4g} [no interval]"
        )


def bootstrap(
    sums: F64, statistic: Callable[[F64], F64], *, level: float = 0.95, logarithmic: bool = False, seed: int = 1
) -> Interval:
    """A statistic of sums over runs, with its interval from resampled runs (Efron, Ann. Stat. 7 (1979) 1).

    ``sums`` f64 (R, C) holds a row for each run; runs all of whose sums are zero say nothing and are left out.
    ``statistic`` maps column sums (D, C) to values (D,), on the ``logarithmic`` scale if those are ratios.

    Quantiles of so few resampled runs lie too close together. They are moved away from the value by
    sqrt(R / (R - 1)) t / z, the quantiles of Student's and of the normal law, which for a mean of normal values gives
    the usual width (a rougher form of Hesterberg's expanded percentiles, Am. Stat. 69 (2015) 371).

    >>> spread = bootstrap(np.array([[1.0, 1.0], [2.0, 1.0], [3.0, 1.0]]), lambda sums: sums[:, 0] / sums[:, 1])
    >>> spread.value, spread.low < 0.5, spread.high > 3.5
    (2.0, True, True)
    """
    telling = sums[np.any(sums != 0.0, axis=1)]
    runs = len(telling)
    value = float(statistic(telling.sum(axis=0, keepdims=True))[0]) if runs else np.nan
    if runs < 2 or np.isnan(value):
        return Interval(value, np.nan, np.nan, runs, level)
    counts = np.random.default_rng(seed).multinomial(runs, np.full(runs, 1.0 / runs), size=RESAMPLES)
    values = statistic(counts.astype(np.float64) @ telling)
    values = values[~np.isnan(values)]
    tail = 0.5 * (1.0 - level)
    stretch = (runs / (runs - 1)) ** 0.5 * float(special.stdtrit(runs - 1, 1.0 - tail) / special.ndtri(1.0 - tail))
    if len(values) < (1.0 - tail) * RESAMPLES:  # too often undefined for an end of the interval to mean anything
        return Interval(value, np.nan, np.nan, runs, level)
    ends = float(np.quantile(values, tail, method="lower")), float(np.quantile(values, 1.0 - tail, method="higher"))
    low, high = (_moved_away(value, end, stretch, logarithmic) for end in ends)
    return Interval(value, low, high, runs, level)


def _moved_away(value: float, end: float, stretch: float, logarithmic: bool) -> float:
    """The end of an interval ``stretch`` times as far from the value; infinite ends stay."""
    if not (np.isfinite(value) and np.isfinite(end)) or (logarithmic and min(value, end) <= 0.0):
        return end
    return value * (end / value) ** stretch if logarithmic else value + stretch * (end - value)


def ratio(sums: F64) -> F64:
    """The first column over the second (D,), nan where there is nothing to divide by."""
    return np.divide(sums[:, 0], sums[:, 1], out=np.full(len(sums), np.nan), where=sums[:, 1] != 0.0)


def by_run(runs: I64, *columns: F64) -> F64:
    """Sums (R, C) of the columns f64 (N,) over the rows of each run, ``runs`` i64 (N,) counted from 0."""
    count = int(runs.max(initial=-1)) + 1
    return np.stack([np.bincount(runs, column, count) for column in columns], axis=1)


def binomial_interval(successes: int, trials: int, level: float = 0.95) -> Interval:
    """The share of successes with its exact interval (Clopper & Pearson, Biometrika 26 (1934) 404).

    >>> binomial_interval(0, 10).high < 0.31
    True
    """
    if not 0 <= successes <= trials or trials == 0:
        raise ValueError(f"{successes} successes in {trials} trials; give at least one trial, and no more successes")
    tail = 0.5 * (1.0 - level)
    low = 0.0 if successes == 0 else float(special.betaincinv(successes, trials - successes + 1, tail))
    high = 1.0 if successes == trials else float(special.betaincinv(successes + 1, trials - successes, 1.0 - tail))
    return Interval(successes / trials, low, high, trials, level)
