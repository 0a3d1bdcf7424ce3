"""Scenarios that a user wrote in Python: which file or module, what it offers, and what a run may change of it.

A Python file given by itself is the table ``[code]`` with nothing but its path; a TOML file with that table can say
more. Both come down to calling one function, ``setup`` unless named otherwise, which returns a Setup.
"""

from __future__ import annotations

import copy
import hashlib
import importlib
import inspect
import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, fields, replace
from functools import cached_property
from pathlib import Path
from types import ModuleType
from typing import Any

from pydantic import Field

from breakstep.errors import BreakstepError, ScenarioError
from breakstep.scenario.faults import Fault, did_you_mean
from breakstep.scenario.find import refusal
from breakstep.scenario.overrides import apply_overrides
from breakstep.scenario.reading import Reader
from breakstep.scenario.sections import Count, Counts, PlaceSection, Section, Word
from breakstep.scenario.setup import Setup
from breakstep.steps.modules import Source, hidden, read_source, see_folder, users_traceback
from breakstep.steps.problem import Problem

PYTHON = re.compile(r"(?P<file>.+\.py)(?::(?P<name>\w+))?")
MODULE = re.compile(r"(?P<module>\w+(?:\.\w+)*)(?::(?P<name>\w+))?")
ON_WHAT = tuple(field.name for field in fields(Setup) if field.name in PlaceSection.model_fields)


class CodeSection(Section):
    """``[code]``: where the user's own code is."""

    file: str | None = Field(default=None, description="a Python file; its path counts from the scenario's folder")
    module: str | None = Field(default=None, description="a module that can be imported, instead of a file")
    name: Word = Field(default="setup", description="the function there that returns a Setup, or a Setup itself")
    arguments: dict[str, Any] = Field(default={}, description="arguments of that function by name")
    digest: str | None = Field(default=None, description="of the code that ran; written into profiles")


class TileSection(Section):
    """``[mesh]`` of a scenario whose mesh is made by code: its tiles only."""

    tile: Counts = Field(description="zones of a tile along each axis")


class CodeRunSection(PlaceSection):
    """``[run]`` of a scenario whose splitting is made by code."""

    cycles: Count = Field(description="most cycles to run")


class CodeFile(Section):
    """Everything that a scenario with ``[code]`` may say; what it leaves out is as the code has it."""

    name: Word = Field(description="the scenario's name")
    title: str = Field(default="", description="one line for tables and reports")
    description: str = Field(default="", description="what it shows and what to expect")
    code: CodeSection = Field(description="where the code is")
    mesh: TileSection = Field(description="the tiles")
    run: CodeRunSection = Field(description="how long and on what")


@dataclass(frozen=True)
class CodeScenario:
    """A checked scenario made by the user's code.

    Attributes
    ----------
    file : CodeFile
        What was asked for, what the code says filled in.
    source : str
        Where it came from, for messages.
    setup : Setup
        What the code returned.
    remarks : tuple of str
        What the user should know before a run begins, one sentence each.
    """

    file: CodeFile
    source: str
    setup: Setup
    sources: tuple[Source, ...] = ()
    remarks: tuple[str, ...] = ()

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
    def run(self) -> CodeRunSection:
        """How long to run and on what."""
        return self.file.run

    @property
    def tile(self) -> tuple[int, ...]:
        """Zones of a tile along each axis."""
        return self.file.mesh.tile

    @cached_property
    def _problem(self) -> Problem:
        problem, cycles = self.setup.problem, self.run.cycles
        return replace(problem, name=self.name, title=self.title, cycles=cycles, sources=self.sources)

    def problem(self) -> Problem:
        """What physics has to say about the run."""
        return self._problem

    def resolved(self) -> dict[str, Any]:
        """Every key with its value, as JSON can hold it; loads as the same scenario while the code is the same."""
        return self.file.model_dump(mode="json")


