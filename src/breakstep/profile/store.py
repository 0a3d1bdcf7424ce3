"""Profiles on disk: a folder of Parquet tables, a Zarr store and a JSON manifest, and nothing else.

The manifest is written last and in one step, so that a folder either holds a complete profile or none.
Nothing is ever unpickled. Whatever is wrong with a folder comes out as a :class:`ProfileError` that says
which file and what is wrong.
"""

from __future__ import annotations

import json
import os
import shutil
from collections.abc import Mapping
from pathlib import Path
from typing import Any, NoReturn, cast

import pyarrow as pa
import pyarrow.parquet as pq
import xarray as xr

from breakstep.errors import OutputError, ProfileError
from breakstep.profile.checks import sound_frames
from breakstep.profile.fields import dataset_of, read_fields, write_fields
from breakstep.profile.manifest import Manifest, first_fault
from breakstep.profile.record import RunRecord
from breakstep.profile.run import Profile
from breakstep.profile.schema import LAYOUTS, TableLayout
from breakstep.profile.settle import settled

MANIFEST = "manifest.json"
FIELDS = "fields.zarr"
_REMEDY = "record the run again, or restore the folder from a copy"


def write_profile(record: RunRecord, folder: Path, *, overwrite: bool = False) -> Profile:
    """Store what a run recorded.

    Parameters
    ----------
    folder : Path
        Made if need be. It may hold files of other kinds, which stay.
    overwrite : bool
        Replace a complete profile that is there already.

    Returns
    -------
    Profile
        The same as reading it back gives.

    Raises
    ------
    OutputError
        The folder holds a profile already, or cannot be written.
    ProfileError
        The record contradicts itself. The tables are on disk then, for a look, but no manifest.
    """
    if (folder / MANIFEST).exists() and not overwrite:
        raise OutputError(
            f"{folder}: holds a profile already; choose another folder, or ask for it to be replaced",
            folder=str(folder),
        )
    manifest, tables = settled(record)
    dataset = dataset_of(record)
    try:
        _clear(folder)
        _write_tables(tables, folder)
        write_fields(dataset, folder / FIELDS)
    except OSError as fault:
        raise OutputError(f"{folder}: the profile cannot be written: {fault.strerror or fault}") from fault
    sound = _checked_manifest(manifest, folder / MANIFEST)
    frames = sound_frames(tables, sound, lambda table: str(_table_file(folder, table)))
    _write_manifest(manifest, folder)
    return Profile(sound, frames, dataset, folder)


def _clear(folder: Path) -> None:
    """Take away what an earlier profile left, the manifest first."""
    folder.mkdir(parents=True, exist_ok=True)
    (folder / MANIFEST).unlink(missing_ok=True)
    for name in LAYOUTS:
        _table_file(folder, name).unlink(missing_ok=True)
    if (folder / FIELDS).is_dir():
        shutil.rmtree(folder / FIELDS)


def _table_file(folder: Path, table: str) -> Path:
    return folder / f"{table}.parquet"


def _write_tables(tables: Mapping[str, pa.Table], folder: Path) -> None:
    for name, table in tables.items():
        whole = [f.name for f in table.schema if pa.types.is_integer(f.type)]
        # Differences of neighbouring rows are small in every integer column: measured on five of them, 5.5
        # bytes a row, against 8.0 without an encoding and 13.6 with a dictionary. Words are kept as one.
        encoding: dict[str, Any] = {
            "use_dictionary": [f.name for f in table.schema if pa.types.is_dictionary(f.type)],
            "column_encoding": dict.fromkeys(whole, "DELTA_BINARY_PACKED"),
        }
        file = _table_file(folder, name)
        pq.write_table(table, file, compression="zstd", write_page_checksum=True, **encoding)


def _checked_manifest(manifest: Any, place: Path) -> Manifest:
    fault = first_fault(manifest)
    if fault:
        raise ProfileError(f"{place}: {fault}; {_REMEDY}", file=str(place))
    return cast(Manifest, manifest)


