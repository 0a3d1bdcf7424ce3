"""A scenario made ready to run: program, options and what the manifest says about it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from breakstep.commands.shared import progress_bar, reading
from breakstep.engine.pilot import measure_costs
from breakstep.engine.program import Program
from breakstep.engine.recorded import run_and_record
from breakstep.engine.run import Dispatch, RunOptions, RunResult
from breakstep.engine.serial import SerialDispatch
from breakstep.engine.warm import warm_up
from breakstep.errors import BreakstepError, ScenarioError
from breakstep.graph.stages import parse_barriers
from breakstep.profile.run import Profile
from breakstep.scenario.load import AnyScenario, any_scenario_from, load_scenario

LONGEST_SECONDS = 1e9  # thirty years; the timers that end a hung kernel overflow at 9.2e9 s


class Stopped(Exception):  # noqa: N818  (nothing went wrong)
    """The user stopped a run; its profile has been written."""

    def __init__(self, folder: Path) -> None:
        super().__init__(str(folder))
        self.folder = folder


def _stretched(scenario: AnyScenario, dilate: float | None) -> AnyScenario:
    """The scenario with waits of steps by timer stretched by a factor given on the command line."""
    if dilate is None:
        return scenario
    if getattr(scenario.file, "timers", None) is None:
        raise ScenarioError("--dilate stretches the waits of steps by timer, and the scenario has none; leave it out")
    return any_scenario_from(scenario.resolved(), source=scenario.source, overrides=[f"timers.dilate={dilate}"])


@dataclass
class Session:
    """One scenario with everything resolved.

    Attributes
    ----------
    scenario : Scenario or CodeScenario
    program : Program
    options : RunOptions
        Without barriers; :meth:`execute` adds them.
    is_warm : bool
        Whether this process has its kernels.
    """

    scenario: AnyScenario
    program: Program
    options: RunOptions
    is_warm: bool = False

    @classmethod
    def load(
        cls,
        name: str,
        overrides: Sequence[str],
        placement: str | None = None,
        memory_limit: int = 0,
        dilate: float | None = None,
    ) -> Session:
        """Read and check a scenario.

        Raises
        ------
        ScenarioError
            All its faults together.
        """
        with reading(name, ScenarioError):
            scenario = _stretched(load_scenario(name, overrides), dilate)
        return cls.of(scenario, placement, memory_limit)

    @classmethod
    def of(cls, scenario: AnyScenario, placement: str | None = None, memory_limit: int = 0) -> Session:
        """A scenario that has been loaded already."""
        program = Program(scenario.problem(), tuple(scenario.tile), scenario.run.fuse)
        options = RunOptions(
            placement=placement or scenario.run.placement, window=scenario.run.window, memory_limit=memory_limit
        )
        return cls(scenario, program, options)

    @classmethod
    def from_tables(
        cls,
        facts: Mapping[str, Any],
        source: Path,
        overrides: Sequence[str],
        placement: str | None,
        memory_limit: int,
        dilate: float | None = None,
    ) -> Session:
        """The scenario that a checkpoint's manifest holds.

        Raises
        ------
        ScenarioError
            All its faults together, overrides included.
        """
        tables = facts.get("resolved", {}) if isinstance(facts, Mapping) else {}
        scenario = _stretched(any_scenario_from(tables, source=str(source), overrides=overrides), dilate)
        return cls.of(scenario, placement, memory_limit)

    def saving_every(self, cycles: int | None) -> RunOptions:
        """The options with a checkpoint every so many cycles."""
        return replace(self.options, checkpoint_every=cycles or 0)

    def allow(self, task_timeout: float | None) -> None:
        """Limit how long a kernel may take [s].

        Raises
        ------
        ScenarioError
            No clock could measure that: NaN, infinite, negative or more than thirty years.
        """
        if task_timeout is not None and not 0.0 <= task_timeout <= LONGEST_SECONDS:
            raise ScenarioError(
                f"a task timeout needs seconds above 0 and up to {LONGEST_SECONDS:g}, not {task_timeout:g};"
                " leave it out for no limit"
            )
        self.options = replace(self.options, task_timeout=task_timeout or 0.0)

    def check_dispatch(self, name: str) -> None:
        """Refuse options that a dispatch would silently ignore, or could not follow.

        Raises
        ------
        ScenarioError
        """
        if self.options.memory_limit and name != "resident":
            raise ScenarioError("a memory limit needs the resident dispatch; leave --memory-limit or --dispatch out")
        needed = {"shared": "resident", "dask": "native"}.get(self.options.placement, name)
        if name not in ("serial", needed):
            raise ScenarioError(
                f"the placement {self.options.placement!r} needs the {needed} dispatch,"
                f" not {name}; choose another of them"
            )

    def barriers(self, choice: str) -> tuple[str, ...]:
        """Barrier names for ``lockstep``, ``tasked`` or a list."""
        return parse_barriers(self.program.template, choice)

    def facts(self) -> dict[str, Any]:
        """What the manifest says was run."""
        return {
            "name": self.scenario.name,
            "title": self.scenario.title,
            "resolved": self.scenario.resolved(),
        }

    def execute(
        self, dispatch: Dispatch, choice: str, folder: Path, *, title: str = "", trace: bool = False
    ) -> tuple[RunResult, Profile]:
        """Run once under a choice of barriers and record the profile.

        Raises
        ------
        Stopped
            The user interrupted the run.
        BreakstepError
            Whatever ended the run early, after the profile so far has been written; ``details["profile"]``
            says where.
        """
        self._warm_up(dispatch)
        if self.options.placement == "balanced" and self.options.costs is None:
            self.options = replace(self.options, costs=measure_costs(dispatch, self.program, self.options))
        options = replace(self.options, barriers=self.barriers(choice), trace=trace)
        with progress_bar(title or choice, self.program.problem.cycles) as progress:
            result, profile = run_and_record(
                dispatch, self.program, options, folder, mode=choice, scenario=self.facts(), progress=progress
            )
        if isinstance(result.failure, BreakstepError):
            result.failure.details.setdefault("profile", str(folder))
        if result.failure is not None:
            raise result.failure
        if result.interrupted:
            raise Stopped(folder)
        return result, profile

    def _warm_up(self, dispatch: Dispatch) -> None:
        """Load or compile the kernels before the clock starts; on a cluster the dispatch does so itself."""
        if isinstance(dispatch, SerialDispatch) and not self.is_warm:
            warm_up(self.program, self.options.task_timeout)
            self.is_warm = True