def code_target(text: str) -> dict[str, Any] | None:
    """The table ``[code]`` for ``file.py``, ``file.py:name``, ``package.module`` or ``module:name``; else None."""
    found = PYTHON.fullmatch(text) or (MODULE.fullmatch(text) if "." in text or ":" in text else None)
    if found is None or text.endswith(".toml"):
        return None
    return {key: value for key, value in found.groupdict().items() if value is not None}


def code_scenario(
    tables: Mapping[str, Any], *, source: str, overrides: Sequence[str] = (), folder: Path | None = None
) -> CodeScenario:
    """The scenario that a table ``[code]`` describes.

    Parameters
    ----------
    folder : Path, optional
        From where the path of the file counts; the current one by default.

    Raises
    ------
    ScenarioError
        All faults together; one that the code itself raised comes with ``details["traceback"]``.
    """
    changed = copy.deepcopy(dict(tables))
    faults, paths = apply_overrides(changed, overrides, CodeFile)
    reader = Reader()
    reader.table(CodeSection, changed.get("code", {}), "code")
    _refuse_all(source, [fault.sentence("--set") for fault in faults], reader.faults)
    code = CodeSection.model_validate(changed["code"])
    module, sources = _module(code, folder or Path(), source)
    setup = _setup(module, code, Path(code.file).name if code.file else str(code.module))
    digest = _digest(module, sources)
    remarks = [] if code.digest in (None, digest) else [_has_changed(module)]
    remarks += [_is_hidden(file) for one in sources for file in hidden(one)]
    place = sources[0].path if sources else None
    changed["code"] = {**changed["code"], "digest": digest, **({"file": place} if place else {})}
    return _checked(changed, setup, source, paths, sources, tuple(remarks))


def scenario_of(setup: Setup, overrides: Sequence[str] = ()) -> CodeScenario:
    """The scenario of a Setup that a program made; a run of it can be resumed by that program only."""
    changed: dict[str, Any] = {"code": {}}
    faults, paths = apply_overrides(changed, overrides, CodeFile)
    _refuse_all("setup", [fault.sentence("--set") for fault in faults], [])
    return _checked(changed, setup, "setup", paths, setup.problem.sources, ())


def _checked(
    tables: dict[str, Any],
    setup: Setup,
    source: str,
    paths: set[str],
    sources: tuple[Source, ...],
    remarks: tuple[str, ...],
) -> CodeScenario:
    whole = {**_defaults(setup), **tables}
    for key in ("mesh", "run"):
        whole[key] = {**_defaults(setup)[key], **tables.get(key, {})}
    reader = Reader()
    reader.table(CodeFile, whole)
    _refuse_all(source, [], reader.faults, paths)
    made = CodeScenario(CodeFile.model_validate(whole), source, setup, sources, remarks)
    try:
        made.problem().cut(made.tile)
    except BreakstepError as error:
        raise refusal(f"{source}: {error.message}") from error
    return made


def _defaults(setup: Setup) -> dict[str, Any]:
    problem = setup.problem
    return {
        "name": problem.name,
        "title": problem.title,
        "description": setup.description,
        "mesh": {"tile": list(setup.tile)},
        "run": {"cycles": problem.cycles, **{name: getattr(setup, name) for name in ON_WHAT}},
    }


def _refuse_all(source: str, sentences: list[str], faults: Sequence[Fault], paths: set[str] | None = None) -> None:
    for fault in faults:
        is_set = any(fault.key == path or fault.key.startswith(f"{path}.") for path in paths or ())
        sentences.append(fault.sentence("--set" if is_set else source))
    if sentences:
        raise refusal(*dict.fromkeys(sentences))


def _module(code: CodeSection, folder: Path, source: str) -> tuple[ModuleType, tuple[Source, ...]]:
    if code.file is not None and code.module is None:
        file = read_source(folder / Path(code.file).expanduser())
        return _imported(file.module, code.file), (file,)
    if code.module is not None and code.file is None:
        see_folder(Path.cwd())
        return _imported(lambda: importlib.import_module(str(code.module)), code.module), ()
    if code.digest is None and code.file is None:
        raise refusal(
            f"{source}: the problem was made by a program, not by a file that could be loaded again;"
            " give [code] a file or a module, or go on from that program"
        )
    raise refusal(f"{source}: code: expected a file or a module, came both; give one of them")


