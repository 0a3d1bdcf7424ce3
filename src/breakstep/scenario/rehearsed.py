"""Scenarios with steps by timer: filling in what they leave out, the rules for ``[timers]``, and the steps.

A scenario by timers alone has no gas: what the file need not say about it is filled in here, and stays unused.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import numpy as np

from breakstep.mesh.fields import Field
from breakstep.mesh.mesh import AXIS_NAMES, Mesh, Triple
from breakstep.mesh.tiling import Tiling
from breakstep.scenario.faults import Fault
from breakstep.scenario.model import SWITCHES
from breakstep.scenario.reading import Rule
from breakstep.scenario.timer_tables import MOST_FACE_BYTES
from breakstep.scenario.timers import Records, read_records
from breakstep.steps.problem import Problem
from breakstep.steps.reduction import Reduction
from breakstep.steps.rehearsal import TimedStep, counting_fields, rehearsal, timed_among
from breakstep.steps.splitting import Item
from breakstep.steps.timed import Schedule

BUILT_IN: Mapping[str, tuple[str, ...]] = {
    "hydro": ("sweep_x", "sweep_y", "sweep_z"),
    "burning": ("burn",),
    "transport": ("assemble", "relax", "solve", "residual", "exchange"),
}
"""Names that the real steps of a table, their repeats and their reductions go by."""
GROUPS = {"hydro": "local", "burning": "local", "transport": "radiation"}


def beside(folder: Path, tables: dict[str, Any]) -> dict[str, Any]:
    """The tables of a scenario's file, with the path of its records made one that does not depend on the file's."""
    timers = tables.get("timers")
    if isinstance(timers, dict) and isinstance(timers.get("file"), str):
        timers["file"] = str((folder / timers["file"]).absolute())
    return tables


def complete(tables: dict[str, Any]) -> None:
    """Fill in what a scenario by timers alone leaves out; in place."""
    timers = tables.get("timers")
    if not isinstance(timers, Mapping) or any(tables.get(name) is not None for name in SWITCHES):
        return
    ranks = timers.get("ranks")
    if isinstance(ranks, list | tuple) and all(isinstance(n, int) and n > 0 for n in ranks):
        mesh = _inner(tables, "mesh")
        mesh.setdefault("zones", list(ranks))
        mesh.setdefault("size", [float(n) for n in ranks])
        mesh.setdefault("tile", [1] * len(ranks))
    _inner(tables, "run").setdefault("splitting", "lie")
    _inner(tables, "time_step").setdefault("maximum", 1.0)
    tables.setdefault("eos", {"kind": "gamma_law"})
    tables.setdefault("initial", {"kind": "uniform", "density": 1.0, "temperature": 1.0})


def _inner(tables: dict[str, Any], name: str) -> dict[str, Any]:
    """A table to fill in; one that is no table is left for the checks."""
    table = tables.setdefault(name, {})
    return table if isinstance(table, dict) else {}


def is_timed_alone(file: Any) -> bool:
    """Whether all steps of a scenario are by timer."""
    return file.timers is not None and all(getattr(file, name) is None for name in SWITCHES)


# ---- rules ---------------------------------------------------------------------------------------


def _names_once(file: Any) -> Iterator[Fault]:
    if file.timers is None:
        return
    names = [step.name for step in file.timers.steps]
    taken = {"dt", *(name for table, own in BUILT_IN.items() if getattr(file, table) is not None for name in own)}
    for number, name in enumerate(names):
        key = f"timers.steps.{number}.name"
        if name in names[:number]:
            yield Fault(key, f"{name} is listed twice")
        if name in taken:
            yield Fault(key, f"{name} is the name of something built in; choose another, in the records as well")


def _order_of_timed(file: Any) -> Iterator[Fault]:
    if file.timers is None:
        return
    alone = is_timed_alone(file)
    if alone and file.run.splitting != "lie":
        yield Fault("run.splitting", 'steps by timer alone run in the order given; leave this out or say "lie"')
    if alone and file.run.end_time is not None:
        yield Fault("run.end_time", "steps by timer have no time of their own; leave this out, run.cycles is enough")
    for number, step in enumerate(file.timers.steps):
        key = f"timers.steps.{number}"
        if step.after is not None and getattr(file, step.after) is None:
            yield Fault(f"{key}.after", f"there is no [{step.after}] in this scenario")
        if step.face_bytes is not None and not alone:
            yield Fault(f"{key}.face_bytes", "among real steps the ghost zones of the gas are sent; leave this out")


def _halos_of_timed(file: Any) -> Iterator[Fault]:
    if file.timers is None:
        return
    axes = AXIS_NAMES[: len(file.mesh.zones)]
    for number, step in enumerate(file.timers.steps):
        key = f"timers.steps.{number}"
        for axis in step.axes:
            if axis not in axes:
                yield Fault(f"{key}.axes", f"the mesh has no axis {axis}")
        if (step.axes or step.corners) and not step.halo:
            yield Fault(f"{key}.halo", "expected at least 1, since axes or corners of an exchange are given")
        if is_timed_alone(file) and step.halo > 1:
            yield Fault(f"{key}.halo", f"a rank is one zone here, so expected 0 or 1, came {step.halo}")
        narrowest = min(_narrowest(zones, tile) for zones, tile in zip(file.mesh.zones, file.mesh.tile, strict=True))
        if not is_timed_alone(file) and step.halo > narrowest:
            yield Fault(f"{key}.halo", f"expected at most {narrowest}, the narrowest tile, came {step.halo}")


def _narrowest(zones: int, tile: int) -> int:
    return zones % tile or tile


def _ranks_of_timed(file: Any) -> Iterator[Fault]:
    """One tile a rank."""
    if file.timers is None:
        return
    if is_timed_alone(file):
        if set(file.mesh.tile) != {1}:
            yield Fault("mesh.tile", "a scenario by timers alone has one zone a rank: expected 1 along each axis")
    elif file.timers.ranks is not None:
        yield Fault("timers.ranks", "among real steps the tiles of the mesh are the ranks; leave this out")
    if file.timers.ranks is not None and is_timed_alone(file) and file.timers.ranks != file.mesh.zones:
        yield Fault("timers.ranks", f"expected what mesh.zones says, {list(file.mesh.zones)}; give one of them")


def _records_are_sound(file: Any) -> Iterator[Fault]:
    if file.timers is None:
        return
    records, faults = read_records(Path(file.timers.file), _names(file), _ranks(file))
    for fault in faults:
        yield Fault("timers.file", fault)
    if records is not None and records.cycles < file.run.cycles:
        yield Fault("run.cycles", f"expected at most the {records.cycles} cycles that are recorded")
    if records is not None:
        yield from _sizes(file, records)


def _sizes(file: Any, records: Records) -> Iterator[Fault]:
    """What an exchange sends must be said somewhere."""
    for number, step in enumerate(file.timers.steps):
        if is_timed_alone(file) and step.halo and step.face_bytes is None and not records.sent:
            key = f"timers.steps.{number}.face_bytes"
            yield Fault(key, "is missing; expected bytes sent to one neighbour, or a column bytes in the records")
        if is_timed_alone(file) and step.halo and step.face_bytes is None:
            sent = records.sent.get(step.name, 0.0) / _faces(step, len(file.mesh.zones))
            if sent > MOST_FACE_BYTES:
                yield Fault(
                    f"timers.steps.{number}.face_bytes",
                    f"the records have {sent:.3g} bytes sent to one neighbour, and a rehearsal moves at most"
                    f" {MOST_FACE_BYTES:g}; give a number up to that",
                )


TIMER_RULES: tuple[Rule, ...] = (
    _names_once,
    _order_of_timed,
    _halos_of_timed,
    _ranks_of_timed,
    _records_are_sound,
)


# ---- steps ---------------------------------------------------------------------------------------


def _names(file: Any) -> tuple[str, ...]:
    return tuple(step.name for step in file.timers.steps)


def _ranks(file: Any) -> int:
    return math.prod(-(-zones // tile) for zones, tile in zip(file.mesh.zones, file.mesh.tile, strict=False))


def _records(file: Any) -> Records:
    records, faults = read_records(Path(file.timers.file), _names(file), _ranks(file))
    assert records is not None, faults  # the rules have looked
    return records


def timed_problem(file: Any, mesh: Mesh, dt: Reduction) -> Problem:
    """The problem of a scenario by timers alone."""
    table = file.timers
    steps = timed_steps(file, mesh)
    reduction = dt if table.reduction else None
    title = file.title or file.name
    return rehearsal(file.name, title, mesh, steps, reduction, file.run.cycles, table.dilate)


def timed_steps(file: Any, mesh: Mesh) -> list[TimedStep]:
    """The steps of ``[timers]``; none without that table."""
    if file.timers is None:
        return []
    records = _records(file)
    order = rank_of_tile(mesh, file.mesh.tile, file.timers.numbering)
    return [_timed_step(table, records, order, mesh) for table in file.timers.steps]


def _faces(step: Any, dimensions: int) -> int:
    """Neighbours across faces, among which what a rank sends in a call is divided."""
    return 2 * len(set(step.axes) or AXIS_NAMES[:dimensions])


def _timed_step(table: Any, records: Records, order: list[int], mesh: Mesh) -> TimedStep:
    halo = _halo(table, mesh)
    faces = max(1, 2 * sum(width > 0 for width in halo))
    sent = table.face_bytes if table.face_bytes is not None else records.sent.get(table.name, 0.0) / faces
    schedule = Schedule(records.seconds[table.name][:, :, order])
    return TimedStep(table.name, schedule, halo, table.corners, sent, table.lag)


def _halo(table: Any, mesh: Mesh) -> Triple:
    axes = table.axes or AXIS_NAMES[: mesh.dimensions]
    x, y, z = (table.halo if name in axes else 0 for name in AXIS_NAMES)
    return x, y, z


def rank_of_tile(mesh: Mesh, tile: tuple[int, ...], numbering: str) -> list[int]:
    """The rank whose records each tile takes."""
    grid = Tiling(mesh, tile).grid
    ranks = np.arange(math.prod(grid))
    if numbering == "first_axis_fastest":
        ranks = ranks.reshape(grid, order="F").reshape(-1)
    return [int(rank) for rank in ranks]


def timed_items(file: Any, mesh: Mesh, group: str, uses: tuple[str, ...]) -> dict[str, list[Item]]:
    """Steps by timer among the real ones of a group, by the table that they follow."""
    found: dict[str, list[Item]] = {}
    if file.timers is None:
        return found
    last = "burning" if file.burning is not None else "hydro" if file.hydro is not None else "transport"
    for table, step in zip(file.timers.steps, timed_steps(file, mesh), strict=True):
        after = table.after or last
        if GROUPS[after] == group:
            found.setdefault(after, []).append(timed_among(step, "gas", uses, file.timers.dilate))
    return found


def timed_fields(file: Any, mesh: Mesh) -> tuple[Field, ...]:
    """Fields that steps by timer need beside the gas."""
    return counting_fields(timed_steps(file, mesh))
