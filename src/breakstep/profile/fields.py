"""The final fields of a run as a Zarr (version 3) store that xarray opens.

Each field is one variable with the dimensions (<field>_component, x, y, z). The names of its components
are kept in the attribute ``components`` and come back as the coordinate: Zarr 3 has no settled way to
store text in an array yet. Anybody else reads the store with ``xarray.open_zarr(path, consolidated=False)``.

Only plain float64 arrays with the codecs written here are read: a store that asks for others is refused
before a decoder runs.
"""

from __future__ import annotations

import json
import math
from collections.abc import Hashable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from zarr.codecs import ZstdCodec

from breakstep.errors import ProfileError
from breakstep.profile.digest import overall_digest, tile_digests
from breakstep.profile.manifest import Manifest
from breakstep.profile.record import FinalField, RunRecord

AXES = ("x", "y", "z")
_CODECS = {"bytes", "zstd"}
_REMEDY = "the final fields are damaged: record the run again, or restore the folder from a copy"


def dataset_of(record: RunRecord) -> xr.Dataset:
    """The record's final fields as a data set.

    Raises
    ------
    ProfileError
        Shapes, component names and units do not fit together.
    """
    for name, final in record.fields.items():
        _check_field(name, final, record)
    variables = {name: _variable(name, final) for name, final in record.fields.items()}
    centres = {a: (a, np.asarray(v, float), {"units": "cm"}) for a, v in record.coordinates.items()}
    names = {_component_axis(name): list(final.components) for name, final in record.fields.items()}
    return xr.Dataset(variables, coords={**centres, **names})


def _component_axis(name: str) -> str:
    return f"{name}_component"


def _variable(name: str, final: FinalField) -> xr.Variable:
    values = np.ascontiguousarray(final.values)
    attributes = {"components": list(final.components), "units": final.component_units}
    return xr.Variable((_component_axis(name), *AXES), values, attributes)


def _check_field(name: str, final: FinalField, record: RunRecord) -> None:
    expected = (len(final.components), *(len(record.coordinates.get(axis, ())) for axis in AXES))
    if final.values.shape != expected or final.values.dtype != np.float64:
        raise ProfileError(
            f"record, field {name}: expected float64 values of shape {expected} (components, zone centres"
            f" along x, y, z), not {final.values.dtype} of shape {final.values.shape}; record the whole mesh",
            field=name,
        )
    if len(final.component_units) != len(final.components):
        raise ProfileError(
            f"record, field {name}: expected one unit or one for each of {len(final.components)} components,"
            f" not {len(final.units)}",
            field=name,
        )


def write_fields(dataset: xr.Dataset, path: Path) -> None:
    """Write the store; one chunk per component."""
    stored = dataset.drop_vars([n for n in dataset.coords if n not in AXES])
    squeezed = {"compressors": (ZstdCodec(checksum=True),), "_FillValue": None}
    encoding: dict[Hashable, dict[str, Any]] = {name: dict(squeezed) for name in stored.variables}
    for name, values in stored.data_vars.items():
        encoding[name]["chunks"] = (1, *values.shape[1:])
    stored.to_zarr(path, mode="w", zarr_format=3, consolidated=False, encoding=encoding)


def read_fields(path: Path, manifest: Manifest, *, check_digests: bool = True) -> xr.Dataset:
    """Open the store; values are loaded when they are used.

    Parameters
    ----------
    check_digests : bool
        Read everything once and compare it with the manifest's digests.

    Raises
    ------
    ProfileError
        The store is missing, damaged, foreign, or not what the manifest says.
    """
    _check_metadata(path)
    try:
        dataset = _opened(path, cache=True)
        _check_contents(dataset, manifest, path)
        if check_digests:
            _check_digests(_opened(path, cache=False), manifest, path)
    except ProfileError:
        raise
    except Exception as fault:  # decoders of damaged bytes raise whatever they like, none of it a defect of ours
        raise ProfileError(f"{path}: cannot be read as a Zarr store ({_brief(fault)}); {_REMEDY}") from fault
    return dataset


