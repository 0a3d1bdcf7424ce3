"""Running from a program or a notebook: the same sessions and dispatches as the commands, without a command line.

Everything here can be imported from ``breakstep`` itself.
"""

from __future__ import annotations

import contextlib
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from breakstep.commands.compare import compare_pairs
from breakstep.commands.guarded import check_guard
from breakstep.commands.session import Session, Stopped
from breakstep.commands.shared import choose_place, open_dispatch, output_folder
from breakstep.engine.native import NativeDispatch
from breakstep.engine.resident import ResidentDispatch
from breakstep.engine.run import Dispatch
from breakstep.errors import BreakstepError, ScenarioError
from breakstep.profile.run import Profile
from breakstep.report.comparison import Comparison
from breakstep.scenario.code import scenario_of
from breakstep.scenario.load import load_scenario
from breakstep.scenario.setup import DispatchName, Placement, Setup

if TYPE_CHECKING:
    from distributed import Client


def run(
    what: Setup | str | Path,
    *,
    barriers: str = "tasked",
    overrides: Sequence[str] = (),
    workers: int | None = None,
    threads: int | None = None,
    placement: Placement | None = None,
    dispatch: DispatchName | None = None,
    memory_limit: int = 0,
    task_timeout: float | None = None,
    client: Client | None = None,
    address: str | None = None,
    scheduler_file: Path | None = None,
    out: Path | str | None = None,
) -> Profile:
    """Run once, and record it.

    Parameters
    ----------
    what : Setup, str or Path
        A Setup, or what the command line takes: the name or the path of a scenario, or Python code.
    barriers : str
        ``tasked`` (none), ``lockstep`` (all), or names joined by commas.
    overrides : sequence of str
        ``key.path=value``, as ``--set`` takes them.
    workers, threads : int, optional
        Worker processes and threads of each; the scenario's by default, all workers of a cluster of yours.
    placement, dispatch : str, optional
        Who owns which tile, and what carries out the tasks; the scenario's by default.
    memory_limit : int
        Live bytes a worker above which run-ahead waits; 0 for no limit.
    task_timeout : float, optional
        Seconds after which a kernel that has not returned ends the run.
    client : distributed.Client, optional
        A cluster of yours. Without one, and without ``address`` and ``scheduler_file``, worker processes are started
        on this machine for this run alone; a program that does so must stand under ``if __name__ == "__main__":``.
    out : Path, optional
        Folder for the profile; a new one below ``runs/`` by default.

    Returns
    -------
    Profile
        ``fields`` (xarray: final fields, dimensions (<field>_component, x, y, z), zone centres [cm]), ``tasks``,
        ``intervals``, ``edges`` and more (pandas), ``ledger`` (every core-second), ``folder``.

    Raises
    ------
    BreakstepError
        What ended the run early; ``details["profile"]`` says where the profile so far is.
    KeyboardInterrupt
        The user stopped it, and the profile so far has been written.
    """
    session = _session(what, overrides, placement, memory_limit)
    session.allow(task_timeout)
    session.barriers(barriers)
    folder = output_folder(_path(out), session.scenario.name)
    with (
        _told(),
        _engine(session, dispatch, workers, threads, client, address, scheduler_file) as engine,
    ):
        return session.execute(engine, barriers, folder)[1]


def compare(
    what: Setup | str | Path,
    *,
    pairs: int = 3,
    barriers: str = "lockstep",
    overrides: Sequence[str] = (),
    workers: int | None = None,
    threads: int | None = None,
    placement: Placement | None = None,
    dispatch: DispatchName | None = None,
    memory_limit: int = 0,
    task_timeout: float | None = None,
    client: Client | None = None,
    address: str | None = None,
    scheduler_file: Path | None = None,
    out: Path | str | None = None,
) -> Comparison:
    """Run with barriers and without, several times in alternating order.

    Parameters
    ----------
    pairs : int
        How often to run both ways.
    barriers : str
        What tasked is compared with.
    what, overrides, workers, threads, placement, dispatch, memory_limit, task_timeout, client, address,
    scheduler_file, out
        As for :func:`run`; ``out`` takes a folder a run.

    Returns
    -------
    Comparison
        ``lockstep`` and ``tasked`` (profiles, pair by pair), ``gain`` (``median``, ``low``, ``high`` of the 95 %
        interval, ``significant``), ``identical`` (whether all runs ended in the same bits).

    Raises
    ------
    BreakstepError, KeyboardInterrupt
        As :func:`run`.
    """
    if pairs < 1:
        raise ScenarioError(f"a comparison needs at least one pair of runs, not {pairs}")
    session = _session(what, overrides, placement, memory_limit)
    session.allow(task_timeout)
    session.barriers(barriers)
    folder = output_folder(_path(out), session.scenario.name)
    with (
        _told(),
        _engine(session, dispatch, workers, threads, client, address, scheduler_file) as engine,
    ):
        return compare_pairs(session, engine, barriers, folder, pairs)


def _session(what: Setup | str | Path, overrides: Sequence[str], placement: str | None, memory_limit: int) -> Session:
    scenario = scenario_of(what, overrides) if isinstance(what, Setup) else load_scenario(what, overrides)
    return Session.of(scenario, placement, memory_limit)


def _path(out: Path | str | None) -> Path | None:
    return None if out is None else Path(out)


@contextlib.contextmanager
def _engine(
    session: Session,
    dispatch: str | None,
    workers: int | None,
    threads: int | None,
    client: Client | None,
    address: str | None,
    scheduler_file: Path | None,
) -> Iterator[Dispatch]:
    place = choose_place(session.scenario.run, dispatch, workers, threads, address, scheduler_file)
    session.check_dispatch(place.dispatch)
    if place.dispatch == "serial" or client is None:
        if place.dispatch != "serial" and place.is_local:
            check_guard()
        with open_dispatch(place) as engine:
            yield engine
    elif place.dispatch == "native":
        yield NativeDispatch(client, workers)
    else:
        yield ResidentDispatch(client, workers)


@contextlib.contextmanager
def _told() -> Iterator[None]:
    """Let errors show the user's own lines, and an interrupt be what Python calls one."""
    try:
        yield
    except Stopped as stopped:
        raise KeyboardInterrupt(f"stopped; the profile so far is in {stopped.folder}") from None
    except BreakstepError as error:
        if "traceback" in error.details:
            error.add_note(str(error.details["traceback"]))
        raise
