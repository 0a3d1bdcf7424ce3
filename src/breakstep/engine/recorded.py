"""A run and the profile it leaves on disk: the manifest's facts are put together here."""

from __future__ import annotations

import contextlib
import os
import platform
from collections.abc import Mapping
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

import numpy as np

from breakstep.engine.interrupts import interrupts_counted
from breakstep.engine.placement import owners
from breakstep.engine.program import Program
from breakstep.engine.run import Dispatch, Progress, RunOptions, RunResult, whole_field
from breakstep.engine.unfinished import tidy
from breakstep.errors import OutputError, ProfileError
from breakstep.graph.tasks import ANYWHERE
from breakstep.profile.record import FinalField, RunRecord
from breakstep.profile.run import Profile
from breakstep.profile.store import write_profile
from breakstep.steps.timed import timed_kernel

SOFTWARE = ("numpy", "numba", "dask", "distributed", "scipy", "pyarrow", "zarr", "xarray")


def run_and_record(
    dispatch: Dispatch,
    program: Program,
    options: RunOptions,
    folder: Path,
    *,
    mode: str,
    scenario: Mapping[str, Any],
    progress: Progress | None = None,
) -> tuple[RunResult, Profile]:
    """Run, and write the profile whatever way the run ended.

    Parameters
    ----------
    folder : Path
        Must not exist yet, or be empty.
    mode : str
        ``lockstep``, ``tasked`` or a list of barriers.
    scenario : mapping
        What the manifest says was run: ``name``, ``title`` and the resolved scenario.

    Returns
    -------
    RunResult, Profile
        ``RunResult.failure`` holds the error that ended the run early, if any.

    Raises
    ------
    KeyboardInterrupt
        The run was complete when the user stopped it; or pressed Ctrl-C three times, and there is no profile.
    OutputError, ProfileError
        The folder cannot be written. After a failed run the failure is raised instead.
    """
    check_folder(folder)
    started = datetime.now(UTC).isoformat(timespec="seconds")
    with interrupts_counted() as presses:
        result = dispatch.run(program, options, progress)
        presses.held = True
        try:
            _complete(result, dispatch, program, options, mode=mode, scenario=dict(scenario), started=started)
            profile = write_profile(result.record, folder)
        except (OutputError, ProfileError) as error:
            if result.failure is not None:
                raise result.failure from error
            raise
    return result, profile


def _complete(result: RunResult, dispatch: Dispatch, program: Program, options: RunOptions, **facts: Any) -> None:
    """Add to the record what the dispatch left out: manifest, final fields, coordinates."""
    record = result.record
    if result.failure is not None or result.interrupted:
        tidy(record, dispatch.workers, dispatch.threads)
    record.manifest.update(_manifest(dispatch, program, options, result), **facts)
    mesh = program.problem.mesh
    if result.fields:
        record.fields = {
            name: FinalField(whole_field(program, tiles), program.fields[name].components, program.fields[name].units)
            for name, tiles in result.fields.items()
        }
    origin = (*mesh.origin, 0.0, 0.0, 0.0)[:3]
    record.coordinates = {
        axis: np.asarray(origin[i] + (np.arange(mesh.zones[i]) + 0.5) * mesh.widths[i], dtype=np.float64)
        for i, axis in enumerate("xyz")
    }


def check_folder(folder: Path) -> None:
    """Refuse a folder that could not take a profile, before any work is done; leaves no folder behind.

    Raises
    ------
    OutputError
    """
    absent: list[Path] = []
    try:
        absent += [path for path in (folder, *folder.parents) if not path.exists()]
        folder.mkdir(parents=True, exist_ok=True)
        probe = folder / ".writable"
        probe.touch()
        probe.unlink()
        used = any(folder.iterdir())
    except OSError as error:
        raise OutputError(
            f"the folder {folder} cannot be written ({error.strerror}); choose another with --out"
        ) from error
    finally:
        for path in absent:
            with contextlib.suppress(OSError):
                path.rmdir()
    if used:
        raise OutputError(f"the folder {folder} is not empty; choose another with --out, or remove it")


