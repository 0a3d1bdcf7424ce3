"""Ranks: how urgent a task is, as the longest path of measured costs that still lies ahead in its cycle.

Costs are those of the newest cycle that this worker has done. Paths follow data, and the verdicts that let iterations
go on; they run through own tiles only, for what other workers do is not measured here. A rank decides the order of
ready tasks and nothing else, so results do not depend on it.
"""

from __future__ import annotations

from collections.abc import Mapping

from breakstep.engine.resident.plan import WorkerPlan
from breakstep.graph.unroll import Phase

Place = tuple[int, int]  # stage, iteration
ByTile = dict[int, int]  # own tile -> ns


class Ranks:
    """Ranks of one worker's tasks.

    Parameters
    ----------
    plan : WorkerPlan
    """

    def __init__(self, plan: WorkerPlan) -> None:
        self._plan = plan
        self._orders = len(plan.program.template.orders)
        self._cycles: dict[int, dict[int, tuple[Phase, ByTile]]] = {}  # cycle -> phase -> costs
        self._ranks: dict[int, dict[Place, ByTile]] = {}  # order -> ranks

    def of_phase(self, phase: Phase) -> Mapping[int, int]:
        """Rank of each own tile's task [ns]; empty before anything was measured."""
        ranks = self._ranks.get(phase.cycle % self._orders, {})
        place = (phase.stage.index, phase.iteration)
        while place not in ranks and place[1] > 0:  # an iteration more than the cycle before had
            place = (place[0], place[1] - 1)
        return ranks.get(place, {})

    def emit(self, phase: Phase) -> None:
        """A phase of a cycle that is not done."""
        self._cycles.setdefault(phase.cycle, {})[phase.number] = (phase, {})

    def note(self, phase: Phase, tile: int, nanoseconds: int) -> None:
        """What a task cost."""
        self._cycles[phase.cycle][phase.number][1][tile] = nanoseconds

    def close(self, before: int) -> None:
        """Cycles before this one are done: work the newest's ranks out."""
        for cycle in sorted(cycle for cycle in self._cycles if cycle < before):
            self._ranks[cycle % self._orders] = self._longest_paths(self._cycles.pop(cycle))

    def _longest_paths(self, phases: Mapping[int, tuple[Phase, ByTile]]) -> dict[Place, ByTile]:
        """From the last phase back: own cost, and the longest path among the tasks that wait for it."""
        ahead: dict[int, ByTile] = {number: dict.fromkeys(self._plan.tiles, 0) for number in phases}
        makers = {making.instance: number for number, (phase, _) in phases.items() for making in phase.makes}
        ranks = {}
        for number, (phase, costs) in reversed(list(phases.items())):
            ranks[phase.stage.index, phase.iteration] = mine = {
                tile: path + costs.get(tile, 0) for tile, path in ahead.pop(number).items()
            }
            self._lengthen(phase, mine, ahead)
            if phase.gate is not None and mine:
                behind = ahead[makers[phase.gate.instance]]
                longest = max(mine.values())
                behind.update({tile: max(path, longest) for tile, path in behind.items()})
        return ranks

    def _lengthen(self, phase: Phase, mine: ByTile, ahead: dict[int, ByTile]) -> None:
        """Paths ahead of what a phase reads go through it."""
        for source, reach in self._plan.reaches(phase):
            behind = ahead.get(source)
            if behind is None:  # of another cycle
                continue
            for tile, path in mine.items():
                for other in reach.here[tile]:
                    if behind[other] < path:
                        behind[other] = path
