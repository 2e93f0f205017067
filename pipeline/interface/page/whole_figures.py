"""Pictures of whole runs compared at equal budget, and of success against size."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from patchwalk.commands.scaling import Scaled, ScalingCurve
from patchwalk.commands.stored_comparisons import StoredComparison, mean_residuals
from patchwalk.interface.page.appearance import DASHES, MARKS, SERIES
from patchwalk.interface.page.drawing import (
    Picture,
    Row,
    canvas,
    colour,
    finished,
    interval_rows,
    label,
    marked,
    plain_log,
)
from patchwalk.interface.page.markup import Table, sentence
from patchwalk.subsolvers.contract import F64

if TYPE_CHECKING:
    from matplotlib.axes import Axes

UNKNOWN = float("nan")
SHARES = tuple(float(share) for share in np.round(np.geomspace(0.01, 1.0, 41), 4))


def residuals(compared: StoredComparison, name: str) -> Picture:
    """How every contender ended: mean residual energy with its interval, and every run."""
    found = compared.comparison
    standings = sorted(found.standings, key=lambda one: one.residual.value)
    rows = [Row(one.contender, one.residual.value, *_ends(one.residual.low, one.residual.high)) for one in standings]
    with canvas(62.0 + 44.0 * len(rows), name) as figure:
        axes = figure.add_subplot()
        for place, one in enumerate(standings):
            own = [run.residual for run in found.outcomes if run.contender == one.contender]
            dots = axes.plot(own, [-place - 0.32] * len(own), "|", color=colour("soft"), markersize=9.0)
            marked(dots, f"runs-{place}")
        interval_rows(axes, rows, 0.0, favourable=0)
        axes.set_xlabel("residual energy per spin: further left is better")
        svg = finished(figure, name)
    table = Table(
        ["contender", "instance", "seed", "residual energy per spin", "reference met at", "budget", "unit"],
        [[run.contender, run.instance, run.seed, run.residual, run.reached if math.isfinite(run.reached) else None,
          run.cost, found.unit] for run in found.outcomes],
    )  # fmt: skip
    caption = (
        "Energy above the reference, per spin, averaged over seeds and then over instances, with 95 % intervals; "
        "strokes below are the single runs. The pairs below are the sharper test: they share instance and seed."
    )
    told = "; ".join(f"{one.contender} {one.residual}" for one in standings)
    return Picture(name, "Where every contender ended", caption, f"Mean residual energies: {told}.", svg, table)


def duels_figure(compared: StoredComparison, name: str) -> Picture | None:
    """Paired differences between contenders."""
    duels = compared.comparison.duels
    if not duels:
        return None
    rows = [Row(f"{label(one.one, 24)} less {label(one.other, 24)}", one.difference.value,
                *_ends(one.difference.low, one.difference.high)) for one in duels]  # fmt: skip
    with canvas(62.0 + 42.0 * len(rows), name) as figure:
        axes = figure.add_subplot()
        interval_rows(axes, rows, 0.0, favourable=-1)
        axes.set_xlabel("difference per spin: left of zero the first is better")
        svg = finished(figure, name)
    header = ["one", "other", "difference per spin", "low", "high", "lower", "equal", "higher", "level", "in words"]
    table = Table(
        header,
        [[one.one, one.other, one.difference.value, one.difference.low, one.difference.high, one.wins, one.ties,
          one.losses, one.level, one.verdict] for one in duels],
    )  # fmt: skip
    caption = (
        "Residual energy of one contender less that of the other, paired by instance and seed; the intervals are wide "
        "enough to hold all together. Hollow circles cannot be told from zero, or have no interval."
    )
    told = "; ".join(f"{one.one} less {one.other} {one.difference}" for one in duels)
    return Picture(name, "Paired differences", caption, f"Differences per spin: {told}.", svg, table)


def budget_figure(compared: StoredComparison, name: str) -> Picture:
    """Mean residual energy against the share of the budget spent."""
    found = compared.comparison
    in_seconds = found.unit == "seconds"
    shares = tuple(share * found.budget for share in SHARES) if in_seconds else SHARES
    means = mean_residuals(compared, shares)
    with canvas(240.0 + 16.0 * len(means), name) as figure:
        axes = figure.add_subplot()
        for place, (contender, values) in enumerate(means.items()):
            look = place % len(SERIES)
            style: dict[str, Any] = {"color": colour(SERIES[look]), "linestyle": DASHES[look], "marker": MARKS[look]}
            line = axes.plot(shares, values, markevery=(3 * place % 10, 10), label=label(contender, 48), **style)
            marked(line, f"mean-{place}")
        axes.set_xscale("log")
        plain_log(axes.xaxis)
        heights = [value for values in means.values() for value in values if value > 0.0]
        if heights and max(heights) > 30.0 * min(heights):
            axes.set_yscale("symlog", linthresh=10.0 ** math.floor(math.log10(max(heights) / 100.0)))
            plain_log(axes.yaxis)
        axes.set_ylim(0.0, 1.1 * max(heights, default=1.0))
        axes.set_xlabel("seconds" if in_seconds else "share of the budget spent")
        axes.set_ylabel("residual energy per spin")
        figure.legend(loc="outside lower center", ncols=1)
        svg = finished(figure, name)
    table = Table(
        ["seconds" if in_seconds else "share", *means],
        [[share, *(own[at] for own in means.values())] for at, share in enumerate(shares)],
    )
    caption = "The incumbent's energy above the reference, per spin, averaged over all runs of a contender."
    told = "; ".join(f"{contender} ends at {values[-1]:.3g}" for contender, values in means.items())
    return Picture(name, "Incumbent against budget", caption, f"Mean residual energy: {told}.", svg, table)


def solved_figure(compared: StoredComparison, name: str) -> Picture | None:
    """Share of instances solved within a multiple of the best time to solution; None for one instance."""
    found = compared.comparison
    if len(found.instances) < 2:
        return None
    with canvas(220.0 + 16.0 * len(found.curves), name) as figure:
        axes = figure.add_subplot()
        for place, curve in enumerate(found.curves):
            ratios = [*curve.ratios, max(2.0, 1.3 * curve.ratios[-1])]
            line = axes.step(
                ratios, [*curve.shares, curve.shares[-1]], where="post", color=colour(SERIES[place % 6]),
                linestyle=DASHES[place % 6], linewidth=2.6 - 0.3 * (place % 6), label=label(curve.contender, 48),
            )  # fmt: skip
            marked(line, f"solved-{place}")
        axes.set_xscale("log")
        plain_log(axes.xaxis)
        axes.set_xlim(0.95, max(2.0, 1.3 * max(curve.ratios[-1] for curve in found.curves)))
        axes.set_ylim(-0.03, 1.05)
        axes.set_xlabel("times the least time to solution")
        axes.set_ylabel("share of instances")
        figure.legend(loc="outside lower center", ncols=1)
        svg = finished(figure, name)
    rows = [[curve.contender, *pair] for curve in found.curves for pair in zip(curve.ratios, curve.shares, strict=True)]
    caption = (
        f"Of {len(found.instances)} instances, the share that a contender solves (99 %) within so many times the least "
        "time any contender takes; what nobody solved counts against all."
    )
    told = "; ".join(f"{curve.contender} solves {curve.shares[-1]:.0%} in the end" for curve in found.curves)
    table = Table(["contender", "ratio", "share of instances"], rows)
    return Picture(name, "Instances solved", caption, f"Shares: {told}.", svg, table)


def scaling_figure(scaled: Scaled, name: str, average: str = "mean") -> Picture:
    """Success of one shot against size, with the fitted fall of an average."""
    curves = scaled.curves
    with canvas(250.0 + 15.0 * len(curves), name) as figure:
        axes = figure.add_subplot()
        for place, curve in enumerate(curves):
            _draw_curve(axes, curve, place, average)
        axes.set_yscale("log", base=2)
        plain_log(axes.yaxis)
        axes.locator_params(axis="x", integer=True)
        axes.set_xlabel("spins")
        axes.set_ylabel("mean success of one shot")
        figure.legend(loc="outside lower center", ncols=1)
        svg = finished(figure, name)
    caption = (
        f"Mean over instances of the probability that one shot lands in a minimum, {scaled.what}; bars are one "
        f"standard error, lines the fits of 2^(-a k). {sentence(scaled.caution)}"
    )
    told = "; ".join(f"{curve.name}: {_exponent(curve, average)}" for curve in curves)
    return Picture(name, "Success against size", caption, f"Fitted exponents: {told}.", svg, _scaling_table(scaled))


def _draw_curve(axes: Axes, curve: ScalingCurve, place: int, average: str) -> None:
    tone = colour(SERIES[place % 6] if curve.name != "guessing" else "soft")
    sizes = sorted(curve.success)
    means = np.array([curve.success[size].mean() for size in sizes])
    errors = [_standard_error(curve.success[size]) for size in sizes]
    points = axes.plot(sizes, means, MARKS[place % 6], color=tone, label=f"{label(curve.name, 46)}")
    marked(points, f"curve-{place}")
    for size, mean, error in zip(sizes, means, errors, strict=True):
        if 0.0 < error < mean:
            axes.plot([size, size], [mean - error, mean + error], color=tone, linewidth=1.1)
    fit = next((one for one in curve.fits if one.average == average), None)
    if fit is not None:
        line = 2.0 ** (fit.intercept - fit.exponent * np.array(sizes, np.float64))
        marked(axes.plot(sizes, line, color=tone, linestyle=DASHES[place % 6]), f"fit-{place}")


def _standard_error(values: F64) -> float:
    """That of the mean, 0 for a single value."""
    return float(values.std(ddof=1)) / math.sqrt(len(values)) if len(values) > 1 else 0.0


def _exponent(curve: ScalingCurve, average: str) -> str:
    fit = next((one for one in curve.fits if one.average == average), None)
    return "no fit" if fit is None else f"a = {fit.exponent:.3f} [{fit.low:.3f}, {fit.high:.3f}]"


def _scaling_table(scaled: Scaled) -> Table:
    rows = []
    for curve in scaled.curves:
        for size in sorted(curve.success):
            values = curve.success[size]
            rows.append([curve.name, size, len(values), float(values.mean()), float(np.median(values)),
                         _standard_error(values),
                         curve.exact, curve.chosen.get(size, "")])  # fmt: skip
    header = ["curve", "spins", "instances", "mean success", "median success", "standard error", "exact", "tuned"]
    return Table(header, rows)


def fits_table(scaled: Scaled, averages: Sequence[str] = ("mean",)) -> Table:
    """Fits of success, which falls, and of what success at 99 % costs, which grows, in numbers."""
    rows: list[list[object]] = []
    for curve in scaled.curves:
        for fit in curve.fits:
            told = [fit.exponent, fit.low, fit.high, fit.best_model]
            rows.append([curve.name, "success falls as 2^(-a k)", fit.average, *told])
        for currency, fits in curve.costs.items():
            for fit in fits:
                told = [-fit.exponent, -fit.high, -fit.low, fit.best_model]
                rows.append([curve.name, f"cost in {currency} grows as 2^(a k)", fit.average, *told])
    kept = [row for row in rows if row[2] in averages]
    return Table(["curve", "law", "average", "a", "low", "high", "laws that fit"], kept)


def _ends(low: float | None, high: float | None) -> tuple[float, float]:
    return (UNKNOWN, UNKNOWN) if low is None or high is None else (low, high)
