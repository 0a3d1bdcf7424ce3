"""The whole of a scenario file, table by table."""

from __future__ import annotations

from typing import Annotated

from pydantic import Field

from breakstep.scenario.physics import (
    BurningSection,
    EosSection,
    HydroSection,
    SpeciesSection,
    TransportSection,
)
from breakstep.scenario.sections import MeshSection, RunSection, Section, TimeStepSection, Word
from breakstep.scenario.states import FixedSection, InitialSection
from breakstep.scenario.timer_tables import TimersSection

SWITCHES = ("hydro", "transport", "burning")
"""Tables whose presence makes a step take part; ``true`` stands for an empty table, ``false`` for none."""


class ScenarioFile(Section):
    """Everything a scenario file may say."""

    name: Word = Field(description="the scenario's name")
    title: str = Field(default="", description="one line for tables and reports")
    description: str = Field(default="", description="what it shows and what to expect")
    mesh: MeshSection = Field(description="the mesh and its tiles")
    run: RunSection = Field(description="how long and on what")
    time_step: TimeStepSection = Field(default=TimeStepSection(), description="how dt is found")
    eos: Annotated[EosSection, Field(discriminator="kind")] = Field(description="the equation of state")
    species: SpeciesSection | None = Field(default=None, description="nuclei carried along without burning")
    hydro: HydroSection | None = Field(default=None, description="hydrodynamics sweeps")
    transport: TransportSection | None = Field(default=None, description="implicit radiation transport")
    burning: BurningSection | None = Field(default=None, description="nuclear burning")
    timers: TimersSection | None = Field(default=None, description="steps by timer")
    initial: Annotated[InitialSection, Field(discriminator="kind")] = Field(description="the initial state")
    fixed: FixedSection = Field(default=FixedSection(), description="states beyond fixed edges")
