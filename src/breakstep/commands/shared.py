"""Options and habits that commands share."""

from __future__ import annotations

import contextlib
import json
import time
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any, TypeVar

import click
from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn

from breakstep.engine.cluster import existing_cluster, local_cluster
from breakstep.engine.native import NativeDispatch
from breakstep.engine.placement import PLACEMENTS
from breakstep.engine.program import Program
from breakstep.engine.recorded import available_processors, check_folder
from breakstep.engine.resident import ResidentDispatch
from breakstep.engine.run import Dispatch
from breakstep.engine.serial import SerialDispatch
from breakstep.errors import BreakstepError, OutputError, OverdueError
from breakstep.scenario.sections import PlaceSection
from breakstep.steps.timed import timed_kernel

_F = TypeVar("_F", bound=Callable[..., Any])


def run_options(function: _F) -> _F:
    """Options of every command that runs a scenario."""
    options = [
        click.argument("scenario", required=False),
        click.option("--set", "overrides", multiple=True, metavar="KEY.PATH=VALUE", help="Override a scenario value."),
        click.option("--workers", type=click.IntRange(1), help="Workers (default: the scenario's; all of a cluster)."),
        click.option("--threads", type=click.IntRange(1), help="Threads a worker (default: the scenario's)."),
        click.option("--dilate", type=click.FloatRange(0.0, min_open=True), help="Stretch waits of steps by timer so."),
        click.option("--placement", type=click.Choice(PLACEMENTS), help="Who owns which tile."),
        click.option("--dispatch", type=click.Choice(["resident", "native", "serial"]), help="Who runs the tasks."),
        click.option("--memory-limit", type=click.IntRange(0), help="Live bytes a worker above which run-ahead waits."),
        click.option("--address", help="Use the Dask cluster whose scheduler listens there."),
        click.option("--scheduler-file", type=click.Path(path_type=Path), help="Use the Dask cluster of this file."),
        click.option("--out", type=click.Path(path_type=Path), help="Folder for the profiles (default: runs/...)."),
        click.option("--json", "json_file", type=click.Path(path_type=Path), help="Write the figures there as JSON."),
    ]  # fmt: skip
    for option in reversed(options):
        function = option(function)
    return function


def timeout_option(function: _F) -> _F:
    """A limit on how long a kernel may take."""
    told = "End the run when a kernel has not returned for so long (default: no limit)."
    kind = click.FloatRange(0.0, min_open=True)
    option = click.option("--task-timeout", type=kind, metavar="SECONDS", help=told)
    return option(function)


@dataclass(frozen=True)
class Place:
    """Where to run, and with which dispatch.

    Attributes
    ----------
    workers : int or None
        None for all workers of the user's own cluster.
    processes : int or None
        How many processes the workers share; None for one each.
    """

    dispatch: str
    workers: int | None
    threads: int
    address: str | None = None
    scheduler_file: Path | None = None
    checkpoints: Path | None = None
    resume: Path | None = None
    facts: Mapping[str, Any] = field(default_factory=dict)
    processes: int | None = None

    @property
    def is_local(self) -> bool:
        """Whether workers are started on this machine, rather than found on a cluster of the user's."""
        return self.address is None and self.scheduler_file is None


def choose_place(
    settings: PlaceSection,
    dispatch: str | None,
    workers: int | None,
    threads: int | None,
    address: str | None,
    scheduler_file: Path | None,
) -> Place:
    """The place that options and scenario name together.

    Raises
    ------
    click.UsageError
        Options that contradict each other.
    """
    name = dispatch or settings.dispatch
    if name == "serial":
        more_than_one = {"--workers": (workers or 1) > 1, "--threads": (threads or 1) > 1}
        elsewhere = {"--address": address is not None, "--scheduler-file": scheduler_file is not None}
        for option in (option for option, is_used in {**more_than_one, **elsewhere}.items() if is_used):
            raise click.UsageError(f"the serial dispatch runs in one thread of this process; leave {option} out")
    if address is not None and scheduler_file is not None:
        raise click.UsageError("--address and --scheduler-file name a cluster each; give one of them")
    own = address is None and scheduler_file is None
    if threads is not None and not own:
        raise click.UsageError("the workers of a running cluster have their threads already; leave --threads out")
    return Place(
        name,
        workers or (settings.workers if own else None),
        threads or settings.threads,
        address,
        scheduler_file,
    )


