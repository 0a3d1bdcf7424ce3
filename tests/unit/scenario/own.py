"""A small problem as a user would write it into a file."""

from __future__ import annotations

from pathlib import Path

OWN = """
import numpy as np
from breakstep import Edge, Field, Mesh, Problem, Read, Setup, Step, lie


def smooth(arrays, call):
    u = arrays["u"]
    return {"u": 0.5 * u[:, 1:-1] + 0.25 * (u[:, :-2] + u[:, 2:])}


def start(tile, mesh):
    x = np.arange(tile.shape[0]) + tile.origin[0]
    return {"u": np.sin(1.0 * x).reshape(1, -1, 1, 1)}


def setup(zones=12):
    mesh = Mesh((zones,), (1.0,), ((Edge.PERIODIC, Edge.PERIODIC),))
    step = Step("smooth", smooth, (Read("u", (1, 0, 0)),), ("u",))
    return Setup(Problem("own", "an invented one", mesh, (Field("u", ("u",)),), lie([step]), start, 5), (4,), workers=3)
"""


def written(folder: Path, text: str = OWN, before: str = "", name: str = "own.py") -> Path:
    """The file."""
    path = folder / name
    path.write_text(before + text, encoding="utf-8")
    return path
