"""Advice: what to try next, what it should gain and cost, and the command that tries it for real.

Each piece of advice changes one thing against a baseline that is named with it, and is played on the same machine and
costs as the baseline. Its interval holds what repeats of the recorded runs showed and, besides, how far the method
missed the recorded runs themselves. Advice that should gain less than :data:`LEAST` of the time is not given.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import Any, TypeAlias

import numpy as np

from breakstep.forecast.answer import SPREAD, drawn, kinds_of, recorded_errors
from breakstep.forecast.basis import Basis
from breakstep.forecast.grain import recorded_tile
from breakstep.forecast.machines import RECORDED, Machine
from breakstep.forecast.question import Question
from breakstep.forecast.ranking import Ranking, in_units
from breakstep.forecast.retile import mesh_shape, tile_shapes
from breakstep.forecast.scene import Scene
from breakstep.partition import ORDERS

LEAST = 0.005  # of the baseline's time
#: Error that costs of tiles which were not recorded add, as a share of the time for each doubling of a tile's extents:
#: ember_field on tiles of 96 x 96 zones took 7 to 9 % longer than was forecast from tiles of 48 x 48.
TILE_ERROR = 0.07
UNKNOWN_ERROR = 0.05  # assumed of each mode where no run of it was recorded
DRAWS = 8
LAG_KEYS = {"dt": "time_step.lag", "residual": "transport.lag"}  # of the built-in reductions, in a scenario
LATER = {
    "dt": "dt follows the state a cycle later: other steps, so answers change; the CFL factor may have to shrink",
    "residual": "one iteration more is made before the verdict counts: answers change within the tolerance",
}


@dataclass(frozen=True)
class Trial:
    """How to run something: overrides of the scenario, and options of the command.

    Attributes
    ----------
    overrides : tuple of str
        As ``--set`` takes them.
    barriers : str
        As ``--barriers`` takes them.
    placement : str
        "" for the scenario's own.
    """

    overrides: tuple[str, ...] = ()
    barriers: str = "tasked"
    placement: str = ""

    def options(self) -> str:
        """The options on a command line."""
        parts = [f"--set {_quoted(override)}" for override in self.overrides]
        parts += [f"--placement {self.placement}"] if self.placement else []
        return " ".join([*parts, f"--barriers {self.barriers}"])


def _quoted(override: str) -> str:
    return f"'{override}'" if any(sign in override for sign in ' []"*?') else override


@dataclass(frozen=True)
class Advice:
    """One thing to try.

    Attributes
    ----------
    do : str
        In words.
    against : str
        The baseline in words.
    baseline_s : float
        Time of the baseline [s].
    gain_s, low_s, high_s : float
        What it should gain, and in which interval [s].
    moved_bytes, memory_bytes : int
        More bytes moved, and more memory on the worker that holds most, than the baseline [bytes].
    answers : str
        What becomes of the answers.
    trial, baseline : Trial
    """

    do: str
    against: str
    baseline_s: float
    gain_s: float
    low_s: float
    high_s: float
    moved_bytes: int
    memory_bytes: int
    answers: str
    trial: Trial
    baseline: Trial

    def facts(self, command: str) -> dict[str, Any]:
        """Plain figures."""
        return {
            "do": self.do,
            "against": self.against,
            "baseline_s": self.baseline_s,
            "gain_s": self.gain_s,
            "low_s": self.low_s,
            "high_s": self.high_s,
            "bytes": self.moved_bytes,
            "memory_bytes": self.memory_bytes,
            "answers": self.answers,
            "command": command,
        }


Side: TypeAlias = tuple[Scene, int]  # a scene, and the edge kinds in force


@dataclass
class Adviser:
    """Looks for advice on one machine and number of workers."""

    basis: Basis
    machine: Machine
    question: Question
    workers: int
    common: tuple[str, ...] = ()
    _scenes: dict[Any, Scene] = field(default_factory=dict)

    def advice(self, ranking: Ranking) -> list[Advice]:
        """All that is worth trying, what is surest to gain most first: by the low end of its interval."""
        found = [self._without_barriers(), self._first_barrier(ranking), *self._lags(), self._both(ranking)]
        found += [self._tiles(), self._placement(), self._window()]
        given = [one for one in found if one is not None]
        return sorted(given, key=lambda one: (-one.low_s, -one.gain_s))

    def scene(self, **changes: Any) -> Scene:
        """The scene with some of the question changed."""
        key = repr(sorted(changes.items()))
        if key not in self._scenes:
            self._scenes[key] = Scene.of(self.basis, self.machine, replace(self.question, **changes), self.workers)
        return self._scenes[key]

    def _judged(
        self,
        what: tuple[str, str, str],
        before: Side,
        after: Side,
        trials: tuple[Trial, Trial],
        error: float = 0.0,
    ) -> Advice | None:
        """Advice if it should gain enough.

        Parameters
        ----------
        what : tuple of str
            What to do, against what, and what becomes of answers.
        error : float
            What else is uncertain, as a share of the time.
        """
        base = before[0].expected_ns(before[1]) * 1e-9
        gain = base - after[0].expected_ns(after[1]) * 1e-9
        if gain < LEAST * base:
            return None
        half = math.hypot(self._half(before, after, base), error * base)
        plays = [scene.play(kinds) for scene, kinds in (before, after)]
        moved = [int(play.received_bytes.sum()) for play in plays]
        memory = [scene.memory(play) for (scene, _), play in zip((before, after), plays, strict=True)]
        return Advice(
            what[0], what[1], base, gain, gain - half, gain + half, moved[1] - moved[0], memory[1] - memory[0], what[2],
            trials[1], trials[0],
        )  # fmt: skip

    def _half(self, before: Side, after: Side, base: float) -> float:
        """Half the interval's width: spread of repeats of both runs, and what the method missed [s]."""
        spread = [float(np.std(drawn(scene, self.basis, kinds, DRAWS), ddof=1)) for scene, kinds in (before, after)]
        missed = base * self._missed * (1.0 if self.machine.name == RECORDED else 2.0)
        return float(np.sqrt((SPREAD**2) * (spread[0] ** 2 + spread[1] ** 2) + missed**2))

    @property
    def _missed(self) -> float:
        """Error of a difference of two makespans over a makespan."""
        recorded = recorded_errors(self.basis)
        errors = [recorded[mode]["error"] if mode in recorded else UNKNOWN_ERROR for mode in ("lockstep", "tasked")]
        return math.hypot(*errors)

    # ---- what to try -----------------------------------------------------------------------------

    def _without_barriers(self) -> Advice | None:
        scene = self.scene()
        return self._judged(
            ("run without barriers", "lockstep", "the same to the last bit"),
            (scene, kinds_of(scene, "lockstep")), (scene, kinds_of(scene, "tasked")),
            (self._trial("lockstep"), self._trial("tasked")),
        )  # fmt: skip

    def _first_barrier(self, ranking: Ranking) -> Advice | None:
        """The barrier to remove first, with those that its names on the command line take along."""
        scene = self.scene()
        barriers = [kind for kind in ranking.kinds if kind.stages]
        first = max(barriers, key=lambda kind: self._alone(ranking, kind), default=None)
        if first is None or len(first.stages) != 1:
            return None
        gone = set(first.stages[0].split("+"))
        kept = [name for name in scene.program.barrier_names if name not in gone]
        off = [stage for stage in scene.program.stages if set(stage.split("+")) <= gone]
        if not kept:
            return None
        return self._judged(
            (f"remove the barrier behind {' and '.join(off)} first", "lockstep", "the same to the last bit"),
            (scene, kinds_of(scene, "lockstep")), (scene, scene.unfolded.without_barriers(gone)),
            (self._trial("lockstep"), self._trial(",".join(kept))),
        )  # fmt: skip

    @staticmethod
    def _alone(ranking: Ranking, kind: Any) -> int:
        return int(ranking.makespans[0] - ranking.makespans[1 << ranking.kinds.index(kind)])

    def _lags(self) -> list[Advice | None]:
        return [self._later({name: lag + 1}) for name, lag in self.scene().program.lags.items() if name in LAG_KEYS]

    def _later(self, lags: dict[str, int], before: str = "tasked") -> Advice | None:
        here, later = self.scene(), self.scene(lags={**self.question.lags, **lags})
        verdicts = here.program.verdicts
        words = " and ".join(f"{name} {in_units(lag, name in verdicts)} late" for name, lag in lags.items())
        does = f"use {words}" if before == "tasked" else f"run without barriers and use {words}"
        overrides = tuple(f"{LAG_KEYS[name]}={lag}" for name, lag in lags.items())
        return self._judged(
            (does, "tasked as recorded" if before == "tasked" else "lockstep", "; ".join(LATER[name] for name in lags)),
            (here, kinds_of(here, before)), (later, kinds_of(later, "tasked")),
            (self._trial(before), self._trial("tasked", overrides)),
        )  # fmt: skip

    def _both(self, ranking: Ranking) -> Advice | None:
        """Barriers and reductions together, where reductions tie what barriers no longer do."""
        lags = {name: lag + 1 for name, lag in self.scene().program.lags.items() if name in LAG_KEYS}
        if not lags or not ranking.tie()["reductions_limit_gain"]:
            return None
        choices = [lags, *({name: lag} for name, lag in lags.items())]
        found = [one for one in (self._later(choice, "lockstep") for choice in choices) if one is not None]
        return max(found, key=lambda one: one.gain_s, default=None)

    def _tiles(self) -> Advice | None:
        """The best of other tile shapes."""
        here, mesh = self.scene(), mesh_shape(self.basis.program.tiles)
        dimensions = sum(1 for zones in mesh if zones > 1) or 1
        found = []
        for shape in tile_shapes(self.basis.program.tiles):
            scene = self.scene(tile=shape) if shape != recorded_tile(self.basis) else here
            if shape != recorded_tile(self.basis) and scene.program.tile_count >= self.workers:
                wanted = f"mesh.tile={list(shape[:dimensions])}"
                steps = abs(math.log2(shape[0] / recorded_tile(self.basis)[0]))
                found.append(
                    self._judged(
                        (
                            f"cut tiles of {' x '.join(map(str, shape[:dimensions]))} zones",
                            "tasked as recorded",
                            "the same, but for sums over tiles taken in another order",
                        ),
                        (here, kinds_of(here, "tasked")),
                        (scene, kinds_of(scene, "tasked")),
                        (self._trial("tasked"), self._trial("tasked", (wanted,))),
                        TILE_ERROR * steps,
                    )
                )
        return max((one for one in found if one is not None), key=lambda one: one.gain_s, default=None)

    def _placement(self) -> Advice | None:
        """The best of other placements."""
        here = self.scene()
        named = self.question.placement or str(self.basis.first.profile.manifest["notes"].get("placement", ""))
        found = []
        for order in ORDERS:
            if order != named and self.workers > 1:
                scene = self.scene(placement=order)
                found.append(
                    self._judged(
                        (f"place tiles by {order}", "tasked as recorded", "the same to the last bit"),
                        (here, kinds_of(here, "tasked")), (scene, kinds_of(scene, "tasked")),
                        (self._trial("tasked"), replace(self._trial("tasked"), placement=order)),
                    )
                )  # fmt: skip
        return max((one for one in found if one is not None), key=lambda one: one.gain_s, default=None)

    def _window(self) -> Advice | None:
        """More cycles in flight, where the window is what holds cycles back."""
        here = self.scene()
        verdicts = here.program.verdicts
        needed = max((lag for name, lag in here.program.lags.items() if name not in verdicts), default=0) + 1
        if here.program.window >= needed:
            return None
        scene = self.scene(window=needed)
        return self._judged(
            (f"let {needed} cycles be in flight at once", "tasked as recorded", "the same to the last bit"),
            (here, kinds_of(here, "tasked")), (scene, kinds_of(scene, "tasked")),
            (self._trial("tasked"), self._trial("tasked", (f"run.window={needed}",))),
        )  # fmt: skip

    def _trial(self, barriers: str, overrides: Sequence[str] = ()) -> Trial:
        """A trial beside what all trials share."""
        changed = {override.partition("=")[0] for override in overrides}
        shared = {one.partition("=")[0]: one for one in (*self.common, *self._asked())}
        kept = tuple(one for key, one in shared.items() if key not in changed)
        named = self.question.placement or recorded_option(self.basis, "placement")
        return Trial((*kept, *overrides), barriers, named)

    def _asked(self) -> list[str]:
        """What the question changes of the scenario itself: a command that left it out would try something else."""
        question, tile = self.question, list(self.question.tile)
        return [f"mesh.tile={tile}"] * bool(tile) + [f"run.window={question.window}"] * bool(question.window)


def recorded_option(basis: Basis, key: str) -> str:
    """How the run was placed or dispatched, where an option had it otherwise than its scenario; else nothing."""
    manifest = basis.first.profile.manifest
    ran = str(manifest["dispatch"] if key == "dispatch" else manifest["notes"].get(key, ""))
    wanted = manifest["scenario"].get("resolved", {}).get("run", {}).get(key, ran)
    return ran if ran != wanted else ""


def command_of(advice: Advice, basis: Basis, workers: int, threads: int) -> str:
    """The command that tries advice for real; its figures are to be compared with the baseline's own."""
    name = str(basis.first.profile.manifest["scenario"].get("name", "SCENARIO"))
    dispatch = recorded_option(basis, "dispatch")
    parts = [f"breakstep run {name} --workers {workers} --threads {threads}", f"--dispatch {dispatch}" * bool(dispatch)]
    return " ".join([*filter(None, parts), advice.trial.options()])