def _manifest(dispatch: Dispatch, program: Program, options: RunOptions, result: RunResult) -> dict[str, Any]:
    tiling, splitting = program.tiling, program.problem.splitting
    notes = dict(result.notes)
    residual = notes.pop("clock_residual_ns", [0] * dispatch.workers)
    status = "interrupted" if result.interrupted else "failed" if result.failure else "complete"
    return {
        "breakstep": version("breakstep"),
        "software": _software(),
        "machine": machine(),
        "barriers": list(options.barriers),
        "dispatch": dispatch.name,
        "workers": dispatch.workers,
        "threads": dispatch.workers * dispatch.threads,
        "cycles": result.cycles,
        "mesh": {
            "shape": list(tiling.mesh.zones),
            "tile_shape": [max(tile.shape[axis] for tile in tiling.tiles) for axis in range(3)],
            "tiles": [{"origin": list(tile.origin), "shape": list(tile.shape)} for tile in tiling.tiles],
        },
        "placement": _placement(options, program, dispatch.workers, result.record, notes),
        "status": status,
        "message": str(result.failure or ("stopped by the user" if result.interrupted else "")),
        "clock": {"method": "shared clock or shortest of several round trips", "residual_ns": residual},
        "wall_seconds": result.seconds,
        **_waits(program),
        "notes": {
            **notes,
            "placement": options.placement,
            "window": options.window,
            "fuse": program.fuse,
            "lags": {reduction.name: reduction.lag for reduction in splitting.all_reductions()},
            "stages": [stage.name for stage in program.template.stages],
            "data": _data(program),
            "values": {name: value[-1].tolist() for name, value in result.values.items()},
        },
    }


def _waits(program: Program) -> dict[str, Any]:
    """Which steps only waited, by records of times, and by which factor their waits were stretched."""
    kernels = {step.name: kernel for step in program.problem.splitting.steps() if (kernel := timed_kernel(step))}
    if not kernels:
        return {}
    return {"timed_steps": sorted(kernels), "dilate": next(iter(kernels.values())).dilate}


def _data(program: Program) -> dict[str, Any]:
    """What stages read and write, so that bytes can be told by kind long after the run."""
    stages: dict[str, dict[str, Any]] = {}
    for stage in program.template.stages:  # one that occurs twice has the same steps, and perhaps a reduction's reads
        facts = stages.setdefault(stage.name, {"reads": {}, "writes": list(stage.writes)})
        for read in stage.reads:
            known = facts["reads"].get(read.field)
            if known is None or not any(known["halo"]):
                facts["reads"][read.field] = {"halo": list(read.halo), "corners": read.corners}
    fields = {
        name: {"components": field.size, "per_tile": field.per_tile, "scratch": field.scratch}
        for name, field in program.fields.items()
    }
    mesh = program.problem.mesh
    return {"fields": fields, "stages": stages, "periodic": [mesh.is_periodic(axis) for axis in range(3)]}


def _placement(
    options: RunOptions, program: Program, workers: int, record: RunRecord, notes: Mapping[str, Any]
) -> list[int]:
    """Owner of each tile; where Dask placed tasks, the worker that ran the tile's last step."""
    if "owners" in notes:
        return list(notes["owners"])
    planned = owners(options.placement, program, workers, options.costs)
    if ANYWHERE not in planned:
        return planned
    frame = record.tasks.table().select(["kind", "tile", "worker", "start_ns"]).to_pandas()
    steps = frame[frame["kind"] == "step"].sort_values("start_ns")
    last = steps.groupby("tile")["worker"].last()
    return [int(last.get(tile, 0)) for tile in range(len(program.tiling))]


def _software() -> dict[str, str]:
    found = {"python": platform.python_version()}
    for name in SOFTWARE:
        try:
            found[name] = version(name)
        except PackageNotFoundError:
            continue
    return found


def machine() -> dict[str, Any]:
    """What this process runs on."""
    return {
        "cpus": available_processors(),
        "model": _processor(),
        "system": f"{platform.system()} {platform.machine()}",
    }


def available_processors() -> int:
    """Processors that this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def _processor() -> str:
    try:
        lines = Path("/proc/cpuinfo").read_text(encoding="utf-8").splitlines()
    except OSError:
        return platform.processor() or "unknown"
    names = [line.split(":", 1)[1].strip() for line in lines if line.startswith("model name")]
    return names[0] if names else platform.processor() or "unknown"