def _write_manifest(manifest: Mapping[str, Any], folder: Path) -> None:
    """Write under another name, then rename, so that no half-written manifest is ever seen."""
    unfinished = folder / f"{MANIFEST}.unfinished"
    try:
        with unfinished.open("w", encoding="utf-8") as file:
            json.dump(manifest, file, indent=1, allow_nan=False)
            file.flush()
            os.fsync(file.fileno())
        unfinished.replace(folder / MANIFEST)
    except OSError as fault:
        raise OutputError(f"{folder}: the manifest cannot be written: {fault.strerror or fault}") from fault


def read_profile(folder: Path, *, check_digests: bool = True) -> Profile:
    """Read a profile and check it.

    Parameters
    ----------
    check_digests : bool
        Also read all final fields once and compare them with their digests.

    Raises
    ------
    ProfileError
        Anything is missing, damaged, of another version, or in contradiction.
    """
    manifest = read_manifest(folder)
    tables = {name: _read_table(layout, folder, manifest) for name, layout in LAYOUTS.items()}
    frames = sound_frames(tables, manifest, lambda table: str(_table_file(folder, table)))
    fields: xr.Dataset = read_fields(folder / FIELDS, manifest, check_digests=check_digests)
    return Profile(manifest, frames, fields, folder)


def profiles_in(folder: Path) -> list[Path]:
    """The folder itself if it holds a profile, else those of its folders that do, by name."""
    if (folder / MANIFEST).is_file():
        return [folder]
    return sorted(file.parent for file in folder.glob(f"*/{MANIFEST}"))


def read_manifest(folder: Path) -> Manifest:
    """Read and check the manifest alone.

    Raises
    ------
    ProfileError
        There is none, or it is damaged, of another version, or in contradiction with itself.
    """
    file = folder / MANIFEST
    if not file.is_file():
        raise _no_manifest(folder)
    try:
        manifest = json.loads(file.read_bytes(), parse_constant=_refuse)
    except (OSError, ValueError, RecursionError) as fault:
        raise ProfileError(f"{file}: cannot be read as JSON ({fault}); {_REMEDY}", file=str(file)) from fault
    return _checked_manifest(manifest, file)


def _refuse(constant: str) -> NoReturn:
    raise ValueError(f"{constant} is not JSON")


def _no_manifest(folder: Path) -> ProfileError:
    if not folder.is_dir():
        return ProfileError(f"{folder}: expected a profile folder, there is none; check the path", file=str(folder))
    inside = [path.name for path in profiles_in(folder)]
    if inside:
        hint = f"give one of the {len(inside)} profiles in it: {', '.join(inside)}"
    else:
        hint = "give the folder that a finished run named, or record the run again"
    return ProfileError(f"{folder}: not a complete profile, {MANIFEST} is missing; {hint}", file=str(folder))


def _read_table(layout: TableLayout, folder: Path, manifest: Manifest) -> pa.Table:
    file = _table_file(folder, layout.name)
    if not file.is_file():
        raise ProfileError(f"{file}: expected the table {layout.name}, the file is missing; {_REMEDY}", file=str(file))
    try:
        table = pq.ParquetFile(file, page_checksum_verification=True).read().unify_dictionaries()
        table.validate(full=True)
    except (pa.ArrowException, OSError, ValueError, TypeError, MemoryError) as fault:
        first = (str(fault).strip().splitlines() or [type(fault).__name__])[0]
        raise ProfileError(
            f"{file}: cannot be read as Parquet ({first}); the file is cut short or damaged: {_REMEDY}",
            file=str(file),
        ) from fault
    fault_found = _table_fault(layout, table, manifest["rows"][layout.name])
    if fault_found:
        raise ProfileError(f"{file}: {fault_found}; {_REMEDY}", file=str(file))
    return table.select(layout.names)


def _table_fault(layout: TableLayout, table: pa.Table, rows: int) -> str | None:
    names = table.column_names
    for name in layout.names:
        if names.count(name) != 1:
            return f"column {name}: expected it once, found the columns {', '.join(names) or 'of no name'}"
    for column in layout.columns:
        if table.schema.field(column.name).type != column.type:
            return f"column {column.name}: expected {column.type}, found {table.schema.field(column.name).type}"
    if table.num_rows != rows:
        return f"expected {rows} rows as the manifest says, found {table.num_rows}"
    return None
