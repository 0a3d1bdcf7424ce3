"""The answer to a forecast's question: lockstep and tasked over numbers of workers, and how far to trust it.

Next to every figure stands what the same method says of the machine of recording, where it can be compared with
what was measured. Three figures are given for leaving barriers out: with the order that workers find while playing,
which may by bad luck be longer than with barriers (Graham's anomalies); with the order of lockstep kept, which
cannot; and bounds, below which no order of the tasked run goes, its tiles, messages and crowding being what they are on
so many workers. So these may rise with the workers. What no order and no placement goes below, in either mode, is
``least_s``.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from breakstep.forecast.basis import Basis
from breakstep.forecast.lift import Lifted
from breakstep.forecast.machines import RECORDED, Machine
from breakstep.forecast.program import Floats
from breakstep.forecast.question import Question
from breakstep.forecast.scene import Scene, by_stage
from breakstep.forecast.setting import recorded_machine
from breakstep.forecast.weak import weak_row

DRAWS = 16  # of a makespan's spread: its standard deviation is then known to about a fifth
MOST_TASKS = 4_000_000  # played for one interval; beyond, fewer draws are made, but at least FEWEST
FEWEST = 4
SPREAD = 1.96  # standard deviations to either side of which 95 % lie, were they normal
MODES = ("lockstep", "tasked")
WEAK = (
    "The mesh grows with the workers: recorded costs side by side, mirrored, each task's drawn anew; fewer tiles"
    " than were recorded are a corner of them; bounds are those of mean costs, and memory and bytes are not followed."
)
ONE_RUN = (
    "No mode was recorded twice: intervals hold what differs from task to task, not what differs from run to run, which"
    " is usually more. Give several runs."
)
MOST_WORKERS = 65536  # of a growing mesh, where the user names no numbers


@dataclass(frozen=True)
class Span:
    """A makespan and the interval in which repeats would lie, were machine and method as described [s]."""

    seconds: float
    low: float
    high: float


def kinds_of(scene: Scene, mode: str) -> int:
    """Edge kinds in force in a mode."""
    return scene.unfolded.lockstep if mode == "lockstep" else scene.unfolded.tasked


def span_of(scene: Scene, basis: Basis, kinds: int, draws: int = DRAWS) -> Span:
    """Play once as expected, and several times with costs drawn from what repeats showed."""
    expected = scene.expected_ns(kinds) * 1e-9
    spread = np.std(drawn(scene, basis, kinds, draws), ddof=1)
    half = SPREAD * float(spread)
    return Span(expected, max(expected - half, 0.0), expected + half)


def drawn(scene: Scene, basis: Basis, kinds: int, draws: int = DRAWS) -> Floats:
    """Makespans with drawn costs [s]; the same draws whatever the barriers, so that differences can be taken."""
    draws = max(FEWEST, min(draws, MOST_TASKS // max(scene.program.tasks, 1)))
    random = np.random.default_rng(1)
    noise = basis.noise
    found = []
    for _ in range(draws):
        level = 1.0 + (random.choice(noise.runs) - 1.0) * _widening(len(noise.runs))
        factor = level * by_stage(scene.program, noise.tasks, random)
        found.append(scene.play(kinds, factor).makespan_ns * 1e-9)
    return np.array(found)


def _widening(runs: int) -> float:
    """A few runs spread less about their own mean than about the true one."""
    return float(np.sqrt(runs / (runs - 1.0))) if runs > 1 else 1.0


def recorded_errors(basis: Basis, runs: Sequence[Lifted] | None = None) -> dict[str, dict[str, Any]]:
    """What was measured, and what the method says of it, by mode.

    Parameters
    ----------
    runs : sequence of Lifted, optional
        Runs to compare with; those of the basis if not given, with as many workers and threads as the first.
    """
    chosen = basis.runs if runs is None else runs
    first = chosen[0]
    here = [run for run in chosen if (run.workers, run.threads) == (first.workers, first.threads)]
    machine = recorded_machine(first)
    scene = Scene.of(basis, machine, _as_recorded(basis, first), first.workers)
    found: dict[str, dict[str, Any]] = {}
    for mode in MODES:
        spans = [run.span_ns * 1e-9 for run in here if run.mode == mode]
        if spans:
            forecast = scene.expected_ns(kinds_of(scene, mode)) * 1e-9
            measured = float(np.median(spans))
            found[mode] = {
                "measured_s": measured,
                "forecast_s": forecast,
                "error": forecast / measured - 1.0,
                "runs": len(spans),
                "spread": (max(spans) - min(spans)) / measured,
                "workers": first.workers,
                "threads": first.threads,
            }
    return found


def _as_recorded(basis: Basis, run: Lifted) -> Question:
    """Placement of the run that is compared with, where it is not the first of the basis, and its stretched waits."""
    named = str(run.profile.manifest["notes"].get("placement", "blocks"))
    same = run.workers == basis.first.workers
    return Question(
        threads=run.threads,
        placement="" if same or named in ("shared", "dask") else named,
        factors=dict.fromkeys(run.timed, run.dilate),
    )


def worst_error(recorded: dict[str, dict[str, Any]]) -> float | None:
    """The largest error on the machine of recording, as a fraction."""
    return max((abs(facts["error"]) for facts in recorded.values()), default=None)


def row_of(basis: Basis, machine: Machine, question: Question, workers: int, draws: int = DRAWS) -> dict[str, Any]:
    """Both modes for one number of workers. Workers beyond the tiles have nothing to do."""
    if question.weak:
        return weak_row(basis, machine, question, workers)
    alone = Scene.of(basis, machine, question, 1)
    tiles = alone.program.tile_count
    scene = Scene.of(basis, machine, question, min(workers, tiles))
    lockstep, tasked = scene.unfolded.lockstep, scene.unfolded.tasked
    spans = {mode: span_of(scene, basis, kinds_of(scene, mode), draws) for mode in MODES}
    bounds, slots = scene.bounds(tasked), workers * scene.setting.model.threads
    replay = scene.play(tasked)
    row: dict[str, Any] = {
        "workers": workers,
        "threads": scene.setting.model.threads,
        "busy_workers": min(workers, tiles),
    }
    for mode, span in spans.items():
        row |= {f"{mode}_s": span.seconds, f"{mode}_low_s": span.low, f"{mode}_high_s": span.high}
        row[f"{mode}_efficiency"] = scene.work_ns(kinds_of(scene, mode)) * 1e-9 / (slots * span.seconds)
    row |= {
        "tasked_fixed_s": scene.kept_ns(lockstep, tasked) * 1e-9,
        "area_bound_s": bounds["area"] * 1e-9,
        "path_bound_s": bounds["path"] * 1e-9,
        "worker_bound_s": bounds["worker"] * 1e-9,
        "least_s": min(alone.least_ns(kinds_of(alone, mode), slots) for mode in MODES) * 1e-9,
        "memory_bytes": scene.memory(replay),
        "moved_bytes": int(replay.received_bytes.sum()),
        "cores": machine.slots,
        "fits_memory": not scene.setting.model.memory_bytes or scene.memory(replay) <= scene.setting.model.memory_bytes,
    }
    return row


def _is_repeated(basis: Basis) -> bool:
    modes = [run.mode for run in basis.runs]
    return len(modes) > len(set(modes))


def default_workers(basis: Basis, machine: Machine, question: Question) -> list[int]:
    """Doubling from 1 to what machine and tiles allow, the recorded number among them."""
    threads = question.threads or machine.threads
    tiles = len(Scene.of(basis, machine, question, 1).program.tiles.origin)
    most = max(1, min(machine.slots // threads, MOST_WORKERS if question.weak else tiles))
    found = {min(2**power, most) for power in range(most.bit_length() + 1)}
    return sorted(found | ({basis.first.workers} if machine.name == RECORDED else set()))


def answer(basis: Basis, machine: Machine, question: Question, workers: Sequence[int]) -> dict[str, Any]:
    """All figures of a forecast.

    Parameters
    ----------
    workers : sequence of int
        Numbers of workers; chosen by machine and tiles if empty.
    """
    if question.workers is not None and not workers:
        workers = [question.workers]
    chosen = list(workers) or default_workers(basis, machine, question)
    recorded = recorded_errors(basis)
    return {
        "machine": {"name": machine.name, "title": machine.title, "common_practice": list(machine.common_practice)},
        "recorded": recorded,
        "rows": [row_of(basis, machine, replace(question, workers=None), count) for count in chosen],
        "tiles": basis.program.tile_count,
        "messages_seen": basis.dispatch.seen,
        "runs": len(basis.runs),
        "notes": [WEAK] * bool(question.weak) + [ONE_RUN] * (not _is_repeated(basis)),
    }
