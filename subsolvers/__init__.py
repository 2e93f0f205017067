"""Subsolvers: each knows one small cluster problem and nothing of the pipeline that calls it."""

from __future__ import annotations

from patchwalk.subsolvers.contract import (
    ClusterBatch,
    Edges,
    Forecast,
    Proposals,
    Status,
    Subsolver,
    Work,
)
from patchwalk.subsolvers.registry import make_subsolver, subsolver_names

__all__ = [
    "ClusterBatch",
    "Edges",
    "Forecast",
    "Proposals",
    "Status",
    "Subsolver",
    "Work",
    "make_subsolver",
    "subsolver_names",
]
