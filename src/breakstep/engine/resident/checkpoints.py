"""Checkpoints in the making on one worker: the state that a cycle ends with, pinned until it is saved.

A state is pinned as soon as all phases of its cycle are emitted. It is then read like a task's input: its arrays are
held until they are saved, and the order to save goes out when the last of them, and the last result of a reduction
that the next cycles begin with, is there.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from breakstep.engine.resident.cycles import Cycles
from breakstep.engine.resident.results import Results
from breakstep.engine.resident.states import Exits, PhaseState, Save, Waiter
from breakstep.graph.unroll import ValueRef


class Checkpoint(Waiter):
    """A cycle's end that is to be saved.

    Attributes
    ----------
    fields : mapping of str to PhaseState
        Which phase holds each field.
    values : mapping of str to list of ValueRef
        For each cycle-level reduction, the results to go on with.
    """

    __slots__ = ("cycle", "fields", "values")

    def __init__(self, cycle: int, fields: Mapping[str, PhaseState], values: Mapping[str, Sequence[ValueRef]]) -> None:
        super().__init__()
        self.cycle, self.fields, self.values = cycle, fields, values

    def phases(self) -> list[PhaseState]:
        """Phases whose arrays of own tiles are pinned, each once."""
        return list(dict.fromkeys(self.fields.values()))


class Checkpoints:
    """Checkpoints that are not saved.

    Parameters
    ----------
    tiles : sequence of int
        Own tiles.

    Attributes
    ----------
    open : dict of int to Checkpoint
        By cycle.
    """

    def __init__(self, tiles: Sequence[int], results: Results, cycles: Cycles, exits: Exits) -> None:
        self.open: dict[int, Checkpoint] = {}
        self._tiles, self._results, self._cycles, self._exits = tiles, results, cycles, exits

    def pin(self, cycle: int, fields: Mapping[str, PhaseState], values: Mapping[str, Sequence[ValueRef]]) -> None:
        """All phases of a cycle are emitted, and the newest versions of all fields are its end."""
        checkpoint = self.open[cycle] = Checkpoint(cycle, fields, values)
        self._cycles.of(cycle).controls += 1
        checkpoint.missing += 1  # until everything is registered
        for state in checkpoint.phases():
            state.read(self._tiles, checkpoint)
        for instance in {ref.instance for refs in values.values() for ref in refs}:
            self._results.need(instance, checkpoint)
        self._exits.satisfy(checkpoint)

    def save(self, checkpoint: Checkpoint) -> None:
        """Everything is there."""
        known = self._results.known
        tiles = {
            tile: {name: state.held[tile][name] for name, state in checkpoint.fields.items()} for tile in self._tiles
        }
        values = {
            name: np.stack([known[ref.instance][ref.row] for ref in refs]) for name, refs in checkpoint.values.items()
        }
        self._exits.out.append(Save(checkpoint.cycle, tiles, values))

    def saved(self, cycle: int) -> list[PhaseState]:
        """A checkpoint is on disk; returns the phases that it pinned."""
        checkpoint = self.open.pop(cycle)
        self._cycles.of(cycle).controls -= 1
        return checkpoint.phases()
