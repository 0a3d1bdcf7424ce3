"""The columns of a profile's tables: names, types, units and meanings, with a version.

This is the one place where a table's layout is written down; recording, storing and checking all read
it from here. It knows nothing of files and nothing of accounts.

All times are nanoseconds on one clock that every worker has been aligned to, counted from the run's own
origin. A change that an older reader would misunderstand raises :data:`SCHEMA_VERSION`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import pyarrow as pa

SCHEMA_VERSION = 1

TASK_KINDS = ("step", "combine", "count", "release", "pack")
INTERVAL_KINDS = ("kernel", "halo", "pack")
EDGE_KINDS = ("data", "reduction", "barrier")

#: Largest time stamp accepted [ns], 104 days: sums over a run's threads then stay far inside an int64.
LATEST_NS = 2**53

_INT64 = pa.int64()
_INT32 = pa.int32()
_WORD = pa.dictionary(pa.int32(), pa.string())


@dataclass(frozen=True)
class Column:
    """One column: its name, its Arrow type, and what it holds (with the unit in brackets)."""

    name: str
    type: pa.DataType
    meaning: str


@dataclass(frozen=True)
class TableLayout:
    """One table: its columns in order, and for some columns the only words they may hold."""

    name: str
    columns: tuple[Column, ...]
    words: Mapping[str, tuple[str, ...]] = field(default_factory=dict)

    @property
    def names(self) -> tuple[str, ...]:
        """Column names in order, which is also the order of a recorded row."""
        return tuple(column.name for column in self.columns)

    @property
    def arrow(self) -> pa.Schema:
        """The table's Arrow schema, with the version in its metadata."""
        fields = [pa.field(column.name, column.type) for column in self.columns]
        return pa.schema(fields, metadata={"breakstep_schema": str(SCHEMA_VERSION)})


TASKS = TableLayout(
    "tasks",
    (
        Column("task", _INT64, "serial number of the task, ascending in the order of emission"),
        Column("kind", _WORD, "step; combine, a node of a reduction tree; count and release, a barrier; pack"),
        Column("stage", _WORD, "names of the fused steps; of the reduction; of the barrier; of the stage cut"),
        Column("tile", _INT32, "number of the tile, -1 for none"),
        Column("cycle", _INT32, "number of the cycle, -1 before the first"),
        Column("iteration", _INT32, "number of the iteration, -1 outside a repeat"),
        Column("worker", _INT32, "number of the worker"),
        Column("thread", _INT32, "number of the thread within its worker"),
        Column("start_ns", _INT64, "moment the thread took the task up [ns]"),
        Column("end_ns", _INT64, "moment the thread was done with it [ns]"),
        Column("output_bytes", _INT64, "size of the arrays that the task made and kept [bytes]"),
        Column("skipped", pa.bool_(), "whether it passed its inputs through, after convergence"),
    ),
    {"kind": TASK_KINDS},
)

INTERVALS = TableLayout(
    "intervals",
    (
        Column("task", _INT64, "the task in which the interval lies"),
        Column("what", _WORD, "kernel; halo, ghost zones being assembled; pack, rims being cut"),
        Column("step", _WORD, "the kernel's step"),
        Column("start_ns", _INT64, "begin [ns]"),
        Column("end_ns", _INT64, "end [ns]"),
        Column("cpu_ns", _INT64, "processor time of the thread within it; of a step by timer, the wait asked for [ns]"),
    ),
    {"what": INTERVAL_KINDS},
)

COUNTERS = TableLayout(
    "counters",
    (
        Column("task", _INT64, "the task whose kernel counted"),
        Column("step", _WORD, "the kernel's step"),
        Column("counter", _WORD, "what was counted"),
        Column("value", _INT64, "how many"),
    ),
)

EDGES = TableLayout(
    "edges",
    (
        Column("producer", _INT64, "the task waited for"),
        Column("consumer", _INT64, "the task that waits"),
        Column("kind", _WORD, "data; reduction, a value made from all tiles; barrier, control only"),
    ),
    {"kind": EDGE_KINDS},
)

TRANSFERS = TableLayout(
    "transfers",
    (
        Column("producer", _INT64, "the task whose output moved"),
        Column("field", _WORD, "what moved"),
        Column("from_worker", _INT32, "the sender"),
        Column("to_worker", _INT32, "the receiver"),
        Column("bytes", _INT64, "size [bytes]"),
        Column("packed_ns", _INT64, "time spent on serialisation at the sender [ns]"),
        Column("unpacked_ns", _INT64, "time spent on the reverse at the receiver [ns]"),
        Column("sent_ns", _INT64, "moment packing began [ns]"),
        Column("arrived_ns", _INT64, "moment it could be used at the receiver [ns]"),
    ),
)

THREADS = TableLayout(
    "threads",
    (
        Column("worker", _INT32, "number of the worker"),
        Column("thread", _INT32, "number of the thread within its worker, also of one that ran nothing"),
    ),
)

LAYOUTS: Mapping[str, TableLayout] = {
    layout.name: layout for layout in (TASKS, INTERVALS, COUNTERS, EDGES, TRANSFERS, THREADS)
}
