"""Checkpoints: the state between two cycles, on disk, whole or not at all.

A checkpoint is a Zarr store with one array a field over the whole mesh, a chunk a tile. Each worker writes
the chunks of its own tiles into a folder whose name ends in ``.partial``, so the folder must lie on a file
system that all of them see. When all have reported, the driver writes the manifest with a digest of every
tile and renames the folder; one that still ends in ``.partial`` is not a checkpoint. Everything read is
checked against its digest.
"""

from __future__ import annotations

import json
import shutil
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import zarr

from breakstep.engine.program import Program
from breakstep.errors import CheckpointError, OutputError
from breakstep.profile.digest import array_digest
from breakstep.steps.step import Array

MANIFEST = "checkpoint.json"
VERSION = 1


def folder_of(root: Path, cycle: int, *, partial: bool = False) -> Path:
    """Folder of the checkpoint at the end of a cycle."""
    return root / f"cycle-{cycle:08d}{'.partial' if partial else ''}"


def save_tiles(
    root: Path, cycle: int, program: Program, tiles: Mapping[int, Mapping[str, Array]]
) -> dict[str, dict[int, str]]:
    """Write some tiles' chunks; returns their digests by field and tile.

    Raises
    ------
    OutputError
        The disk does not take them.
    """
    digests: dict[str, dict[int, str]] = {}
    try:
        for name in program.state_fields:
            target = _array(folder_of(root, cycle, partial=True), name, program)
            digests[name] = {}
            for tile, arrays in tiles.items():
                place = program.tiling.tiles[tile]
                target[(slice(None), *place.slices())] = arrays[name]
                digests[name][tile] = array_digest(name, arrays[name])
    except OSError as error:
        raise OutputError(
            f"the checkpoint of cycle {cycle} cannot be written to {root} ({error.strerror or error});"
            " the run stops, and the checkpoint before it can be resumed"
        ) from error
    return digests


def _array(folder: Path, name: str, program: Program) -> Any:
    """The Zarr array of one field, made by whichever worker comes first."""
    mesh = program.problem.mesh
    size = program.fields[name].size
    chunk = tuple(max(tile.shape[axis] for tile in program.tiling.tiles) for axis in range(3))
    path = folder / name
    try:
        return zarr.open_array(path, mode="r+", zarr_format=3)
    except FileNotFoundError:
        pass
    try:
        return zarr.create_array(
            store=str(path),
            shape=(size, *mesh.zones),
            chunks=(size, *chunk),
            dtype="float64",
            fill_value=float("nan"),
            compressors=None,
        )
    except (FileExistsError, ValueError):  # another worker made it meanwhile
        return zarr.open_array(path, mode="r+", zarr_format=3)


def complete(
    root: Path,
    cycle: int,
    program: Program,
    digests: Mapping[str, Mapping[int, str]],
    values: Mapping[str, Any],
    facts: Mapping[str, Any],
) -> Path:
    """Write the manifest and give the folder its final name; older checkpoints are removed, the newest two stay.

    Raises
    ------
    OutputError
        The disk does not take it.
    """
    partial, final = folder_of(root, cycle, partial=True), folder_of(root, cycle)
    tiles = range(len(program.tiling))
    manifest = {
        "version": VERSION,
        "cycle": cycle,
        "mesh": list(program.problem.mesh.zones),
        "tile": list(program.tile_shape),
        "fields": {name: [digests[name][tile] for tile in tiles] for name in program.state_fields},
        "values": {name: np.asarray(rows).tolist() for name, rows in values.items()},
        **facts,
    }
    try:
        (partial / MANIFEST).write_text(json.dumps(manifest, indent=1), encoding="utf-8")
        if final.exists():
            shutil.rmtree(final)
        partial.replace(final)
        for old in checkpoints(root)[:-2]:
            shutil.rmtree(old)
    except OSError as error:
        raise OutputError(
            f"the checkpoint of cycle {cycle} cannot be completed in {root} ({error.strerror or error})"
        ) from error
    return final


def checkpoints(root: Path) -> list[Path]:
    """Complete checkpoints, oldest first."""
    found = root.glob("cycle-*") if root.is_dir() else iter(())
    return sorted(p for p in found if not p.name.endswith(".partial") and (p / MANIFEST).is_file())


def last_checkpoint(root: Path) -> Path:
    """The newest complete checkpoint in a folder, or the folder itself if it is one.

    Raises
    ------
    CheckpointError
        There is none.
    """
    if (root / MANIFEST).is_file():
        return root
    found = checkpoints(root)
    if not found:
        raise CheckpointError(f"{root} holds no complete checkpoint; run with --checkpoint-every to make some")
    return found[-1]


def discard_partial(root: Path) -> None:
    """Remove what an interrupted run left unfinished."""
    for path in root.glob("cycle-*.partial") if root.is_dir() else ():
        shutil.rmtree(path, ignore_errors=True)


def read_manifest(folder: Path) -> dict[str, Any]:
    """A checkpoint's manifest.

    Raises
    ------
    CheckpointError
        It is missing, not JSON, or of another version.
    """
    path = folder / MANIFEST
    try:
        manifest = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        raise CheckpointError(f"{path}: not a readable checkpoint ({error}); resume from another") from error
    if not isinstance(manifest, dict) or manifest.get("version") != VERSION:
        raise CheckpointError(f"{path}: expected a checkpoint of version {VERSION}; resume from another")
    missing = {"cycle", "mesh", "tile", "fields", "values", "scenario"} - manifest.keys()
    if missing:
        raise CheckpointError(f"{path}: {', '.join(sorted(missing))} missing; resume from another checkpoint")
    return manifest


def load_tiles(folder: Path, program: Program, tiles: Sequence[int]) -> dict[int, dict[str, Array]]:
    """The state of some tiles, each array checked against its digest.

    Raises
    ------
    CheckpointError
        An array is missing, misshapen or not what was written.
    """
    manifest = read_manifest(folder)
    state: dict[int, dict[str, Array]] = {tile: {} for tile in tiles}
    for name in program.state_fields:
        try:
            source = zarr.open_array(folder / name, mode="r", zarr_format=3)
            for tile in tiles:
                array = np.ascontiguousarray(source[(slice(None), *program.tiling.tiles[tile].slices())])
                if array_digest(name, array) != manifest["fields"][name][tile]:
                    raise CheckpointError(
                        f"{folder}: field {name!r} of tile {tile} is not what was written; resume from another"
                    )
                array.flags.writeable = False
                state[tile][name] = array
        except (OSError, ValueError, KeyError, IndexError, TypeError) as error:
            raise CheckpointError(
                f"{folder}: field {name!r} cannot be read ({error}); resume from another"
            ) from error
    for tile in tiles:
        place = program.tiling.tiles[tile]
        scratch = {n: np.zeros(f.shape(place.shape)) for n, f in program.fields.items() if f.per_tile}
        state[tile] = {**scratch, **state[tile]}
    return state


def load_values(folder: Path, program: Program) -> list[Array]:
    """Results of cycle-level reductions to go on from, in the order of the splitting."""
    values = read_manifest(folder)["values"]
    return [np.array(values[reduction.name]) for reduction in program.problem.splitting.reductions]