def _brief(fault: BaseException) -> str:
    lines = str(fault).strip().splitlines()
    return f"{type(fault).__name__}: {lines[0]}" if lines else type(fault).__name__


def _opened(path: Path, *, cache: bool) -> xr.Dataset:
    # chunks=None keeps lazy numpy arrays
    dataset = xr.open_dataset(
        path, engine="zarr", chunks=None, cache=cache, consolidated=False, zarr_format=3, decode_cf=False
    )
    names = {_component_axis(str(n)): list(v.attrs["components"]) for n, v in dataset.data_vars.items()}
    return dataset.assign_coords(names)


def _check_metadata(path: Path) -> None:
    """Refuse a store with arrays that this program would not have written."""
    if not (path / "zarr.json").is_file():
        raise ProfileError(f"{path}: expected a Zarr store with the final fields, found none; {_REMEDY}")
    for file in sorted(path.rglob("zarr.json")):
        for fault in _metadata_faults(file):
            raise ProfileError(f"{file}: {fault}; {_REMEDY}")


def _metadata_faults(file: Path) -> Iterator[str]:
    try:
        described = json.loads(file.read_bytes())
        if described["node_type"] == "group":
            return
        codecs = {codec["name"] for codec in described["codecs"]}
        data_type, shape = described["data_type"], described["shape"]
        zones = math.prod(shape)
    except (OSError, ValueError, KeyError, TypeError, RecursionError) as fault:
        yield f"cannot be read as the description of an array ({_brief(fault)})"
        return
    if data_type != "float64" or not codecs <= _CODECS or zones < 0:
        yield f"expected float64 with the codecs {', '.join(sorted(_CODECS))}, not {data_type} with {codecs}"


def _check_contents(dataset: xr.Dataset, manifest: Manifest, path: Path) -> None:
    """Raise unless the store holds the manifest's fields on the manifest's mesh."""
    held, expected = sorted(map(str, dataset.data_vars)), sorted(manifest["digests"])
    if held != expected:
        raise ProfileError(
            f"{path}: expected the fields {', '.join(expected) or 'none'} of the manifest, found"
            f" {', '.join(held) or 'none'}; {_REMEDY}"
        )
    for name, values in dataset.data_vars.items():
        if values.dims[1:] != AXES or list(values.shape[1:]) != manifest["mesh"]["shape"]:
            found = dict(zip(values.dims, values.shape, strict=True))
            raise ProfileError(
                f"{path}, field {name}: expected {manifest['mesh']['shape']} zones along x, y, z,"
                f" not {found}; {_REMEDY}"
            )
    for axis in AXES:
        centres = dataset.coords[axis].values if axis in dataset.coords else np.empty(0)
        if dataset.data_vars and not (len(centres) and np.all(np.diff(centres) > 0)):
            raise ProfileError(f"{path}/{axis}: expected ascending zone centres; {_REMEDY}")


def _check_digests(dataset: xr.Dataset, manifest: Manifest, path: Path) -> None:
    """Raise unless every field is, to the last bit, what the run left."""
    tiles = manifest["mesh"]["tiles"]
    for name, expected in manifest["digests"].items():
        found = tile_digests(name, dataset[name].values, tiles)
        wrong = [tile for tile, pair in enumerate(zip(found, expected, strict=True)) if pair[0] != pair[1]]
        if wrong:
            raise ProfileError(
                f"{path}, field {name}: the values on tile {wrong[0]} ({len(wrong)} of {len(tiles)} tiles"
                f" differ) do not have the digest that the manifest gives; {_REMEDY}",
                field=name,
                tiles=wrong,
            )
    if overall_digest(manifest["digests"]) != manifest["digest"]:
        raise ProfileError(f"{path.parent}/manifest.json: key digest does not belong to key digests; {_REMEDY}")
