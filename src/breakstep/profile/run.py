"""A profile in memory: its tables as frames, its final fields, and the accounts made from them.

Accounts are made when they are first asked for, and kept.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import cached_property
from pathlib import Path
from typing import Any, cast

import pandas as pd
import xarray as xr

from breakstep.errors import ProfileError
from breakstep.profile.checks import sound_frames
from breakstep.profile.demand import demand_of
from breakstep.profile.fields import dataset_of
from breakstep.profile.figures import Figures, profile_html
from breakstep.profile.frames import Frames
from breakstep.profile.ledger import Ledger, ledger_of
from breakstep.profile.manifest import Manifest, first_fault
from breakstep.profile.memory import LiveBytes, live_bytes
from breakstep.profile.outputs import data_kinds
from breakstep.profile.record import RunRecord
from breakstep.profile.settle import settled
from breakstep.profile.traffic import Traffic, traffic_of
from breakstep.profile.why import Why, why
from breakstep.profile.work import counters_by_step, imbalance_by_step, work_by_step


class Profile:
    """A recorded run.

    Parameters
    ----------
    manifest : Manifest
        What was run, where, how, and how it ended.
    frames : mapping of str to DataFrame
        The tables of :mod:`breakstep.profile.schema`, found sound.
    fields : xarray.Dataset
        One variable per field at the end of the run, dimensions (<field>_component, x, y, z); zone centres
        [cm] as coordinates x, y, z; units in each variable's attribute ``units``.
    folder : Path, optional
        Where it was read from.
    """

    def __init__(self, manifest: Manifest, frames: Frames, fields: xr.Dataset, folder: Path | None = None) -> None:
        self.manifest = manifest
        self.frames = frames
        self.fields = fields
        self.folder = folder

    @classmethod
    def from_record(cls, record: RunRecord) -> Profile:
        """The profile of a run that has just ended, without a detour through files.

        Raises
        ------
        ProfileError
            The record contradicts itself.
        """
        manifest, tables = settled(record)
        fault = first_fault(manifest)
        if fault:
            raise ProfileError(f"record, manifest: {fault}; the engine must record it", table="manifest")
        sound = cast(Manifest, manifest)
        frames = sound_frames(tables, sound, lambda table: f"record, table {table}")
        return cls(sound, frames, dataset_of(record))

    def __repr__(self) -> str:
        rows = f"{len(self.tasks)} tasks, {self.manifest['cycles']} cycles, {self.manifest['workers']} workers"
        place = f" from {self.folder}" if self.folder else ""
        return f"<Profile {self.title}: {rows}, {self.manifest['status']}{place}>"

    def _repr_html_(self) -> str:
        return profile_html(self)

    @property
    def figures(self) -> Figures:
        """Small figures for a notebook."""
        return Figures(self)

    @property
    def tasks(self) -> pd.DataFrame:
        """One row per executed task."""
        return self.frames["tasks"]

    @property
    def intervals(self) -> pd.DataFrame:
        """What went on inside tasks."""
        return self.frames["intervals"]

    @property
    def counters(self) -> pd.DataFrame:
        """What kernels counted, task by task."""
        return self.frames["counters"]

    @property
    def edges(self) -> pd.DataFrame:
        """Which task waited for which."""
        return self.frames["edges"]

    @property
    def transfers(self) -> pd.DataFrame:
        """Bytes that crossed workers."""
        return self.frames["transfers"]

    @property
    def threads(self) -> pd.DataFrame:
        """Every worker thread."""
        return self.frames["threads"]

    @property
    def tile_count(self) -> int:
        """Tiles of the mesh."""
        return len(self.manifest["mesh"]["tiles"])

    @property
    def timed_steps(self) -> tuple[str, ...]:
        """Steps that waited for a set time instead of computing, as the manifest names them."""
        return tuple(cast(dict[str, Any], self.manifest).get("timed_steps", ()))

    @cached_property
    def ledger(self) -> Ledger:
        """Every core-second in one account."""
        return ledger_of(self.frames, self.timed_steps)

    def why(self, tile: int | Sequence[int] | None = None, cycle: int | None = None, step: str | None = None) -> Why:
        """Why a thread stood idle: the longest wait, or the longest before the tasks named.

        Parameters
        ----------
        tile : int or sequence of int, optional
            Its number, or its place in the grid of tiles, counted from 0.
        cycle : int, optional
        step : str, optional

        Raises
        ------
        ChoiceError
            The run has no such tile, cycle, step or task.
        """
        tiles = self.manifest["mesh"]["tiles"]
        return why(self.ledger, self.frames, tiles, self.title, tile=tile, cycle=cycle, step=step)

    @property
    def title(self) -> str:
        """Name of the scenario, and mode."""
        return f"{self.manifest['scenario'].get('name', '?')}, {self.manifest['mode']}"

    @cached_property
    def work(self) -> pd.DataFrame:
        """Kernel time by step; see :func:`breakstep.profile.work.work_by_step`."""
        return work_by_step(self.frames)

    @cached_property
    def imbalance(self) -> pd.DataFrame:
        """Unevenness by step; see :func:`breakstep.profile.work.imbalance_by_step`."""
        return imbalance_by_step(self.frames, self.tile_count)

    @cached_property
    def counters_by_step(self) -> pd.DataFrame:
        """Sums of what kernels counted."""
        return counters_by_step(self.frames)

    @cached_property
    def traffic(self) -> Traffic:
        """Bytes moved between workers."""
        return traffic_of(self.frames)

    @cached_property
    def live(self) -> LiveBytes:
        """Live bytes over the run."""
        return live_bytes(self.frames, data_kinds(cast(dict[str, Any], self.manifest)))

    @cached_property
    def demand(self) -> pd.DataFrame:
        """Bytes that steps read across tile faces; see :func:`breakstep.profile.demand.demand_of`."""
        return demand_of(self.frames, cast(dict[str, Any], self.manifest))
