"""What a user's own Python file offers: a problem, its tiles, and on what it runs unless told otherwise."""

from __future__ import annotations

from dataclasses import dataclass
from operator import index
from typing import Literal, SupportsIndex

from breakstep.errors import DeclarationError
from breakstep.mesh.shown import facts
from breakstep.steps.problem import Problem

Placement = Literal["blocks", "curve", "cyclic", "balanced", "shared", "dask"]
DispatchName = Literal["resident", "native", "serial"]


@dataclass(frozen=True)
class Setup:
    """A problem made ready to run.

    Parameters
    ----------
    problem : Problem
    tile : tuple of int
        Zones of a tile along each axis of the mesh.
    workers, threads : int
        Worker processes, and threads of each.
    placement : str
        Who decides which worker owns a tile.
    window : int
        Cycles that may be in flight at once.
    fuse : bool
        Whether steps without a halo between them share a task.
    dispatch : str
        What carries out the tasks.
    description : str
        What it shows and what to expect.

    Raises
    ------
    DeclarationError, TilingError
        It holds no problem, or tiles that do not fit.
    """

    problem: Problem
    tile: tuple[int, ...]
    workers: int = 2
    threads: int = 1
    placement: Placement = "blocks"
    window: int = 4
    fuse: bool = True
    dispatch: DispatchName = "resident"
    description: str = ""

    def __post_init__(self) -> None:
        if not isinstance(self.problem, Problem):
            raise DeclarationError(f"a Setup needs a Problem, came {type(self.problem).__name__}")
        sizes = self.tile if isinstance(self.tile, tuple | list) else ()
        if not sizes or not all(isinstance(size, SupportsIndex) for size in sizes):
            raise DeclarationError(
                f"a Setup needs the zones of a tile along each axis, such as (32, 32), not {self.tile}"
            )
        object.__setattr__(self, "tile", tuple(index(size) for size in sizes))
        self.problem.cut(self.tile)

    def _repr_html_(self) -> str:
        """The problem, and on what it runs, for notebooks."""
        names = ("tile", "workers", "threads", "placement", "window", "fuse", "dispatch")
        return self.problem._repr_html_() + facts("Run", [(name, getattr(self, name)) for name in names])
