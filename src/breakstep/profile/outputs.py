"""What tasks made, piece by piece: how large each field of an output was, and until when somebody read it.

A field's piece is freed with its last reader. A reader that only hands it on (an iteration after convergence) keeps it
for its own readers. What nobody reads is freed at once if the same tile writes the field again; the last version of a
field that belongs to the final state lives to the run's end. Where an earlier and a later version of a field could both
be meant by a reader, the earlier is kept as well: what is told is never less than what was needed.

Sizes follow from the mesh. Where they do not add up to the bytes that a task was recorded to have made, its output is
left in one piece.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Final, NamedTuple

import numpy as np
from numpy.typing import NDArray

from breakstep.profile.causes import BARRIER, DATA
from breakstep.profile.compiling import compiled_loop
from breakstep.profile.frames import Frames, Integers, codes_of, integers, positions, words_of
from breakstep.profile.schema import EDGE_KINDS, TASK_KINDS

NUMBER_BYTES = 8  # fields are float64
OTHER: Final = {"step": "outputs", "pack": "rims", "combine": "values", "count": "control", "release": "control"}
_NEVER = np.iinfo(np.int64).min
_STEP = TASK_KINDS.index("step")


class Pieces(NamedTuple):
    """Pieces of outputs.

    Attributes
    ----------
    task, size, freed : ndarray of int64, shape (pieces,)
        Position of the task; bytes; end of the last reader [ns].
    data : ndarray of int64, shape (pieces,)
        Place in ``names``.
    names : list of str
        Kinds of data.
    """

    task: Integers
    size: Integers
    freed: Integers
    data: Integers
    names: list[str]


class DataKinds(NamedTuple):
    """What outputs consist of.

    Attributes
    ----------
    fields : mapping of str to mapping
        For each field its ``components``, and whether it is ``per_tile`` and ``scratch``.
    stages : mapping of str to mapping
        For each stage its ``reads`` and ``writes``.
    zones : ndarray of int64, shape (tiles,)
    """

    fields: Mapping[str, Mapping[str, Any]]
    stages: Mapping[str, Mapping[str, Any]]
    zones: Integers


def data_kinds(manifest: Mapping[str, Any]) -> DataKinds | None:
    """What the manifest says; None if nothing, or where a task's output is one object that is freed as a whole."""
    data = manifest["notes"].get("data")
    if data is None or manifest["dispatch"] == "native":
        return None
    zones = [int(np.prod(tile["shape"])) for tile in manifest["mesh"]["tiles"]]
    return DataKinds(data["fields"], data["stages"], np.asarray(zones, dtype=np.int64))


class _Readers(NamedTuple):
    """Edges that carry data or values, as positions of both ends."""

    producer: Integers
    consumer: Integers
    kind: Integers


def _readers(frames: Frames) -> _Readers:
    tasks, edges = frames["tasks"], frames["edges"]
    numbers, kind = integers(tasks, "task"), codes_of(edges, "kind", EDGE_KINDS)
    carries = kind != BARRIER
    producer = positions(numbers, integers(edges, "producer")[carries])
    return _Readers(producer, positions(numbers, integers(edges, "consumer")[carries]), kind[carries])


def _last_end(frames: Frames, readers: _Readers, chosen: NDArray[np.bool_]) -> Integers:
    """End of each task's last reader among some edges [ns]; _NEVER for none."""
    end = integers(frames["tasks"], "end_ns")
    last = np.full(len(end), _NEVER, dtype=np.int64)
    np.maximum.at(last, readers.producer[chosen], end[readers.consumer[chosen]])
    return last


def whole_outputs(frames: Frames) -> Pieces:
    """Every output in one piece, kept until its last reader is done, and to the run's end if it has none."""
    readers, size = _readers(frames), integers(frames["tasks"], "output_bytes")
    freed = _last_end(frames, readers, np.ones(len(readers.kind), dtype=bool))
    freed[freed == _NEVER] = integers(frames["tasks"], "end_ns").max(initial=0)
    made = np.flatnonzero(size > 0)
    kind = codes_of(frames["tasks"], "kind", TASK_KINDS)[made]
    names = sorted(set(OTHER.values()))
    data = np.asarray([names.index(OTHER[word]) for word in TASK_KINDS], dtype=np.int64)[kind]
    return Pieces(made, size[made], freed[made], data, names)


