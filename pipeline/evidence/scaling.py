"""How success falls with size: fits of log2 of a success probability, with intervals, residuals and rival models.

Every average is fitted on its own: the mean (what a device that meets all instances sees), the median (the typical
instance) and the mean of logarithms. A slope is only as good as the sizes it was fitted on: beyond them it is a guess,
and :func:`limit_sentence` says so wherever a slope is printed.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.optimize import minimize_scalar

from patchwalk.evidence.time_to_solution import LEVEL
from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.draws import generator_for

RESAMPLES = 2000
BOOTSTRAP = 0x7363616C696E6773
"""The word of the stream that resamples are drawn from."""

AVERAGES: dict[str, Callable[[F64], float]] = {
    "mean": lambda values: float(np.log2(values.mean())),
    "median": lambda values: float(np.log2(np.median(values))),
    "mean of logarithms": lambda values: float(np.log2(values).mean()),
}
"""Averages of a success probability over instances, each as a logarithm to base 2."""

LEAST_ERROR = 1e-6
"""Standard errors of log2 are taken to be at least this, so that exact series can be weighted too."""

FEWEST_SIZES = 3


@dataclass(frozen=True)
class ModelFit:
    """One law fitted to log2 of an average: its formula with numbers, chi squared, and AIC less that of the best."""

    name: str
    formula: str
    chi_squared: float
    aic: float
    excess: float = 0.0


@dataclass(frozen=True)
class ScalingFit:
    """The fall of one average with size, as 2^(-exponent k).

    ``points`` are log2 of the average at each of ``sizes``, ``errors`` their standard errors, ``residuals`` points
    less fit. ``low`` and ``high`` bound the exponent at 95 % by a bootstrap over instances at every size; they say
    nothing of sizes beyond.
    """

    average: str
    sizes: tuple[int, ...]
    points: tuple[float, ...]
    errors: tuple[float, ...]
    exponent: float
    low: float
    high: float
    intercept: float
    residuals: tuple[float, ...]
    models: tuple[ModelFit, ...]

    @property
    def best_model(self) -> str:
        """The law with the smallest AIC; laws within 2 of it do about as well."""
        best = next(model for model in self.models if model.excess == 0.0)
        close = [model.name for model in self.models if 0.0 < model.excess <= 2.0]
        return best.name + (f" ({' and '.join(close)} about as well)" if close else "")

    def as_json(self) -> dict[str, Any]:
        """Plain values."""
        names = (
            "average", "sizes", "points", "errors", "exponent", "low", "high", "intercept", "residuals", "best_model",
        )  # fmt: skip
        return {name: getattr(self, name) for name in names} | {"models": [vars(model) for model in self.models]}


def scaling_fits(samples: dict[int, F64], seed: int = 1) -> list[ScalingFit]:
    """A fit of every average that can be taken; ``samples`` holds a success probability per instance for each size.

    Averages that meet a probability of zero have no logarithm and are left out; so are all with fewer than 3 sizes.
    """
    fits = []
    for name, average in AVERAGES.items():
        with np.errstate(divide="ignore"):
            finite = all(np.isfinite(average(values)) for values in samples.values())
        if finite and len(samples) >= FEWEST_SIZES:
            fits.append(_fit(name, samples, average, seed))
    return fits


def _fit(name: str, samples: dict[int, F64], average: Callable[[F64], float], seed: int) -> ScalingFit:
    sizes = np.array(sorted(samples))
    points = np.array([average(samples[size]) for size in sizes])
    drawn = resampled_points([samples[size] for size in sizes], average, seed)
    errors = np.maximum(LEAST_ERROR, drawn.std(axis=0))
    slope, intercept = line_through(sizes, points, errors)
    slopes = np.array([line_through(sizes, row, errors)[0] for row in drawn])
    tail = (1.0 - LEVEL) / 2.0
    low, high = np.quantile(-slopes, [tail, 1.0 - tail])
    residuals = points - (intercept + slope * sizes)
    return ScalingFit(
        name, tuple(sizes.tolist()), tuple(points.tolist()), tuple(errors.tolist()), -slope, float(low), float(high),
        intercept, tuple(residuals.tolist()), tuple(models_of(sizes, points, errors)),
    )  # fmt: skip


def resampled_points(samples: Sequence[F64], average: Callable[[F64], float], seed: int) -> F64:
    """log2 averages f64 (resamples, sizes) of instances drawn anew at every size; infinite ones become the extremes."""
    draws = generator_for(seed, BOOTSTRAP)
    points = np.empty((RESAMPLES, len(samples)))
    for column, values in enumerate(samples):
        picks = draws.integers(0, len(values), (RESAMPLES, len(values)))
        with np.errstate(divide="ignore"):
            points[:, column] = [average(row) for row in values[picks]]
    finite = points[np.isfinite(points)]
    return np.clip(points, finite.min(), finite.max())


def line_through(sizes: F64, points: F64, errors: F64) -> tuple[float, float]:
    """Slope and intercept of the weighted least-squares line.

    >>> slope, intercept = line_through(np.array([1.0, 2.0, 4.0]), np.array([3.0, 5.0, 9.0]), np.ones(3))
    >>> round(slope, 12), round(intercept, 12)
    (2.0, 1.0)
    """
    weights = errors**-2.0
    weights = weights / weights.sum()
    centre, level = float(weights @ sizes), float(weights @ points)
    slope = float(weights @ ((sizes - centre) * (points - level)) / (weights @ (sizes - centre) ** 2))
    return slope, level - slope * centre


def models_of(sizes: F64, points: F64, errors: F64) -> list[ModelFit]:
    """Exponential, power law and stretched exponential, compared by Akaike's criterion (chi squared + 2 parameters).

    Akaike, IEEE Trans. Autom. Control 19 (1974) 716, from memory. The stretched law has a parameter more, and needs a
    size more than parameters.
    """
    stretch = _best_stretch(sizes, points, errors)
    laws: list[tuple[str, F64, str, int]] = [
        ("exponential", sizes.astype(np.float64), "k", 2),
        ("power law", np.log2(sizes), "log2 k", 2),
        ("stretched exponential", sizes**stretch, f"k^{stretch:.3g}", 3),
    ]
    fits = []
    for name, places, text, parameters in laws:
        if len(sizes) <= parameters:
            continue
        slope, intercept = line_through(places, points, errors)
        chi_squared = float(np.sum(((points - intercept - slope * places) / errors) ** 2))
        formula = f"log2 p = {intercept:.4g} {'-' if slope < 0 else '+'} {abs(slope):.4g} {text}"
        fits.append(ModelFit(name, formula, chi_squared, chi_squared + 2.0 * parameters))
    least = min(fit.aic for fit in fits)
    return [ModelFit(fit.name, fit.formula, fit.chi_squared, fit.aic, fit.aic - least) for fit in fits]


def _best_stretch(sizes: F64, points: F64, errors: F64) -> float:
    """The power of k whose line fits best."""

    def misfit(power: float) -> float:
        places = sizes**power
        slope, intercept = line_through(places, points, errors)
        return float(np.sum(((points - intercept - slope * places) / errors) ** 2))

    return float(minimize_scalar(misfit, bounds=(0.1, 3.0), method="bounded").x)


def limit_sentence(sizes: Sequence[int]) -> str:
    """What a fit does not say."""
    return (
        f"fitted on sizes {min(sizes)} to {max(sizes)}: an exponent describes these sizes and these instances alone; "
        f"beyond {max(sizes) + (max(sizes) - min(sizes)) // 2} spins nothing here supports it"
    )