def _imported(load: Callable[[], ModuleType], what: str) -> ModuleType:
    try:
        return load()
    except ModuleNotFoundError as error:
        if error.name and (what == error.name or what.startswith(f"{error.name}.")):
            raise refusal(
                f"no module named {error.name!r} can be imported here, and no scenario is called {what!r};"
                " a file of yours is given by its path, such as my_code.py"
            ) from error
        raise _users(error, f"{what} cannot be imported") from error
    except ImportError as error:
        raise _users(error, f"{what} cannot be imported", _import_advice(error, what)) from error
    except (Exception, SystemExit) as error:
        raise _users(error, f"{what} cannot be imported") from error


def _import_advice(error: ImportError, what: str) -> str:
    """What to do about an import that fails for a reason that Python's own sentence hides."""
    if "relative import" in str(error):
        return "; a file given by its path belongs to no package: name it as package.module, from the folder above"
    beside = Path(what).with_name(f"{error.name}.py")
    if error.path and beside.is_file() and not beside.samefile(error.path):
        return f"; {beside} is not what Python imports by that name, which is taken: give your file another"
    return ""


def _users(error: BaseException, what: str, advice: str = "") -> ScenarioError:
    """What the user's code raised, in a sentence, and its own lines."""
    first = (str(error).splitlines() or [""])[0]
    kind = "" if isinstance(error, BreakstepError) else f"{type(error).__name__}: "
    sentence = f"{what}: {kind}{first}".removesuffix(": ") + advice
    return ScenarioError(sentence, faults=[sentence], traceback=users_traceback(error))


def _setup(module: ModuleType, code: CodeSection, what: str) -> Setup:
    """What the module offers under the name, called where it is a function."""
    if not hasattr(module, code.name):
        callables = [n for n, v in vars(module).items() if getattr(v, "__module__", "") == module.__name__]
        hint = did_you_mean(code.name, callables)
        raise refusal(f"{what} offers no {code.name!r}: expected a function that returns a breakstep.Setup{hint}")
    offered = getattr(module, code.name)
    if isinstance(offered, Setup):
        if code.arguments:
            raise refusal(f"{what}: {code.name} is a Setup and takes no arguments; make it a function that returns one")
        return offered
    if not callable(offered):
        raise refusal(_wrong_type(what, code.name, offered))
    _check_arguments(offered, code, what)
    try:
        made = offered(**code.arguments)
    except (Exception, SystemExit) as error:
        raise _users(error, f"{what}: {code.name}() failed") from error
    if not isinstance(made, Setup):
        raise refusal(_wrong_type(what, f"{code.name}()", made))
    return made


def _wrong_type(what: str, name: str, came: object) -> str:
    advice = "; put it into one: Setup(problem, tile=(...))" if isinstance(came, Problem) else ""
    return f"{what}: expected {name} to be a breakstep.Setup, came {type(came).__name__}{advice}"


def _check_arguments(function: Callable[..., object], code: CodeSection, what: str) -> None:
    signature = inspect.signature(function)
    try:
        signature.bind(**code.arguments)
    except TypeError as error:
        takes = ", ".join(signature.parameters) or "no arguments"
        raise refusal(f"{what}: code.arguments: {code.name}() takes {takes}, but: {error}") from error


def _digest(module: ModuleType, sources: tuple[Source, ...]) -> str:
    """SHA-256 of the file that was loaded, and of those beside it that it imports."""
    if sources:
        return sources[0].digest
    file = getattr(module, "__file__", None)
    return hashlib.sha256(Path(file).read_bytes()).hexdigest() if file else ""


def _is_hidden(file: str) -> str:
    return f"{file} is not imported: Python finds another module by that name; give the file another if it is wanted"


def _has_changed(module: ModuleType) -> str:
    return f"{module.__file__} has changed since the run that is gone on with; it goes on with the code as it is now"
