"""Which ready task a worker takes first: the oldest cycle's, then the one with the longest way to its cycle's end.

That is the resident dispatch's rule. It measures ways through a worker's own tiles only, in the cycle before; here
the costs of the cycle itself are taken.
"""

from __future__ import annotations

import numpy as np

from breakstep.forecast.graph import Int32s
from breakstep.forecast.program import Floats
from breakstep.forecast.unfold import Unfolded


def ranks(unfolded: Unfolded, tile_owner: Int32s, by_phase: Floats) -> Int32s:
    """Rank of each node, lower first.

    Parameters
    ----------
    by_phase : ndarray of float64, shape (phases, tiles)
        Duration of each step task [ns].
    """
    program = unfolded.program
    ahead = by_phase.copy()
    for number in range(len(program.phases) - 1, -1, -1):
        phase = program.phases[number]
        for source, place in phase.reads:
            if program.phases[source].cycle != phase.cycle:
                continue
            pattern = program.patterns[place]
            own = tile_owner[pattern.producer] == tile_owner[pattern.consumer]
            longest = np.zeros(program.tile_count)
            np.maximum.at(longest, pattern.producer[own], ahead[number][pattern.consumer[own]])
            ahead[source] = np.maximum(ahead[source], by_phase[source] + longest)
    cycles = np.repeat([phase.cycle for phase in program.phases], program.tile_count)
    order = np.lexsort((np.arange(ahead.size), -ahead.reshape(-1), cycles))
    found = np.zeros(unfolded.graph.tasks, dtype=np.int32)
    found[unfolded.steps[order]] = np.arange(ahead.size, dtype=np.int32)
    return found
