"""What the tables of a scenario may hold: the mesh, the run, the time step.

Every key has its type, its bounds and one sentence on what it is. This module refuses to know what
a run does with them; rules that tie keys together stand in ``rules``.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Annotated, Any, Literal, get_args

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field
from pydantic_core import PydanticKnownError

EdgeWord = Literal["periodic", "reflecting", "outflow", "fixed"]
STRICT = ConfigDict(extra="forbid", strict=True, frozen=True, allow_inf_nan=False)


class Section(BaseModel):
    """Base of all tables: no unknown keys, no silent conversions, finite numbers, not changed once made."""

    model_config = STRICT


def lists(value: Any) -> Any:
    """Let a TOML list stand where a tuple is kept."""
    return tuple(value) if isinstance(value, list) else value


def known_word(value: str, known: Sequence[str]) -> str:
    """Refuse a word that is not among those known, in pydantic's own way."""
    if value not in known:
        raise PydanticKnownError("literal_error", {"expected": ", ".join(known)})
    return value


def _pair(value: Any) -> Any:
    """Let one word stand for both sides."""
    if isinstance(value, str):
        return (known_word(value, get_args(EdgeWord)),) * 2
    return lists(value)


Positive = Annotated[float, Field(gt=0.0)]
NotNegative = Annotated[float, Field(ge=0.0)]
LARGEST = 1e30
"""Bound on lengths [cm] and their inverses; keeps products of a few of them within floating point."""
Length = Annotated[float, Field(ge=-LARGEST, le=LARGEST)]
PositiveLength = Annotated[float, Field(ge=1.0 / LARGEST, le=LARGEST)]
Temperature = Annotated[float, Field(ge=1e-30, le=1e12)]
Count = Annotated[int, Field(ge=1, le=1_000_000)]
Counts = Annotated[tuple[Count, ...], BeforeValidator(lists), Field(min_length=1, max_length=3)]
Lengths = Annotated[tuple[PositiveLength, ...], BeforeValidator(lists), Field(min_length=1, max_length=3)]
Vector = Annotated[tuple[Length, ...], BeforeValidator(lists), Field(min_length=1, max_length=3)]
Word = Annotated[str, Field(pattern=r"^[A-Za-z][A-Za-z0-9_]*$", max_length=60)]
EdgePair = Annotated[tuple[EdgeWord, ...], BeforeValidator(_pair), Field(min_length=2, max_length=2)]


class EdgesSection(Section):
    """``[mesh.edges]``: what lies beyond the two sides of each axis."""

    x: EdgePair = Field(default=("periodic", "periodic"), description="one word for both sides, or [low, high]")
    y: EdgePair = Field(default=("periodic", "periodic"), description="one word for both sides, or [low, high]")
    z: EdgePair = Field(default=("periodic", "periodic"), description="one word for both sides, or [low, high]")


class MeshSection(Section):
    """``[mesh]``: a box of equal zones, and the tiles it is cut into."""

    zones: Counts = Field(description="zones along each of one to three axes")
    size: Lengths = Field(description="extent of the mesh along the same axes [cm]")
    tile: Counts = Field(description="zones of a tile along the same axes")
    edges: EdgesSection = Field(default=EdgesSection(), description="what lies beyond each edge")


class CourseSection(Section):
    """The part of ``[run]`` that says how long, and in which order of steps."""

    cycles: Count = Field(description="most cycles to run")
    end_time: Positive | None = Field(default=None, description="time at which the run ends, if earlier [s]")
    splitting: Literal["lie", "strang", "alternating"] = Field(
        default="alternating",
        description="order of the steps: always forward, there and back, or forward and back in turn",
    )


class PlaceSection(Section):
    """The part of ``[run]`` that says on what a scenario runs; the answer does not depend on it."""

    workers: Annotated[int, Field(ge=1, le=4096)] = Field(default=2, description="worker processes")
    threads: Annotated[int, Field(ge=1, le=256)] = Field(default=1, description="threads of each worker")
    placement: Literal["blocks", "curve", "cyclic", "balanced", "shared", "dask"] = Field(
        default="blocks", description="who decides which worker owns a tile"
    )
    window: Annotated[int, Field(ge=1, le=1000)] = Field(default=4, description="cycles that may be in flight at once")
    fuse: bool = Field(default=True, description="whether steps without a halo between them share a task")
    dispatch: Literal["resident", "native", "serial"] = Field(
        default="resident", description="what carries out the tasks"
    )


class RunSection(PlaceSection, CourseSection):
    """``[run]``: how long, in which order of steps, and on what."""


class TimeStepSection(Section):
    """``[time_step]``: how dt follows from the state, and how late it may be used."""

    cfl: Annotated[float, Field(gt=0.0, le=0.9)] = Field(
        default=0.4, description="factor applied to the largest stable step"
    )
    lag: Annotated[int, Field(ge=0, le=10)] = Field(default=0, description="cycles by which dt is used late")
    growth: Annotated[float, Field(ge=1.0, le=10.0)] = Field(
        default=1.25, description="largest ratio of one step to the one before"
    )
    first: Positive | None = Field(default=None, description="bound on the first step [s]")
    maximum: Positive | None = Field(default=None, description="bound on every step [s]")
