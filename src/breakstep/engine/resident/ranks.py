"""Ranks: how urgent a task is, as the longest path of measured costs that still lies ahead in its cycle.

Costs are those of the newest cycle that this worker has completed. Paths run through own tiles only: what
other workers do is not measured here. A rank decides the order of ready tasks and nothing else, so
results do not depend on it.
"""

from __future__ import annotations

from breakstep.engine.resident.plan import WorkerPlan
from breakstep.graph.unroll import Phase

Place = tuple[int, int]  # stage, iteration


class Ranks:
    """Ranks of one worker's tasks.

    Parameters
    ----------
    plan : WorkerPlan
    """

    def __init__(self, plan: WorkerPlan) -> None:
        self.plan = plan
        self._orders = len(plan.program.template.orders)
        self._costs: dict[int, dict[Place, dict[int, int]]] = {}  # cycle -> place -> tile -> ns
        self._ranks: dict[int, dict[Place, dict[int, int]]] = {}  # order -> place -> tile -> rank

    def of_phase(self, phase: Phase) -> dict[int, int]:
        """Rank of each own tile's task [ns]; empty before anything was measured."""
        ranks = self._ranks.get(phase.cycle % self._orders, {})
        place = (phase.stage.index, phase.iteration)
        while place not in ranks and place[1] > 0:  # an iteration more than the cycle before had
            place = (place[0], place[1] - 1)
        return ranks.get(place, {})

    def note(self, phase: Phase, tile: int, nanoseconds: int) -> None:
        """What a task cost."""
        cycle = self._costs.setdefault(phase.cycle, {})
        cycle.setdefault((phase.stage.index, phase.iteration), {})[tile] = nanoseconds

    def close(self, cycle: int) -> None:
        """A cycle is complete: work its ranks out, from the last phase back."""
        costs = self._costs.pop(cycle, {})
        for old in [c for c in self._costs if c < cycle]:
            del self._costs[old]
        ranks: dict[Place, dict[int, int]] = {}
        ahead: dict[int, int] = {}
        for place in reversed(costs):  # in order of first completion, which is program order for one tile
            ahead = self._before(place, costs[place], ahead)
            ranks[place] = ahead
        self._ranks[cycle % self._orders] = ranks

    def _before(self, place: Place, costs: dict[int, int], ahead: dict[int, int]) -> dict[int, int]:
        """Ranks one phase earlier: own cost and the longest path among those that follow it."""
        reach = self._reach(place[0])
        return {
            tile: costs.get(tile, 0) + max((ahead.get(n, 0) for n in (tile, *reach.get(tile, ()))), default=0)
            for tile in self.plan.tiles
        }

    def _reach(self, stage: int) -> dict[int, tuple[int, ...]]:
        """Own tiles that a stage's next readers may be: its neighbours by the widest of its own halos."""
        halos = self.plan.stage(stage).halos
        return halos[0].here if halos else {}
