"""From a record to what is kept: digests and row counts are added, leftovers of a cut-short run left out."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pyarrow as pa

from breakstep.errors import ProfileError
from breakstep.profile.checks import without_unrun
from breakstep.profile.digest import overall_digest, tile_digests
from breakstep.profile.record import RunRecord
from breakstep.profile.schema import SCHEMA_VERSION


def settled(record: RunRecord) -> tuple[dict[str, Any], dict[str, pa.Table]]:
    """The manifest and the tables of a record as they are to be stored.

    A run that was interrupted or failed may have recorded edges and transfers of tasks that never ran; they
    are left out. In a complete run they stay in, for the checks to find.
    """
    manifest, tables = dict(record.manifest), record.tables()
    if manifest.get("status") != "complete":
        tables = without_unrun(tables)
    manifest["schema_version"] = SCHEMA_VERSION
    manifest["rows"] = {name: table.num_rows for name, table in tables.items()}
    if "digests" not in manifest:
        manifest["digests"] = _digests(record)
    if "digest" not in manifest:
        manifest["digest"] = overall_digest(manifest["digests"])
    return _plain(manifest), tables


def _digests(record: RunRecord) -> dict[str, list[str]]:
    tiles = record.manifest.get("mesh", {}).get("tiles", [])
    return {name: tile_digests(name, final.values, tiles) for name, final in record.fields.items()}


def _plain(manifest: dict[str, Any]) -> dict[str, Any]:
    """The manifest as it will be read back: lists for tuples and arrays, plain numbers for numpy's.

    Numbers that are not finite become the texts "NaN", "Infinity" and "-Infinity": a failed run may well have
    some among its values, and must not lose its profile to them.
    """
    try:
        return json.loads(json.dumps(manifest, default=_plain_number), parse_constant=str)  # type: ignore[no-any-return]
    except (TypeError, ValueError) as fault:
        raise ProfileError(
            f"record, manifest: expected what JSON can hold, but {fault}; record plain values"
        ) from fault


def _plain_number(value: Any) -> Any:
    if isinstance(value, np.generic | np.ndarray):
        return value.tolist()
    raise TypeError(f"found {type(value).__name__} {value!r}")
