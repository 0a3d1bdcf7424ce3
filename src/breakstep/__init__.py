"""Breakstep: operator-split physics run in lockstep and as tasks, with an account of every core-second.

What a program of the user's needs can be imported from here; each name is loaded when it is first asked for, so that
``import breakstep`` itself costs nothing.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from breakstep.api import compare, run
    from breakstep.errors import BreakstepError
    from breakstep.mesh.fields import Field
    from breakstep.mesh.mesh import Edge, Mesh
    from breakstep.mesh.tiling import Tile
    from breakstep.profile.run import Profile
    from breakstep.profile.store import read_profile
    from breakstep.report.comparison import Comparison
    from breakstep.scenario.load import load_scenario
    from breakstep.scenario.setup import Setup
    from breakstep.steps.foreign import InPlace, Library, Routine
    from breakstep.steps.problem import Problem
    from breakstep.steps.reduction import Combine, Reduction
    from breakstep.steps.splitting import Repeat, Splitting, alternating, lie, strang
    from breakstep.steps.step import Array, Call, Read, Step

_HOMES = {
    "Array": "steps.step",
    "BreakstepError": "errors",
    "Call": "steps.step",
    "Combine": "steps.reduction",
    "Comparison": "report.comparison",
    "Edge": "mesh.mesh",
    "Field": "mesh.fields",
    "InPlace": "steps.foreign",
    "Library": "steps.foreign",
    "Mesh": "mesh.mesh",
    "Problem": "steps.problem",
    "Profile": "profile.run",
    "Read": "steps.step",
    "Reduction": "steps.reduction",
    "Repeat": "steps.splitting",
    "Routine": "steps.foreign",
    "Setup": "scenario.setup",
    "Splitting": "steps.splitting",
    "Step": "steps.step",
    "Tile": "mesh.tiling",
    "alternating": "steps.splitting",
    "compare": "api",
    "lie": "steps.splitting",
    "load_scenario": "scenario.load",
    "read_profile": "profile.store",
    "run": "api",
    "strang": "steps.splitting",
}

__all__ = [
    "Array",
    "BreakstepError",
    "Call",
    "Combine",
    "Comparison",
    "Edge",
    "Field",
    "InPlace",
    "Library",
    "Mesh",
    "Problem",
    "Profile",
    "Read",
    "Reduction",
    "Repeat",
    "Routine",
    "Setup",
    "Splitting",
    "Step",
    "Tile",
    "alternating",
    "compare",
    "lie",
    "load_scenario",
    "read_profile",
    "run",
    "strang",
]


def __getattr__(name: str) -> Any:
    """Load a public name (PEP 562)."""
    if name not in _HOMES:
        raise AttributeError(f"module 'breakstep' has no attribute {name!r}")
    value = getattr(importlib.import_module(f"breakstep.{_HOMES[name]}"), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *_HOMES})
