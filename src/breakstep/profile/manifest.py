"""The manifest of a profile: what was run, where, how, and how it ended.

It is JSON, and it is written last: a folder without one is not a complete profile. This module says
which keys a manifest has and finds what is wrong with one; it does not touch files.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping
from typing import Any, Final, TypedDict

from breakstep.profile.schema import LAYOUTS, SCHEMA_VERSION

STATUSES = ("complete", "interrupted", "failed")


class Manifest(TypedDict):
    """What a manifest holds.

    Attributes
    ----------
    schema_version : int
        Written by the store.
    breakstep : str
        Version of the program.
    software : dict of str to str
        Versions of python, numpy, numba, dask, distributed and so on.
    machine : dict
        What was run on: ``cpus``, ``model``, ``system``.
    scenario : dict
        ``name``, ``title``, and the whole resolved scenario.
    mode : str
        "lockstep", "tasked", or another choice of barriers.
    barriers : list of str
        The barriers that were on.
    dispatch : str
        How tasks were dispatched.
    workers, threads, cycles : int
        Workers; worker threads of all workers together; cycles completed.
    mesh : dict
        ``shape`` [zones], ``tile_shape`` [zones], and ``tiles``: for each its ``origin`` (first zone) and
        ``shape``. Always three entries, 1 zone along an axis that is not there.
    placement : list of int
        The worker that owns each tile.
    status, message : str
        "complete", "interrupted" or "failed"; why, where it is not complete.
    clock : dict
        ``method`` of alignment, and ``residual_ns``: one number per worker [ns].
    wall_seconds : float
        Wall time of the run as its driver saw it [s].
    digests : dict of str to list of str
        SHA-256 of each field on each tile.
    digest : str
        SHA-256 over all of them.
    notes : dict
        Remarks of the engine.
    started : str
        ISO 8601 date and time.
    rows : dict of str to int
        Rows of each table; written by the store.
    """

    schema_version: int
    breakstep: str
    software: dict[str, str]
    machine: dict[str, Any]
    scenario: dict[str, Any]
    mode: str
    barriers: list[str]
    dispatch: str
    workers: int
    threads: int
    cycles: int
    mesh: dict[str, Any]
    placement: list[int]
    status: str
    message: str
    clock: dict[str, Any]
    wall_seconds: float
    digests: dict[str, list[str]]
    digest: str
    notes: dict[str, Any]
    started: str
    rows: dict[str, int]


def _is_count(value: Any) -> bool:
    return isinstance(value, int) and not isinstance(value, bool) and value >= 0


def _is_number(value: Any) -> bool:
    return _is_count(value) or (isinstance(value, float) and math.isfinite(value))


def _is_text(value: Any) -> bool:
    return isinstance(value, str)


def _is_mapping(value: Any) -> bool:
    return isinstance(value, Mapping) and all(isinstance(key, str) for key in value)


def _is_list_of(check: Callable[[Any], bool]) -> Callable[[Any], bool]:
    return lambda value: isinstance(value, list) and all(check(item) for item in value)


def _is_mapping_to(check: Callable[[Any], bool]) -> Callable[[Any], bool]:
    return lambda value: _is_mapping(value) and all(check(item) for item in value.values())


_CHECKS: Final[Mapping[str, tuple[str, Callable[[Any], bool]]]] = {
    "schema_version": ("a whole number", _is_count),
    "breakstep": ("text", _is_text),
    "software": ("names with versions as text", _is_mapping_to(_is_text)),
    "machine": ("a table", _is_mapping),
    "scenario": ("a table", _is_mapping),
    "mode": ("text", _is_text),
    "barriers": ("a list of names", _is_list_of(_is_text)),
    "dispatch": ("text", _is_text),
    "workers": ("a whole number", _is_count),
    "threads": ("a whole number", _is_count),
    "cycles": ("a whole number", _is_count),
    "mesh": ("a table", _is_mapping),
    "placement": ("a list of worker numbers", _is_list_of(_is_count)),
    "status": (f"one of {', '.join(STATUSES)}", lambda value: value in STATUSES),
    "message": ("text", _is_text),
    "clock": ("a table", _is_mapping),
    "wall_seconds": ("a number of seconds", lambda value: _is_number(value) and value >= 0),
    "digests": ("fields with a list of digests each", _is_mapping_to(_is_list_of(_is_text))),
    "digest": ("text", _is_text),
    "notes": ("a table", _is_mapping),
    "started": ("a date and time as text", _is_text),
    "rows": ("tables with their numbers of rows", _is_mapping_to(_is_count)),
}


def first_fault(manifest: Any) -> str | None:
    """What is wrong with a manifest, as half a sentence, or None for a sound one.

    Faults of a later kind are only looked for where those of an earlier kind are absent: the schema's
    version, the keys and their types, then whether they agree with each other.
    """
    if not _is_mapping(manifest):
        return f"expected a JSON object, not {type(manifest).__name__}"
    version = manifest.get("schema_version")
    if version != SCHEMA_VERSION:
        return f"schema_version is {version!r}, this program reads version {SCHEMA_VERSION}"
    return next(_type_faults(manifest), None) or next(_agreement_faults(manifest), None)


def _type_faults(manifest: Mapping[str, Any]) -> Iterator[str]:
    for key, (expected, check) in _CHECKS.items():
        if key not in manifest:
            yield f"key {key} is missing"
        elif not check(manifest[key]):
            yield f"key {key}: expected {expected}, not {_shortened(manifest[key])}"


def _shortened(value: Any) -> str:
    text = repr(value)
    return text if len(text) <= 60 else f"{text[:57]}..."


def _agreement_faults(manifest: Mapping[str, Any]) -> Iterator[str]:
    if set(manifest["rows"]) != set(LAYOUTS):
        yield f"key rows: expected the tables {', '.join(LAYOUTS)}, not {', '.join(manifest['rows'])}"
    yield from _mesh_faults(manifest["mesh"])
    tiles = len(manifest["mesh"]["tiles"])
    if len(manifest["placement"]) != tiles:
        yield f"key placement: expected a worker for each of {tiles} tiles, not {len(manifest['placement'])}"
    for worker in manifest["placement"]:
        if worker >= manifest["workers"]:
            yield f"key placement: worker {worker} does not exist, the run had {manifest['workers']}"
    for name, digests in manifest["digests"].items():
        if len(digests) != tiles:
            yield f"key digests: field {name} has {len(digests)} digests for {tiles} tiles"


def _mesh_faults(mesh: Mapping[str, Any]) -> Iterator[str]:
    for key in ("shape", "tile_shape"):
        if not _is_extent(mesh.get(key)):
            yield f"key mesh.{key}: expected three positive whole numbers, not {_shortened(mesh.get(key))}"
    tiles = mesh.get("tiles")
    if not isinstance(tiles, list):
        yield f"key mesh.tiles: expected a list of tiles, not {_shortened(tiles)}"
        return
    for number, tile in enumerate(tiles):
        if not _lies_inside(tile, mesh["shape"]):
            yield (
                f"key mesh.tiles: tile {number} needs an origin and a shape of three zones each inside the"
                f" mesh {mesh['shape']}, not {_shortened(tile)}"
            )
    zones = sum(math.prod(tile["shape"]) for tile in tiles)
    if zones != math.prod(mesh["shape"]):
        yield f"key mesh.tiles: the tiles hold {zones} zones, the mesh {math.prod(mesh['shape'])}"


def _is_triple(value: Any) -> bool:
    return isinstance(value, list) and len(value) == 3 and all(_is_count(item) for item in value)


def _is_extent(value: Any) -> bool:
    return _is_triple(value) and min(value) >= 1


def _lies_inside(tile: Any, mesh_shape: list[int]) -> bool:
    if not _is_mapping(tile) or not _is_triple(tile.get("origin")) or not _is_extent(tile.get("shape")):
        return False
    ends = [o + n for o, n in zip(tile["origin"], tile["shape"], strict=True)]
    return all(end <= n for end, n in zip(ends, mesh_shape, strict=True))
