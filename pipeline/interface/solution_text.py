"""The result in words, for a person who reads it on a terminal."""

from __future__ import annotations

import textwrap
from typing import Any

from patchwalk.commands.solving import Solution

WIDTH = 110


def in_words(solution: Solution) -> str:
    """Several lines: the answer first, then how it was come by."""
    lines = list(solution.spoken)
    if "channels" in solution.answer:
        lines = _beacon_lines(solution.answer)
        if not solution.feasible:
            lines.append("NOT VALID: the answer breaks the problem's own rules, listed above")
    if len(solution.runs) > 1:
        lines.append(f"best of {len(solution.runs)} runs, seed {solution.seed}")
        lines.extend(f"  seed {run.seed}: {run.objective_name} {run.objective:,.8g}" for run in solution.runs)
    lines.append(f"{solution.objective_name} {solution.objective:,.10g}; {solution.message}")
    lines.append(
        f"{solution.calls:,} cluster calls and {solution.sweeps:,} sweeps in {solution.seconds:.1f} s "
        f"(compiling {solution.compile_seconds:.1f} s apart)"
    )
    lines.append(_bound_line(solution))
    if solution.failed_calls:
        lines.append(f"{solution.failed_calls:,} calls FAILED and changed nothing; their rows hold the reasons")
    lines.append(f"run file: {solution.run_path}")
    return "\n".join(lines)


def _bound_line(solution: Solution) -> str:
    if solution.lower_bound is None or solution.gap is None:
        return "no lower bound was computed (--bound SECONDS looks for one)"
    return (
        f"no configuration has an energy below {solution.lower_bound:,.10g}: a gap of {100 * solution.gap:.3g} %, "
        f"found in {solution.bound_seconds:.1f} s; patchwalk audit checks the certificate"
    )


def _beacon_lines(answer: dict[str, Any]) -> list[str]:
    lines = []
    for channel in "AB":
        names = sorted(name for name, own in answer["channels"].items() if own == channel)
        lines.append(f"channel {channel} ({len(names)} beacons):")
        lines.extend(textwrap.wrap(", ".join(names), WIDTH, initial_indent="  ", subsequent_indent="  "))
    lines.extend(f"repeater pair broken: {one} and {other}" for one, other in answer["broken_repeaters"])
    lines.append(
        f"interference {answer['interference']:,.2f}; a simple greedy rule gives {answer['greedy_interference']:,.2f}"
    )
    lines.append(answer["caution"])
    return lines
