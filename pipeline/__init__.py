"""Patchwalk: a big spin glass solved through small clusters, each handed to a swappable subsolver.

The public names are imported when they are first used, so that ``import patchwalk`` costs nothing.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from patchwalk.commands.auditing import audit
    from patchwalk.commands.bounding import bound
    from patchwalk.commands.comparing import compare
    from patchwalk.commands.forecasting import forecast
    from patchwalk.commands.profiling import profile
    from patchwalk.commands.replaying import replay
    from patchwalk.commands.resuming import resume
    from patchwalk.commands.sampling import sample
    from patchwalk.commands.scaling import scale
    from patchwalk.commands.solving import Solution, solve
    from patchwalk.interface.page.writing import report
    from patchwalk.problem.builder import ProblemBuilder
    from patchwalk.problem.families import make
    from patchwalk.problem.files import read_problem, write_problem
    from patchwalk.problem.ising import Problem, ProblemError

_HOMES = {
    "Problem": "patchwalk.problem.ising",
    "ProblemBuilder": "patchwalk.problem.builder",
    "ProblemError": "patchwalk.problem.ising",
    "Solution": "patchwalk.commands.solving",
    "compare": "patchwalk.commands.comparing",
    "forecast": "patchwalk.commands.forecasting",
    "audit": "patchwalk.commands.auditing",
    "bound": "patchwalk.commands.bounding",
    "make": "patchwalk.problem.families",
    "profile": "patchwalk.commands.profiling",
    "replay": "patchwalk.commands.replaying",
    "report": "patchwalk.interface.page.writing",
    "resume": "patchwalk.commands.resuming",
    "read_problem": "patchwalk.problem.files",
    "sample": "patchwalk.commands.sampling",
    "scale": "patchwalk.commands.scaling",
    "solve": "patchwalk.commands.solving",
    "write_problem": "patchwalk.problem.files",
}

__all__ = [
    "Problem",
    "ProblemBuilder",
    "ProblemError",
    "Solution",
    "audit",
    "bound",
    "compare",
    "forecast",
    "make",
    "profile",
    "read_problem",
    "replay",
    "report",
    "resume",
    "sample",
    "scale",
    "solve",
    "write_problem",
]


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        return getattr(importlib.import_module(_HOMES[name]), name)
    raise AttributeError(f"module 'patchwalk' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted([*globals(), *_HOMES])
