"""Checkpoints: the state between two cycles, on disk, whole or not at all.

A checkpoint is a Zarr store with one array a field over the whole mesh, a chunk a tile. Each worker writes
the chunks of its own tiles into a folder whose name ends in ``.partial``, so the folder must lie on a file
system that all of them see. When all have reported, the driver writes the manifest with a digest of every
tile and renames the folder; one that still ends in ``.partial`` is not a checkpoint. Everything read is
checked against its digest.
"""

from __future__ import annotations

import hashlib
import json
import shutil
import uuid
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
KEPT = 2  # the newest, and one more should it turn out to be damaged


def folder_of(root: Path, cycle: int) -> Path:
    """Folder of the checkpoint at the end of a cycle."""
    return root / f"cycle-{cycle:08d}"


def partial_folder(root: Path, cycle: int, run: str) -> Path:
    """Where one run puts a checkpoint together: what a run that was given up still writes is in nobody's way."""
    return root / f"cycle-{cycle:08d}.{run}.partial"


def save_tiles(
    root: Path, cycle: int, program: Program, tiles: Mapping[int, Mapping[str, Array]], run: str
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
            target = _array(partial_folder(root, cycle, run) / name, program)
            digests[name] = {}
            for tile, arrays in tiles.items():
                place = program.tiling.tiles[tile]
                target[(slice(None), *place.slices())] = arrays[name]
                digests[name][tile] = array_digest(name, arrays[name])
    except OSError as error:
        raise OutputError(
            f"the checkpoint of cycle {cycle} cannot be written to {root} ({error.strerror or error});"
            " the run stops, and the last complete checkpoint, if there is one, can be resumed"
        ) from error
    return digests


def _array(path: Path, program: Program) -> Any:
    """The Zarr array of one field, made by whichever worker comes first."""
    if not path.is_dir():
        _create(path, program)
    return zarr.open_array(path, mode="r+", zarr_format=3)


def _create(path: Path, program: Program) -> None:
    """Make an empty array aside and move it into place, so that whoever comes second finds it whole."""
    size = program.fields[path.name].size
    chunk = tuple(max(tile.shape[axis] for tile in program.tiling.tiles) for axis in range(3))
    aside = path.with_name(f".{path.name}-{uuid.uuid4().hex}")
    zarr.create_array(
        store=str(aside),
        shape=(size, *program.problem.mesh.zones),
        chunks=(size, *chunk),
        dtype="float64",
        fill_value=float("nan"),
        compressors=None,
    )
    try:
        aside.rename(path)
    except OSError:
        shutil.rmtree(aside, ignore_errors=True)
        if not path.is_dir():
            raise


def complete(
    root: Path,
    cycle: int,
    program: Program,
    digests: Mapping[str, Mapping[int, str]],
    values: Mapping[str, Any],
    facts: Mapping[str, Any],
    run: str,
) -> Path:
    """Write the manifest and give the folder its final name; older checkpoints are removed, the newest two stay.

    Raises
    ------
    OutputError
        The disk does not take it.
    """
    partial, final = partial_folder(root, cycle, run), folder_of(root, cycle)
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
    manifest["digest"] = _digest_of(manifest)
    try:
        (partial / MANIFEST).write_text(json.dumps(manifest, indent=1), encoding="utf-8")
        if final.exists():
            _remove(final)
        partial.replace(final)
        for old in checkpoints(root)[:-KEPT]:
            _remove(old)
    except OSError as error:
        raise OutputError(
            f"the checkpoint of cycle {cycle} cannot be completed in {root} ({error.strerror or error})"
        ) from error
    return final


def _remove(folder: Path) -> None:
    """Half a checkpoint must not look like a whole one, should this be interrupted."""
    doomed = folder.with_name(f"{folder.name}.old.partial")
    folder.replace(doomed)
    shutil.rmtree(doomed)


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
    missing = {"cycle", "mesh", "tile", "fields", "values", "scenario", "digest"} - manifest.keys()
    if missing:
        raise CheckpointError(f"{path}: {', '.join(sorted(missing))} missing; resume from another checkpoint")
    if manifest["digest"] != _digest_of(manifest):
        raise CheckpointError(f"{path}: it does not say what was written; resume from another checkpoint")
    return manifest


def _digest_of(manifest: Mapping[str, Any]) -> str:
    """SHA-256 of all that a manifest says beside its own digest."""
    said = {key: value for key, value in manifest.items() if key != "digest"}
    return hashlib.sha256(json.dumps(said, sort_keys=True).encode()).hexdigest()


def load_tiles(folder: Path, program: Program, tiles: Sequence[int]) -> dict[int, dict[str, Array]]:
    """The state of some tiles, each array checked against its digest.

    Raises
    ------
    CheckpointError
        The checkpoint is of another mesh, or an array is missing, misshapen or not what was written.
    """
    manifest = read_manifest(folder)
    _check_shape(folder, manifest, program)
    state: dict[int, dict[str, Array]] = {tile: {} for tile in tiles}
    for name in program.state_fields:
        for tile in tiles:
            state[tile][name] = _load(folder, name, tile, program, manifest)
    return {tile: {**program.scratch_values(tile), **state[tile]} for tile in tiles}


def _check_shape(folder: Path, manifest: Mapping[str, Any], program: Program) -> None:
    for what, ours in (("mesh", program.problem.mesh.zones), ("tile", program.tile_shape)):
        if list(ours) != manifest[what]:
            raise CheckpointError(
                f"{folder}: its {what} has {manifest[what]} zones, the problem's {list(ours)};"
                " resume without changing it"
            )


def _load(folder: Path, name: str, tile: int, program: Program, manifest: Mapping[str, Any]) -> Array:
    """One field of one tile, checked and write-protected."""
    where = f"{folder}: field {name!r} of tile {tile}"
    try:
        source = zarr.open_array(folder / name, mode="r", zarr_format=3)
        array = np.ascontiguousarray(source[(slice(None), *program.tiling.tiles[tile].slices())])
        same = array_digest(name, array) == manifest["fields"][name][tile]
    except Exception as error:  # what a damaged file makes a reader raise is anybody's guess
        raise CheckpointError(f"{where} cannot be read ({error!r}); resume from another checkpoint") from error
    if not same:
        raise CheckpointError(f"{where} is not what was written; resume from another checkpoint")
    array.flags.writeable = False
    return array


def load_values(folder: Path, program: Program) -> list[Array]:
    """Results of cycle-level reductions to go on from, in the order of the splitting.

    Raises
    ------
    CheckpointError
        They are of other reductions, or of other lags.
    """
    values = read_manifest(folder)["values"]
    reductions = program.problem.splitting.reductions
    found = {name: len(rows) - 1 for name, rows in values.items()}
    expected = {reduction.name: reduction.lag for reduction in reductions}
    if found != expected:
        raise CheckpointError(
            f"{folder}: it holds reductions with lags {found}, the problem has {expected}; resume without changing them"
        )
    return [np.array(values[reduction.name], dtype=np.float64) for reduction in reductions]
