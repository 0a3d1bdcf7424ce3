"""What each barrier and each reduction is worth: alone, in the best order, and as a fair share of the whole.

Gains do not add. Two barriers may each be worthless while the other stands, and a reduction that is used at
once ties what barriers no longer tie. So all subsets are played, and each kind's share is its mean gain over all orders
of removal (Shapley), which sum to the whole.

A barrier is removed. A reduction is not: its result is used one cycle (or iteration) later than in the record,
with the extra iterations that this costs a repeat.
"""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from breakstep.forecast.basis import Basis
from breakstep.forecast.dynamic import replay_owner
from breakstep.forecast.fixed import Schedule, Variant, fixed_makespans
from breakstep.forecast.graph import Int64s
from breakstep.forecast.machines import Machine
from breakstep.forecast.question import Question
from breakstep.forecast.scene import Scene
from breakstep.forecast.subsets import fair_shares

MOST_KINDS = 8  # 256 subsets
DYNAMIC_TASKS = 20_000  # larger graphs are played with lockstep's order kept, many subsets at once
LIMIT_SHARE = 0.01  # of lockstep's time: what reductions hold back beyond it is worth a sentence


@dataclass(frozen=True)
class Kind:
    """Something that ties tasks together.

    Attributes
    ----------
    what : str
        In words.
    stages : tuple of str
        Stages whose barriers it stands for.
    reduction : str
        Or the reduction that it stands for.
    """

    what: str
    stages: tuple[str, ...] = ()
    reduction: str = ""


@dataclass(frozen=True)
class Ranking:
    """Every subset of kinds.

    Attributes
    ----------
    kinds : tuple of Kind
    makespans : ndarray of int64, shape (2 ** kinds,)
        Bit j of the index: kind j is removed, or used later [ns].
    tied_ns, free_ns : int
        Without barriers, with all reductions as recorded and with none [ns].
    """

    kinds: tuple[Kind, ...]
    makespans: Int64s
    tied_ns: int
    free_ns: int

    @property
    def all_barriers(self) -> int:
        """The subset of all barriers and no reduction."""
        return sum(1 << place for place, kind in enumerate(self.kinds) if kind.stages)

    def rows(self) -> list[dict[str, Any]]:
        """One row for each kind, the largest fair share first."""
        whole, shares = self.makespans, fair_shares(self.makespans)
        order, marginal = best_order(whole)
        rows = [
            {
                "what": kind.what,
                "alone_s": float(whole[0] - whole[1 << place]) * 1e-9,
                "in_order_s": float(marginal[place]) * 1e-9,
                "share_s": float(shares[place]) * 1e-9,
                "place_in_order": order.index(place) + 1,
            }
            for place, kind in enumerate(self.kinds)
        ]
        return sorted(rows, key=lambda row: -float(row["share_s"]))

    def tie(self) -> dict[str, Any]:
        """How far reductions limit what leaving the barriers out gains."""
        lockstep, barriers = int(self.makespans[0]), int(self.makespans[self.all_barriers])
        held = self.tied_ns - self.free_ns
        later = barriers - int(self.makespans[-1])
        gain = lockstep - barriers
        limit = held > LIMIT_SHARE * lockstep and held > 0.5 * max(gain, 0)
        return {
            "reductions_limit_gain": bool(limit),
            "lockstep_s": lockstep * 1e-9,
            "barriers_gain_s": gain * 1e-9,
            "held_by_reductions_s": held * 1e-9,
            "later_reductions_gain_s": later * 1e-9,
            "all_gain_s": float(lockstep - int(self.makespans[-1])) * 1e-9,
            "gain_without_reductions_s": float(lockstep - self.free_ns) * 1e-9,
        }


def best_order(makespans: Int64s) -> tuple[list[int], list[int]]:
    """The order of removal whose gains, summed after each removal, are largest; and each kind's gain in it [ns].

    Found exactly, subset by subset. Taking the largest next gain each time can miss it.
    """
    count = len(makespans).bit_length() - 1
    gain = int(makespans[0]) - makespans.astype(np.int64)
    best, last = np.zeros(len(makespans), dtype=np.int64), np.zeros(len(makespans), dtype=np.int64)
    for subset in range(1, len(makespans)):
        inside = [kind for kind in range(count) if subset >> kind & 1]
        before = [int(best[subset ^ (1 << kind)]) for kind in inside]
        place = int(np.argmax(before))
        best[subset], last[subset] = before[place] + gain[subset], inside[place]
    order, marginal, subset = [], [0] * count, len(makespans) - 1
    while subset:
        kind = int(last[subset])
        order.append(kind)
        marginal[kind] = int(gain[subset] - gain[subset ^ (1 << kind)])
        subset ^= 1 << kind
    return order[::-1], marginal


