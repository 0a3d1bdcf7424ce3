"""Lifting: from a recorded run to its phases, with what each task cost and what it waited for.

What belongs to one machine (who ran what, packed rims, nodes of trees, counters of barriers) is stripped off; what
is left is the program: phases, tiles, which task reads which, which reduction is made by which phase and used
where, and where barriers can stand. It knows neither physics nor schedules, and guesses no cost.

Two things that decide when a task may start are not edges of the record. A dispatch emits what follows a
repeat only when it knows the verdict that ended it, and no cycle before the window allows. Both are
restored here, from iterations that were passed through and from lags.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from breakstep.errors import ProfileError
from breakstep.forecast.trees import Reductions, reductions_of
from breakstep.profile.frames import Integers, codes_of, integers, positions, words_of
from breakstep.profile.run import Profile
from breakstep.profile.schema import EDGE_KINDS, TASK_KINDS

Flags = NDArray[np.bool_]


@dataclass(frozen=True)
class Costs:
    """What every step task of one recorded run cost, shape (phases, tiles) each [ns].

    Attributes
    ----------
    kernel, cpu : dict of str to ndarray
        By step, time inside its kernel: by the clock, and on a processor. Of a step that only waited: the time that
        it was to wait, without the stretching of a rehearsal and without what it woke up late, in both.
    halo, pack : ndarray
        Putting ghost zones together; cutting rims for other workers.
    halo_cpu, pack_cpu : ndarray
        The same on a processor.
    rest : ndarray
        What is left of the task: gathering, checks, bookkeeping.
    """

    kernel: Mapping[str, Integers]
    cpu: Mapping[str, Integers]
    halo: Integers
    pack: Integers
    halo_cpu: Integers
    pack_cpu: Integers
    rest: Integers


@dataclass(frozen=True)
class Lifted:
    """A recorded run as phases. Task ``i`` of the program is phase ``i // tiles``, tile ``i % tiles``.

    Attributes
    ----------
    profile : Profile
        Where it comes from.
    stage, cycle, iteration : ndarray of int64, shape (phases,)
        Place in ``stages``; cycle, -1 before the first; iteration, -1 outside repeats.
    stages : tuple of str
    worker, thread, start, end : ndarray of int64, shape (phases, tiles)
        Who ran each task, and when [ns].
    skipped : ndarray of bool, shape (phases,)
        Phases that passed their fields through.
    output : ndarray of int64, shape (phases, tiles)
        [bytes]
    producer, consumer : ndarray of int64
        Tasks of the program: who reads whose arrays.
    reductions : Reductions
    """

    profile: Profile
    stages: tuple[str, ...]
    stage: Integers
    cycle: Integers
    iteration: Integers
    worker: Integers
    thread: Integers
    start: Integers
    end: Integers
    skipped: Flags
    output: Integers
    producer: Integers
    consumer: Integers
    reductions: Reductions
    costs: Costs

    @property
    def phases(self) -> int:
        """How many phases."""
        return len(self.stage)

    @property
    def tiles(self) -> int:
        """Tiles of the mesh."""
        return int(self.start.shape[1])

    @property
    def is_lockstep(self) -> bool:
        """Whether a barrier stood behind every stage."""
        names = {part for stage in self.stages for part in stage.split("+")}
        return names <= set(self.profile.manifest["barriers"])

    @property
    def mode(self) -> str:
        """``lockstep``, ``tasked``, or ``partly`` where some barriers were on."""
        return "lockstep" if self.is_lockstep else "partly" if self.profile.manifest["barriers"] else "tasked"

    @property
    def span_ns(self) -> int:
        """From the first task's start to the last task's end [ns]."""
        return int(self.end.max() - self.start.min())

    @property
    def window(self) -> int:
        """Cycles that could be in flight at once."""
        return int(self.profile.manifest["notes"].get("window", 4))

    @property
    def timed(self) -> tuple[str, ...]:
        """Steps that only waited, by records of times."""
        return tuple(self.profile.timed_steps)

    @property
    def dilate(self) -> float:
        """Factor by which their waits were stretched."""
        return _dilation(self.profile)

    @property
    def workers(self) -> int:
        """Workers of the run."""
        return int(self.profile.manifest["workers"])

    @property
    def threads(self) -> int:
        """Threads of each worker."""
        return max(int(self.profile.manifest["threads"]) // max(self.workers, 1), 1)

    @property
    def cores(self) -> int:
        """Cores of the machine it ran on, as far as the driver saw it."""
        return int(self.profile.manifest["machine"].get("cpus", 1) or 1)

    def same_program(self, other: Lifted) -> bool:
        """Whether another run executed the same phases on the same tiles."""
        return (
            self.tiles == other.tiles
            and self.phase_names() == other.phase_names()
            and bool(np.array_equal(self.cycle, other.cycle))
            and bool(np.array_equal(self.iteration, other.iteration))
        )

    def phase_names(self) -> list[str]:
        """The stage of each phase."""
        return [self.stages[code] for code in self.stage]


def lift(profile: Profile) -> Lifted:
    """Strip a recorded run to its program.

    Raises
    ------
    ProfileError
        The run did not complete, or lost a worker on the way, so that its phases are not whole.
    """
    _refuse_unfinished(profile)
    tasks = profile.tasks
    kind = codes_of(tasks, "kind", TASK_KINDS)
    rows = np.flatnonzero(kind == TASK_KINDS.index("step"))
    tiles = profile.tile_count
    _refuse_broken(profile, integers(tasks, "tile")[rows], tiles)
    shape = (len(rows) // tiles, tiles)
    first = rows[::tiles]
    code, stages = words_of(tasks, "stage")
    place = np.full(len(tasks), -1, dtype=np.int64)
    place[rows] = np.arange(len(rows))
    links = _links(profile)
    producer, consumer = _data_edges(kind, place, links)

    def grid(column: str) -> Integers:
        return integers(tasks, column)[rows].reshape(shape)

    start, end = grid("start_ns"), grid("end_ns")
    cycle, iteration = integers(tasks, "cycle")[first], integers(tasks, "iteration")[first]
    skipped: Flags = np.asarray(tasks["skipped"].to_numpy(dtype=bool)[rows].reshape(shape).all(axis=1))
    lags = profile.manifest["notes"].get("lags", {})
    reductions = reductions_of(
        kind, place, code, stages, links, tiles, cycle=cycle, iteration=iteration, skipped=skipped, lags=lags
    )
    used = np.unique(code[first])
    return Lifted(
        profile=profile,
        stages=tuple(stages[c] for c in used),
        stage=np.searchsorted(used, code[first]).astype(np.int64),
        cycle=cycle,
        iteration=iteration,
        worker=grid("worker"),
        thread=grid("thread"),
        start=start,
        end=end,
        skipped=skipped,
        output=grid("output_bytes"),
        producer=producer,
        consumer=consumer,
        reductions=reductions,
        costs=_costs(profile, place, end - start),
    )


def _refuse_unfinished(profile: Profile) -> None:
    status = profile.manifest["status"]
    if status != "complete":
        raise ProfileError(
            f"{profile.folder}: a forecast needs a complete run, this one is {status}; record it again to its end"
        )


def _refuse_broken(profile: Profile, tile: Integers, tiles: int) -> None:
    if not len(tile):
        raise ProfileError(
            f"{profile.folder}: a forecast needs tasks, this run has none, as when it was resumed with no cycle left;"
            " give the run that did the cycles"
        )
    if len(tile) % tiles or np.any(tile.reshape(-1, tiles) != np.arange(tiles)):
        raise ProfileError(
            f"{profile.folder}: a forecast needs whole phases, one task for each of {tiles} tiles; this run"
            " lost some on the way; record it again without losing a worker"
        )


Links = tuple[Integers, Integers, Integers]  # producer, consumer (positions in the table), kind


def _links(profile: Profile) -> Links:
    numbers, edges = integers(profile.tasks, "task"), profile.edges
    return (
        positions(numbers, integers(edges, "producer")),
        positions(numbers, integers(edges, "consumer")),
        codes_of(edges, "kind", EDGE_KINDS),
    )


def _data_edges(kind: Integers, place: Integers, links: Links) -> tuple[Integers, Integers]:
    """Who reads whose arrays, pack tasks left out, sorted by consumer, then producer; each pair once."""
    source, target, what = links
    data = what == EDGE_KINDS.index("data")
    source, target = source[data], target[data]
    cut = kind == TASK_KINDS.index("pack")
    behind = np.arange(len(kind), dtype=np.int64)
    behind[target[cut[target]]] = source[cut[target]]  # a pack task cuts the output of one task
    real = ~cut[target]
    producer, consumer = place[behind[source[real]]], place[target[real]]
    real = (producer >= 0) & (consumer >= 0)
    pairs = np.unique(np.stack([consumer[real], producer[real]]), axis=1)
    return pairs[1], pairs[0]


def _costs(profile: Profile, place: Integers, lasted: Integers) -> Costs:
    intervals = profile.intervals
    task = place[positions(integers(profile.tasks, "task"), integers(intervals, "task"))]
    wall = integers(intervals, "end_ns") - integers(intervals, "start_ns")
    cpu = np.minimum(integers(intervals, "cpu_ns"), wall)
    what = intervals["what"].astype(str).to_numpy()
    step, steps = words_of(intervals, "step")
    own = task >= 0

    def total(chosen: Flags, values: Integers) -> Integers:
        chosen = chosen & own
        sums = np.zeros(lasted.size, dtype=np.int64)
        np.add.at(sums, task[chosen], values[chosen])
        return sums.reshape(lasted.shape)

    kernel = what == "kernel"
    used = [name for code, name in enumerate(steps) if np.any(kernel & (step == code))]
    by_step = {name: kernel & (step == steps.index(name)) for name in used}
    halo, pack = total(what == "halo", wall), total(what == "pack", wall)
    kernels = {name: total(rows, wall) for name, rows in by_step.items()}
    rest = np.maximum(lasted - halo - pack - sum(kernels.values(), np.zeros_like(lasted)), 0)
    on_processor = {name: total(rows, cpu) for name, rows in by_step.items()}
    for name in set(profile.timed_steps) & set(kernels):  # its processor time is what the wait stood for
        meant = np.rint(on_processor[name] / _dilation(profile)).astype(np.int64)
        kernels[name] = on_processor[name] = meant
    return Costs(
        kernel=kernels,
        cpu=on_processor,
        halo=halo,
        pack=pack,
        halo_cpu=total(what == "halo", cpu),
        pack_cpu=total(what == "pack", cpu),
        rest=rest,
    )


def _dilation(profile: Profile) -> float:
    manifest: Any = profile.manifest
    return float(manifest.get("dilate", 1.0)) if profile.timed_steps else 1.0


def lift_all(profiles: Sequence[Profile]) -> list[Lifted]:
    """Strip several runs of the same program.

    Raises
    ------
    ProfileError
        They are not runs of the same program.
    """
    lifted = [lift(profile) for profile in profiles]
    for other in lifted[1:]:
        if not lifted[0].same_program(other):
            raise ProfileError(
                f"{other.profile.folder}: not the program of {lifted[0].profile.folder} (other steps, cycles, tiles"
                " or iterations); give runs of one scenario with one choice of tiles"
            )
    return lifted