def pieces_of(frames: Frames, kinds: DataKinds) -> Pieces:
    """Outputs of steps field by field; other outputs whole."""
    tasks = frames["tasks"]
    readers, made = _readers(frames), _sizes(frames, kinds)
    rest = integers(tasks, "output_bytes") - sum(made.values(), start=np.zeros(len(tasks), dtype=np.int64))
    split = rest == 0
    whole = whole_outputs(frames)
    kept = ~split[whole.task]
    columns = [Pieces(whole.task[kept], whole.size[kept], whole.freed[kept], whole.data[kept], whole.names)]
    for place, (field, size) in enumerate(made.items()):
        task = np.flatnonzero((size > 0) & split)
        freed = _freed(frames, kinds, readers, field, size > 0)
        columns.append(
            Pieces(task, size[task], freed[task], np.full(len(task), len(whole.names) + place, dtype=np.int64), [])
        )
    return Pieces(
        task=np.concatenate([piece.task for piece in columns]),
        size=np.concatenate([piece.size for piece in columns]),
        freed=np.concatenate([piece.freed for piece in columns]),
        data=np.concatenate([piece.data for piece in columns]),
        names=[*whole.names, *made],
    )


def _sizes(frames: Frames, kinds: DataKinds) -> dict[str, Integers]:
    """For each field its bytes in each task's output; 0 for a task that made none."""
    tasks = frames["tasks"]
    tile, worked = integers(tasks, "tile"), codes_of(tasks, "kind", TASK_KINDS) == _STEP
    worked &= ~tasks["skipped"].to_numpy(dtype=bool) & (tile >= 0)
    sizes = {}
    for field, facts in kinds.fields.items():
        zones = np.ones_like(kinds.zones) if facts["per_tile"] else kinds.zones
        wrote = worked & _stages_with(frames, kinds, "writes", field)
        sizes[field] = np.where(wrote, zones[np.maximum(tile, 0)] * facts["components"] * NUMBER_BYTES, 0)
    return sizes


def _stages_with(frames: Frames, kinds: DataKinds, what: str, field: str) -> NDArray[np.bool_]:
    """Which tasks belong to a stage that reads, or writes, a field."""
    codes, stages = words_of(frames["tasks"], "stage")
    fits = np.asarray([field in kinds.stages.get(stage, {what: ()})[what] for stage in stages], dtype=bool)
    found: NDArray[np.bool_] = fits[codes]
    return found


def _freed(frames: Frames, kinds: DataKinds, readers: _Readers, field: str, made: NDArray[np.bool_]) -> Integers:
    """When each task's version of a field is freed [ns]."""
    tasks = frames["tasks"]
    step = codes_of(tasks, "kind", TASK_KINDS) == _STEP
    reads = ~step | _stages_with(frames, kinds, "reads", field)
    chosen = (readers.kind == DATA) & reads[readers.consumer]
    last = _last_end(frames, readers, chosen)
    tile, skipped = integers(tasks, "tile"), tasks["skipped"].to_numpy(dtype=bool)
    hands_on = skipped & _stages_with(frames, kinds, "writes", field)
    end = integers(tasks, "end_ns")
    if not kinds.fields[field]["scratch"]:
        last[_last_on_tile(tile, made | hands_on)] = end.max(initial=0)
    passed = chosen & hands_on[readers.consumer] & (tile[readers.producer] == tile[readers.consumer])
    _hand_back(last, *_latest_first(readers.producer[passed], readers.consumer[passed]))
    unread = last == _NEVER
    last[unread] = end[unread]
    return last


def _latest_first(producer: Integers, consumer: Integers) -> tuple[Integers, Integers]:
    """Edges in descending order of their consumers: tasks come after their inputs, so chains are met end first."""
    order = np.argsort(-consumer, kind="stable")
    return producer[order], consumer[order]


@compiled_loop
def _hand_back(last: Integers, producer: Integers, consumer: Integers) -> None:
    """Keep what is handed on until the readers of whoever hands it on are done."""
    for edge in range(len(producer)):
        last[producer[edge]] = max(last[producer[edge]], last[consumer[edge]])


def _last_on_tile(tile: Integers, wrote: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Of the tasks that wrote, the last on each tile."""
    last = np.zeros(len(tile), dtype=bool)
    writers = np.flatnonzero(wrote)
    _, place = np.unique(tile[writers][::-1], return_index=True)
    last[writers[::-1][place]] = True
    return last