def kinds_of_program(scene: Scene, alone: dict[str, int]) -> tuple[Kind, ...]:
    """At most eight kinds: reductions, the barriers that gain most alone, and the others as one.

    Parameters
    ----------
    alone : dict of str to int
        By stage, what removing its barrier alone gains [ns].
    """
    program = scene.program
    reductions = [
        Kind(f"{name} used {in_units(program.lags[name] + 1, name in program.verdicts)} late", reduction=name)
        for name in program.lags
        if name in program.verdicts or any(name in used for used in program.uses.values())
    ][:3]
    stages = sorted(program.stages, key=lambda stage: -alone[stage])
    room = MOST_KINDS - len(reductions)
    if len(stages) <= room:
        return (*(Kind(f"barrier behind {stage}", (stage,)) for stage in stages), *reductions)
    first, others = stages[: room - 1], tuple(stages[room - 1 :])
    named = Kind(f"other barriers ({', '.join(others)})", others)
    return (*(Kind(f"barrier behind {stage}", (stage,)) for stage in first), named, *reductions)


def in_units(lag: int, is_verdict: bool) -> str:
    """A lag in words: cycles, or iterations for a verdict."""
    unit = "iteration" if is_verdict else "cycle"
    return f"{lag} {unit if lag == 1 else unit + 's'}"


def rank_kinds(basis: Basis, machine: Machine, question: Question, workers: int) -> Ranking:
    """Play every subset.

    Durations are those of lockstep throughout, crowding included, so that subsets differ by ties alone.
    """
    scene = Scene.of(basis, machine, question, workers)
    graph, stages = scene.unfolded.graph, scene.program.stages
    single = [graph.without([graph.edge_kinds.index(f"barrier:{stage}")]) for stage in stages]
    spans = _played(scene, [scene.unfolded.lockstep, *single])
    alone = {stage: int(spans[0] - span) for stage, span in zip(stages, spans[1:], strict=True)}
    kinds = kinds_of_program(scene, alone)
    barriers = [kind for kind in kinds if kind.stages]
    reductions = [kind.reduction for kind in kinds if kind.reduction]
    makespans = np.zeros(1 << len(kinds), dtype=np.int64)
    for chosen in range(1 << len(reductions)):
        later = [name for place, name in enumerate(reductions) if chosen >> place & 1]
        lags = {name: scene.program.lags[name] + 1 for name in later}
        asked = replace(question, lags={**question.lags, **lags})
        variant = Scene.of(basis, machine, asked, workers) if lags else scene
        low = chosen << len(barriers)
        makespans[low : low + (1 << len(barriers))] = _played(variant, _masks(variant, barriers))
    free = scene.unfolded.tasked & ~sum(1 << k for k in scene.unfolded.graph.kinds_of("reduction:"))
    tied, untied = _played(scene, [scene.unfolded.tasked, free])
    return Ranking(kinds, makespans, int(tied), int(untied))


def _masks(scene: Scene, barriers: Sequence[Kind]) -> list[int]:
    """For each subset of barriers, the edge kinds that stay in force."""
    graph = scene.unfolded.graph
    codes = [[graph.edge_kinds.index(f"barrier:{stage}") for stage in kind.stages] for kind in barriers]
    chosen = itertools.product(*((False, True) for _ in barriers))
    return [
        graph.without([code for is_off, group in zip(reversed(pick), codes, strict=True) if is_off for code in group])
        for pick in chosen
    ]


def _played(scene: Scene, masks: Sequence[int]) -> Int64s:
    """Makespans under choices of edge kinds, all with lockstep's durations [ns]."""
    graph, model = scene.graph(scene.unfolded.lockstep), scene.setting.model
    if scene.program.tasks <= DYNAMIC_TASKS:
        found = [replay_owner(graph, model, scene.owner, scene.rank, mask).makespan_ns for mask in masks]
        return np.array(found, dtype=np.int64)
    schedule = Schedule.of(replay_owner(graph, model, scene.owner, scene.rank, scene.unfolded.lockstep))
    return fixed_makespans(graph, schedule, [Variant(model, mask) for mask in masks])
