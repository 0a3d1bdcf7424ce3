"""The record of a run while it is being made: rows arrive one by one, and are kept compactly.

The engine fills it. A row costs the recording thread one ``list.append``; every :data:`CHUNK_ROWS` rows
the list is packed into Arrow columns, which take a quarter of its memory (60 bytes a task, not 260).
Nothing here looks at what the rows say: that is for :mod:`breakstep.profile.checks`, once the run is over.
"""

from __future__ import annotations

import threading
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from functools import partial
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from breakstep.errors import ProfileError
from breakstep.profile.schema import (
    COUNTERS,
    EDGES,
    INTERVALS,
    LAYOUTS,
    TASKS,
    THREADS,
    TRANSFERS,
    TableLayout,
)

#: Rows packed at a time. Packing that many task rows was measured to take 1.3 ms, 0.3 us a row; appending
#: with all its packing 1.4 us a row, the making of the tuple included.
CHUNK_ROWS = 4096


class RowBuffer:
    """The rows of one table.

    Several threads may append at the same time: appending to a list and cutting its head off are each
    one indivisible operation of the interpreter, and a lock lets one thread pack at a time.
    """

    def __init__(self, layout: TableLayout) -> None:
        self.layout = layout
        self._rows: list[tuple[Any, ...]] = []
        self._packed: list[pa.Table] = []
        self._packing = threading.Lock()

    def __len__(self) -> int:
        return len(self._rows) + sum(int(table.num_rows) for table in self._packed)

    def append(self, row: tuple[Any, ...]) -> None:
        """Add one row: its values in the order of the layout's columns."""
        self._rows.append(row)
        if len(self._rows) >= CHUNK_ROWS and self._packing.acquire(blocking=False):
            try:
                self._pack()
            finally:
                self._packing.release()

    def extend(self, rows: Iterable[tuple[Any, ...]]) -> None:
        """Add several rows."""
        for row in rows:
            self.append(row)

    def add_table(self, table: pa.Table) -> None:
        """Add rows that are already packed, for instance those of another worker.

        Raises
        ------
        ProfileError
            Its columns are not those of the layout.
        """
        if not table.schema.equals(self.layout.arrow):
            raise ProfileError(
                f"record, table {self.layout.name}: expected the columns {', '.join(self.layout.names)}"
                f" with their types, not {', '.join(table.schema.names)}; take them from another record",
                table=self.layout.name,
            )
        with self._packing:
            self._packed.append(table)

    def table(self) -> pa.Table:
        """All rows so far as one Arrow table.

        Raises
        ------
        ProfileError
            A row has the wrong number or type of values.
        """
        with self._packing:
            self._pack()
            whole = pa.concat_tables([self.layout.arrow.empty_table(), *self._packed])
        return whole.unify_dictionaries().combine_chunks()

    def _pack(self) -> None:
        count = len(self._rows)
        if count:
            self._packed.append(_packed(self.layout, self._rows[:count]))
            del self._rows[:count]


def _packed(layout: TableLayout, rows: list[tuple[Any, ...]]) -> pa.Table:
    width = len(layout.columns)
    for row in rows:
        if len(row) != width:
            raise ProfileError(
                f"record, table {layout.name}: expected rows of {width} values ({', '.join(layout.names)}),"
                f" not {row!r}; record every column in this order",
                table=layout.name,
            )
    columns = zip(layout.columns, zip(*rows, strict=True), strict=True)
    return pa.table([_array(layout, c.name, c.type, values) for c, values in columns], schema=layout.arrow)


def _array(layout: TableLayout, name: str, kind: pa.DataType, values: tuple[Any, ...]) -> pa.Array[Any]:
    try:
        return pa.array(values, type=kind)
    except (pa.ArrowException, TypeError, OverflowError) as fault:
        raise ProfileError(
            f"record, table {layout.name}: column {name} takes {kind}, but {fault}; record such values",
            table=layout.name,
            column=name,
        ) from fault


@dataclass(frozen=True)
class FinalField:
    """One field at the end of the run.

    Attributes
    ----------
    values : ndarray of float64, shape (components, nx, ny, nz)
        Zone averages over the whole mesh.
    components : tuple of str
        What each component is.
    units : tuple of str
        Unit of each component, or one for all.
    """

    values: NDArray[np.float64]
    components: tuple[str, ...]
    units: tuple[str, ...]

    @property
    def component_units(self) -> list[str]:
        """One unit per component."""
        return list(self.units) if len(self.units) > 1 else list(self.units) * len(self.components)


@dataclass
class RunRecord:
    """Everything that a run leaves behind.

    Attributes
    ----------
    tasks, intervals, counters, edges, transfers, threads : RowBuffer
        Columns as in :mod:`breakstep.profile.schema`; times in ns from the run's origin.
    manifest : dict
        Keys as in :class:`breakstep.profile.manifest.Manifest`; the store adds ``schema_version``, ``rows``
        and, where they are absent, ``digests`` and ``digest``.
    fields : dict of str to FinalField
        May be empty, for a run that did not get to its end.
    coordinates : dict of str to ndarray
        Zone centres along "x", "y" and "z" [cm].
    """

    tasks: RowBuffer = field(default_factory=partial(RowBuffer, TASKS))
    intervals: RowBuffer = field(default_factory=partial(RowBuffer, INTERVALS))
    counters: RowBuffer = field(default_factory=partial(RowBuffer, COUNTERS))
    edges: RowBuffer = field(default_factory=partial(RowBuffer, EDGES))
    transfers: RowBuffer = field(default_factory=partial(RowBuffer, TRANSFERS))
    threads: RowBuffer = field(default_factory=partial(RowBuffer, THREADS))
    manifest: dict[str, Any] = field(default_factory=dict)
    fields: dict[str, FinalField] = field(default_factory=dict)
    coordinates: dict[str, NDArray[np.float64]] = field(default_factory=dict)

    def buffer(self, table: str) -> RowBuffer:
        """The rows of one table, by its name."""
        return getattr(self, table)  # type: ignore[no-any-return]

    def tables(self) -> dict[str, pa.Table]:
        """All tables as Arrow tables: compact, and what one process sends to another."""
        return {name: self.buffer(name).table() for name in LAYOUTS}

    def add_tables(self, tables: Mapping[str, pa.Table]) -> None:
        """Add the rows of another record, as its :meth:`tables` gave them."""
        for name, table in tables.items():
            self.buffer(name).add_table(table)
