"""Runs drawn as text, and the records they stand for.

One line is one thread, ``worker.thread |......|``; one character is one nanosecond. A letter is a task: upper
case inside its kernel (in a task that packs: while packing), lower case outside. A dot is idle time. A thread
may be drawn on several lines, to make tasks overlap. Tasks are numbered as in the alphabet.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Any

import numpy as np

from breakstep.profile.record import FinalField, RunRecord
from breakstep.profile.run import Profile

_LINE = re.compile(r"^\s*(\d+)\.(\d+) \|([A-Za-z.]*)\|", re.MULTILINE)


def manifest(workers: int, threads: int, tiles: int, **changes: Any) -> dict[str, Any]:
    """A manifest for a mesh of ``tiles`` tiles in a row, each of one zone."""
    whole: dict[str, Any] = {
        "breakstep": "0.1.0",
        "software": {"python": "3.11"},
        "machine": {"cpus": 2, "model": "invented", "system": "Linux"},
        "scenario": {"name": "drawn", "title": "Drawn by hand"},
        "mode": "tasked",
        "barriers": [],
        "dispatch": "drawn",
        "workers": workers,
        "threads": threads,
        "cycles": 1,
        "mesh": {
            "shape": [tiles, 1, 1],
            "tile_shape": [1, 1, 1],
            "tiles": [{"origin": [tile, 0, 0], "shape": [1, 1, 1]} for tile in range(tiles)],
        },
        "placement": [0] * tiles,
        "status": "complete",
        "message": "",
        "clock": {"method": "drawn", "residual_ns": [0] * workers},
        "wall_seconds": 1.0,
        "notes": {},
        "started": "2026-01-01T00:00:00+00:00",
    }
    return whole | changes


def number(letter: str) -> int:
    """Task number of a letter."""
    return ord(letter.upper()) - ord("A")


def draw(
    drawing: str | None,
    edges: str = "",
    *,
    kinds: Mapping[str, str] | None = None,
    arrivals: Mapping[tuple[str, int], int] | None = None,
    halo: Mapping[str, int] | None = None,
    stages: Mapping[str, str] | None = None,
    output: Mapping[str, int] | None = None,
    cpu: Mapping[str, int] | None = None,
) -> RunRecord:
    """The record of a drawn run.

    Parameters
    ----------
    drawing : str
        Text with lines as the module describes them, among others.
    edges : str
        Such as ``"A>B, A>C barrier"``; an edge without a kind carries data.
    kinds, stages, output : dict
        Kind, stage and output size [bytes] of tasks that are not steps called "work" without output.
    arrivals : dict of (letter, worker) to int
        When the bytes of a task's output could be used on a worker [ns].
    halo : dict of letter to int
        How much of a task's first upper-case time is halo assembly [ns].
    cpu : dict of letter to int
        Processor time of kernels that did not have a processor all the time [ns].
    """
    lines = [(int(worker), int(thread), text) for worker, thread, text in _LINE.findall(drawing or "")]
    record = RunRecord()
    threads = sorted({(worker, thread) for worker, thread, _ in lines})
    record.threads.extend(threads)
    owner = {}
    for worker, thread, text in lines:
        for letter in sorted(set(text.upper()) - {"."}):
            owner[letter] = worker
            kind, stage = (kinds or {}).get(letter, "step"), (stages or {}).get(letter, "work")
            start, end = text.upper().index(letter), text.upper().rindex(letter) + 1
            head = (number(letter), kind, stage, number(letter), 0, -1, worker, thread)
            record.tasks.append((*head, start, end, (output or {}).get(letter, 0), False))
            _draw_inside(record, letter, text, kind, stage, (halo or {}).get(letter, 0), (cpu or {}).get(letter))
    for edge in filter(None, (part.strip() for part in edges.split(","))):
        ends, _, edge_kind = edge.partition(" ")
        record.edges.append((number(ends[0]), number(ends[2]), edge_kind or "data"))
    for (letter, to_worker), arrived in (arrivals or {}).items():
        record.transfers.append((number(letter), "rho", owner[letter], to_worker, 80, 1, 1, 0, arrived))
    record.manifest = manifest(len({worker for worker, _ in threads}), len(threads), tiles=26)
    return record


def _draw_inside(
    record: RunRecord, letter: str, text: str, kind: str, step: str, halo: int, cpu: int | None = None
) -> None:
    what = {"step": "kernel", "pack": "pack"}.get(kind)
    if what is None or letter not in text:
        return
    task, start, end = number(letter), text.index(letter), text.rindex(letter) + 1
    if halo:
        record.intervals.append((task, "halo", step, start, start + halo, halo))
    spent = end - start - halo if cpu is None else cpu
    record.intervals.append((task, what, step, start + halo, end, spent))


def accounts(record: RunRecord) -> dict[str, int]:
    """The accounts of a record that are not zero [ns]; the run must close."""
    ledger = Profile.from_record(record).ledger
    assert sum(ledger.accounts_ns.values()) == ledger.threads * ledger.span_ns
    assert ledger.closure_error == 0.0
    return {account: ns for account, ns in ledger.accounts_ns.items() if ns}


def with_fields(record: RunRecord, seed: int = 1) -> RunRecord:
    """Give a record final fields on its mesh, of invented numbers."""
    shape = record.manifest["mesh"]["shape"]
    numbers = np.random.default_rng(seed)
    record.coordinates = {axis: np.arange(n) + 0.5 for axis, n in zip("xyz", shape, strict=True)}
    record.fields = {
        "gas": FinalField(numbers.random((2, *shape)), ("density", "temperature"), ("g cm^-3", "K")),
        "radiation": FinalField(numbers.random((3, *shape)), ("g0", "g1", "g2"), ("erg cm^-3",)),
    }
    return record
