"""The record of a resident run, put together from its workers' parts.

Workers do not record edges: the driver unrolls the same phases once more, from the values that decided the
run, and writes whole phases of edges at a time.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import pyarrow as pa

from breakstep.engine.program import Program
from breakstep.engine.resident.barriers import WORKER_ARITY
from breakstep.engine.resident.notes import producer_of
from breakstep.engine.run import RunOptions, unroller_for
from breakstep.errors import BreakstepError
from breakstep.graph.numbering import Numbering, PhaseEdges
from breakstep.graph.unroll import Need
from breakstep.profile.record import RunRecord
from breakstep.profile.schema import EDGE_KINDS, LAYOUTS
from breakstep.steps.step import Array


def gather_record(
    record: RunRecord,
    parts: Sequence[dict[str, Any]],
    program: Program,
    options: RunOptions,
    owners: Sequence[int],
    numbering: Numbering,
) -> None:
    """Add to a record what :func:`breakstep.engine.resident.remote.collect` returned for one segment.

    Parameters
    ----------
    parts : sequence of dict
        From the workers that are left; at least one.
    numbering : Numbering
        Where the segment before left off, or fresh; left where this one does.
    """
    longest = max(parts, key=lambda part: len(part["answers"]))
    is_first = len(record.threads) == 0  # every segment has the same threads
    if numbering.phases:
        numbering.go_on(max(numbering.phases))
    reached = max((max(part["tables"]["tasks"]["cycle"].to_pylist(), default=-1) for part in parts), default=-1)
    makers = _record_edges(record, program, options, owners, numbering, longest["answers"], reached)
    zeros = {part["worker"]: part["zero"] for part in parts}
    for part in parts:
        record.add_tables({n: table for n, table in part["tables"].items() if n != "threads" or is_first})
        for key, name, sender, size, packed, unpacked, sent, arrived in part["arrived"]:
            producer = _producer(key, sender, numbering, makers)
            if producer >= 0 and sender in zeros:
                moments = (sent - zeros[sender], arrived)
                row = (producer, name, sender, part["worker"], size, packed, unpacked, *moments)
                record.transfers.append(row)


def _producer(key: Any, sender: int, numbering: Numbering, makers: dict[int, int]) -> int:
    """As :func:`producer_of`; -1 also for what belongs to a phase that an unfinished run never reached."""
    try:
        return producer_of(key, sender, numbering, makers)
    except KeyError:
        return -1


def _record_edges(
    record: RunRecord,
    program: Program,
    options: RunOptions,
    owners: Sequence[int],
    numbering: Numbering,
    answers: Sequence[list[Array]],
    reached: int,
) -> dict[int, int]:
    """Unroll the run again, as far as the last cycle that a task ran in: a run that was stopped may have had far to go.

    Returns for each reduction instance the phase that made it.
    """
    edges = PhaseEdges(numbering, program.plans, owners, WORKER_ARITY)
    makers: dict[int, int] = {}
    producers, consumers, kinds = [], [], []
    phases = unroller_for(program, options).run()
    given = iter(answers)
    answer: list[Array] | None = None
    while True:
        try:
            event = phases.send(answer)
        except (StopIteration, BreakstepError):  # over, or where the run failed, this fails too
            break
        answer = None
        if isinstance(event, Need):
            answer = next(given, None)
            if answer is None:
                break
            continue
        if event.cycle > reached:
            break
        numbering.add(event)
        makers.update({making.instance: event.number for making in event.makes})
        for producer, consumer, kind in edges.into(event):
            producers.append(producer)
            consumers.append(consumer)
            kinds.append(np.full(len(producer), EDGE_KINDS.index(str(kind)), dtype=np.int32))
    if producers:
        record.edges.add_table(_table(np.concatenate(producers), np.concatenate(consumers), np.concatenate(kinds)))
    return makers


def _table(producers: Any, consumers: Any, kinds: Any) -> pa.Table:
    words = pa.DictionaryArray.from_arrays(pa.array(kinds, pa.int32()), pa.array(EDGE_KINDS))
    schema = LAYOUTS["edges"].arrow
    return pa.table([pa.array(producers), pa.array(consumers), words], schema=schema)