def crowded(place: Place, program: Program) -> Place:
    """The place, with few processes where more workers than processors would only wait; says so.

    Workers that wait need no processor, and a process each would cost them a second to start and 200 MB.
    """
    processors = available_processors()
    waits = all(timed_kernel(step) for step in program.problem.splitting.steps())
    if not waits or not place.is_local or place.dispatch != "resident" or (place.workers or 1) <= processors:
        return place
    click.echo(
        f"breakstep: all steps are by timer, so {place.workers} workers share"
        f" {processors} {'process' if processors == 1 else 'processes'}",
        err=True,
    )
    return replace(place, processes=processors)


@contextlib.contextmanager
def open_dispatch(place: Place) -> Iterator[Dispatch]:
    """The dispatch to run with, and its cluster for as long as the context lasts."""
    if place.dispatch == "serial":
        yield SerialDispatch()
        return
    if not place.is_local:
        cluster = existing_cluster(place.address, place.scheduler_file)
    else:
        assert place.workers is not None
        cluster = local_cluster(place.workers, place.threads, place.processes)
    with cluster as client, _left_behind(place):
        if place.dispatch == "native":
            yield NativeDispatch(client, place.workers)
        else:
            yield ResidentDispatch(
                client, place.workers, checkpoints=place.checkpoints, resume=place.resume, facts=place.facts
            )


@contextlib.contextmanager
def _left_behind(place: Place) -> Iterator[None]:
    """Workers that were started here end with the run, whatever they are at; those of the user's are named."""
    try:
        yield
    except OverdueError as error:
        if not place.is_local and "address" in error.details:
            said = error.details.get("remedy")
            left = f"the kernel still runs on the worker at {error.details['address']}; restart that worker"
            error.details["remedy"] = f"{said}; {left}" if said else left
        raise


@contextlib.contextmanager
def progress_bar(title: str, cycles: int) -> Iterator[Callable[[int], None]]:
    """A bar that counts cycles on standard error; nothing when that is not a terminal."""
    console = Console(stderr=True)
    if not console.is_terminal:
        yield lambda cycle: None
        return
    columns = (
        TextColumn("{task.description}"),
        BarColumn(),
        MofNCompleteColumn(),
        TextColumn("cycles"),
        TimeElapsedColumn(),
    )
    with Progress(*columns, console=console, transient=True) as progress:
        task = progress.add_task(title, total=cycles)
        yield lambda cycle: progress.update(task, completed=cycle)


def tell_remarks(remarks: Iterable[str]) -> None:
    """What the user should know before a run begins, on standard error."""
    for remark in remarks:
        click.echo(f"breakstep: {remark}", err=True)


def output_folder(out: Path | None, name: str) -> Path:
    """The folder asked for, or a new one under ``runs/``; refused if it could not take what the run leaves.

    Raises
    ------
    OutputError
    """
    folder = out if out is not None else _new_folder(Path("runs") / f"{name}-{time.strftime('%Y%m%d-%H%M%S')}")
    check_folder(folder)
    return folder


def _new_folder(wanted: Path) -> Path:
    """The folder itself, or one with a number behind its name where runs began in the same second."""
    folder, number = wanted, 1
    while folder.exists():
        number += 1
        folder = wanted.with_name(f"{wanted.name}-{number}")
    return folder


@contextlib.contextmanager
def reading(source: object, kind: type[BreakstepError]) -> Iterator[None]:
    """Give an error of the file system, such as missing permission, the words and the kind of our own errors."""
    try:
        yield
    except OSError as error:
        raise kind(f"{source}: cannot be read ({error.strerror or error}); check the path") from error


def check_json(path: Path | None) -> None:
    """Refuse a JSON file that could not be written, before any work is done; leaves no file behind.

    Raises
    ------
    OutputError
    """
    if path is None:
        return
    try:
        is_new = not path.exists()
        with path.open("a", encoding="utf-8"):
            pass
        if is_new:
            path.unlink()
    except OSError as error:
        raise OutputError(f"--json {path} cannot be written ({error.strerror}); choose another path") from error


def write_json(path: Path | None, figures: Mapping[str, Any]) -> None:
    """Write figures as JSON, if a file was asked for."""
    if path is None:
        return
    try:
        path.write_text(json.dumps(figures, indent=2, allow_nan=False) + "\n", encoding="utf-8")
    except OSError as error:
        raise OutputError(f"--json {path} cannot be written ({error.strerror}); choose another path") from error
