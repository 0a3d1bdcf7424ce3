"""What the table ``[timers]`` may hold: steps of which nothing is known but how long they took."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import BeforeValidator, Field

from breakstep.scenario.sections import Counts, Positive, Section, Word, lists
from breakstep.scenario.states import AxisWord

MOST_FACE_BYTES = 1e6
FaceBytes = Annotated[float, Field(ge=0.0, le=MOST_FACE_BYTES)]
"""A rehearsal puts a rank's payload and its neighbours' into one array, of up to 27 times this size."""


class TimedStepSection(Section):
    """One step by timer."""

    name: Word = Field(description="the step's name in the file of records")
    halo: Annotated[int, Field(ge=0, le=8)] = Field(
        default=0, description="ghost zones that it reads from its neighbours, 0 for none"
    )
    axes: Annotated[tuple[AxisWord, ...], BeforeValidator(lists), Field(max_length=3)] = Field(
        default=(), description="axes along which it does so; all of the mesh's if left out"
    )
    corners: bool = Field(default=False, description="whether it reads ghost zones of diagonal neighbours too")
    face_bytes: FaceBytes | None = Field(
        default=None, description="bytes sent to one neighbour; from the file's column bytes if left out"
    )
    lag: Annotated[int, Field(ge=0, le=10)] = Field(
        default=0, description="iterations by which the verdict that ends its iterations is used late"
    )
    after: Literal["hydro", "burning", "transport"] | None = Field(
        default=None, description="the real step that it follows, in a scenario that has real steps"
    )


class TimersSection(Section):
    """``[timers]``: steps that only wait, for as long as a file of timer records says."""

    file: str = Field(min_length=1, description="a Parquet or CSV file of timer records, beside the scenario's")
    steps: Annotated[tuple[TimedStepSection, ...], BeforeValidator(lists), Field(min_length=1, max_length=100)] = Field(
        description="the steps by timer, in the order in which a cycle runs them"
    )
    ranks: Counts | None = Field(
        default=None, description="ranks along each of one to three axes; stands for [mesh] where all steps are timed"
    )
    numbering: Literal["last_axis_fastest", "first_axis_fastest"] = Field(
        default="last_axis_fastest", description="how ranks are numbered over the mesh of tiles"
    )
    reduction: bool = Field(
        default=True, description="whether each cycle begins with a value made from all ranks, as a time step is"
    )
    dilate: Positive = Field(default=1.0, description="factor applied to every wait")
