"""foldwright: the smallest hardware that runs a fixed-point algorithm at its sample rate.

What builds designs and reads answers stands in `__all__`, imported on first use so that the command
line starts quickly. The main job itself is `scheduler.planning.plan`.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from scheduler.design import design_from, design_of, load_design
    from scheduler.equations import parse_equations
    from scheduler.errors import (
        AuditError,
        FoldwrightError,
        InputError,
        SolverError,
    )
    from scheduler.graph import Graph, Kind, Operation, Source, graph_of
    from scheduler.interchange import from_networkx, read_graph, to_networkx, write_graph
    from scheduler.limits import limits_of
    from scheduler.plan import Plan, Status
    from scheduler.planfile import load_plan, save_plan

_ROOMS = {
    "design": ("design_from", "design_of", "load_design"),
    "equations": ("parse_equations",),
    "errors": ("AuditError", "FoldwrightError", "InputError", "SolverError"),
    "graph": ("Graph", "Kind", "Operation", "Source", "graph_of"),
    "interchange": ("from_networkx", "read_graph", "to_networkx", "write_graph"),
    "limits": ("limits_of",),
    "plan": ("Plan", "Status"),
    "planfile": ("load_plan", "save_plan"),
}

__all__ = [
    "AuditError",
    "FoldwrightError",
    "Graph",
    "InputError",
    "Kind",
    "Operation",
    "Plan",
    "SolverError",
    "Source",
    "Status",
    "design_from",
    "design_of",
    "from_networkx",
    "graph_of",
    "limits_of",
    "load_design",
    "load_plan",
    "parse_equations",
    "read_graph",
    "save_plan",
    "to_networkx",
    "write_graph",
]


def __getattr__(name: str) -> Any:
    for room, names in _ROOMS.items():
        if name in names:
            return getattr(import_module(f"scheduler.{room}"), name)
    raise AttributeError(f"module 'scheduler' has no attribute {name!r}")
