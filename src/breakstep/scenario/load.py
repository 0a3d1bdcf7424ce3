"""Loading a scenario: find, parse, override, check everything, and say all faults at once."""

from __future__ import annotations

import copy
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any, TypeAlias

from pydantic import ValidationError

from breakstep.errors import DeclarationError, ScenarioError, TilingError
from breakstep.scenario.build import build_problem
from breakstep.scenario.code import CodeScenario, code_scenario, code_target
from breakstep.scenario.faults import Fault, expected
from breakstep.scenario.find import find, parse, refusal
from breakstep.scenario.model import ScenarioFile
from breakstep.scenario.overrides import apply_overrides, apply_switches
from breakstep.scenario.reading import Reader
from breakstep.scenario.rehearsed import beside, complete
from breakstep.scenario.rules import find_faults
from breakstep.scenario.sections import RunSection
from breakstep.steps.problem import Problem


@dataclass(frozen=True)
class Scenario:
    """A checked scenario.

    Attributes
    ----------
    file : ScenarioFile
        All its tables, defaults filled in.
    source : str
        Where it came from, for messages.
    """

    file: ScenarioFile
    source: str

    @property
    def name(self) -> str:
        """The scenario's name."""
        return self.file.name

    @property
    def title(self) -> str:
        """One line for tables and reports."""
        return self.file.title or self.file.name

    @property
    def description(self) -> str:
        """What it shows and what to expect."""
        return self.file.description

    @property
    def run(self) -> RunSection:
        """How long to run and on what."""
        return self.file.run

    @property
    def tile(self) -> tuple[int, ...]:
        """Zones of a tile along each axis."""
        return self.file.mesh.tile

    @cached_property
    def _problem(self) -> Problem:
        return build_problem(self.file)

    def problem(self) -> Problem:
        """What physics has to say about the run."""
        return self._problem

    def resolved(self) -> dict[str, Any]:
        """Every key with its value, defaults filled in, as JSON can hold it; loads as the same scenario."""
        return self.file.model_dump(mode="json")

    @property
    def remarks(self) -> tuple[str, ...]:
        """What the user should know before a run begins."""
        return ()


AnyScenario: TypeAlias = Scenario | CodeScenario


def load_scenario(name_or_path: str | Path, overrides: Sequence[str] = ()) -> AnyScenario:
    """Load a scenario.

    Parameters
    ----------
    name_or_path : str or Path
        The name of a scenario that comes with the package, the path of a TOML file, or Python code of the user's:
        ``file.py``, ``file.py:name``, ``package.module`` or ``package.module:name``.
    overrides : sequence of str
        ``key.path=value``, applied before anything is checked.

    Raises
    ------
    ScenarioError
        With every fault found, one sentence each, in ``details["faults"]``.
    """
    code = code_target(str(name_or_path))
    if code is not None:
        return code_scenario({"code": code}, source=str(name_or_path), overrides=overrides)
    path = find(str(name_or_path))
    tables = beside(path.parent, parse(path))
    return any_scenario_from(tables, source=path.name, overrides=overrides, folder=path.parent)


def any_scenario_from(
    tables: Mapping[str, Any], *, source: str, overrides: Sequence[str] = (), folder: Path | None = None
) -> AnyScenario:
    """A scenario, made by code or not, from tables that are already parsed; raises as :func:`load_scenario`.

    Parameters
    ----------
    folder : Path, optional
        From where paths in the tables count; the current one by default.
    """
    if "code" in tables:
        return code_scenario(tables, source=source, overrides=overrides, folder=folder)
    return scenario_from(tables, source=source, overrides=overrides)


def scenario_from(tables: Mapping[str, Any], *, source: str, overrides: Sequence[str] = ()) -> Scenario:
    """A scenario without code from tables that are already parsed; raises as :func:`load_scenario`."""
    changed = copy.deepcopy(dict(tables))
    apply_switches(changed)
    faults, paths = apply_overrides(changed, overrides)
    complete(changed)
    sentences = [fault.sentence("--set") for fault in faults]
    sentences += [fault.sentence(_blame(fault.key, source, paths)) for fault in check(changed)]
    if sentences:
        raise refusal(*dict.fromkeys(sentences))
    scenario = Scenario(_validated(changed, source), source)
    _check_problem(scenario)
    return scenario


def check(tables: Mapping[str, Any]) -> list[Fault]:
    """All faults of the tables of a scenario."""
    reader = Reader()
    sound = reader.table(ScenarioFile, tables)
    return [*reader.faults, *find_faults(sound)]


def _blame(key: str, source: str, paths: Iterable[str]) -> str:
    """Where a faulty value came from: the command line if it was set there, else the file."""
    is_set = any(key == path or key.startswith(f"{path}.") for path in paths)
    return "--set" if is_set else source


def _validated(tables: Mapping[str, Any], source: str) -> ScenarioFile:
    try:
        return ScenarioFile.model_validate(tables)
    except ValidationError as error:  # whatever the key-by-key check let through
        found = [Fault(".".join(map(str, one["loc"])), expected(one)) for one in error.errors()]
        raise refusal(*(fault.sentence(source) for fault in found)) from None


def _check_problem(scenario: Scenario) -> None:
    """Let the steps and the tiling have their say too."""
    try:
        scenario.problem().cut(scenario.tile)
    except (DeclarationError, TilingError) as error:
        raise refusal(f"{scenario.source}: {error.message}") from error


__all__ = ["AnyScenario", "Scenario", "ScenarioError", "any_scenario_from", "check", "load_scenario", "scenario_from"]
