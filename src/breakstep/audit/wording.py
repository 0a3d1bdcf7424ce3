"""The audit in words and as data: one block a step, a sentence a finding, 80 columns."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator, Sequence
from dataclasses import asdict
from typing import Any

from breakstep.audit.findings import KINDS, Finding
from breakstep.audit.run import PartAudit

WIDTH = 80


def audit_lines(name: str, parts: Sequence[PartAudit], hazards: Sequence[dict[str, Any]]) -> Iterator[str]:
    """The whole text of ``audit``."""
    faults = sum(len(part.faults) for part in parts)
    guilty = sum(bool(part.faults) for part in parts)
    calls = sum(part.calls for part in parts)
    if faults:
        head = f"{name}: {_counted(faults, 'fault')} in {guilty} of {len(parts)} steps and reductions."
    else:
        head = (
            f"{name}: the declarations of all {len(parts)} steps and reductions hold, as far as {calls} calls can tell."
        )
    yield from textwrap.wrap(head, WIDTH)
    for part in parts:
        yield ""
        yield from _block(part)
    if hazards:
        yield ""
        yield from _hazards(hazards)


def _counted(count: int, noun: str) -> str:
    return f"{count} {noun}{'' if count == 1 else 's'}"


def _block(part: PartAudit) -> Iterator[str]:
    verdict = _counted(len(part.faults), "fault") if part.faults else "by timer" if part.is_timed else "clean"
    yield f"{part.kind} {part.name}: {verdict} ({_counted(part.samples, 'sample')}, {_counted(part.calls, 'call')})"
    for finding in part.findings:
        yield from _sentences(finding)


def _sentences(finding: Finding) -> Iterator[str]:
    head = f"{KINDS[finding.kind]}: " if finding.is_fault else "note: "
    text = f"{head}{finding.text}{' ' + finding.cost if finding.cost else ''}"
    mark = "* " if finding.is_fault else "  "
    yield from textwrap.wrap(
        text, WIDTH, initial_indent=f"  {mark}", subsequent_indent="    ", break_long_words=False,
        break_on_hyphens=False,
    )  # fmt: skip


def _hazards(hazards: Sequence[dict[str, Any]]) -> Iterator[str]:
    text = (
        "To update in place, as a port might, these need a second buffer (or edges from each reader to its neighbours'"
        " writer), because a neighbour would overwrite what a tile still has to read:"
    )
    yield from textwrap.wrap(text, WIDTH)
    for one in hazards:
        same = " (the same step, at a neighbour)" if one["same_phase"] else ""
        words = (
            f"{one['field']}: read by {one['reader']} across {', '.join(one['axes'])}, then written by"
            f" {one['writer']}{same}; {_size(one['buffer_bytes'])} for all of it, {_size(one['rim_bytes'])} for the"
            " ghost zones"
        )
        yield from textwrap.wrap(words, WIDTH, initial_indent="  ", subsequent_indent="    ", break_on_hyphens=False)


def _size(count: int) -> str:
    for unit, scale in (("GB", 1e9), ("MB", 1e6), ("kB", 1e3)):
        if count >= scale:
            return f"{count / scale:.3g} {unit}"
    return f"{count} B"


def audit_figures(name: str, parts: Sequence[PartAudit], hazards: Sequence[dict[str, Any]]) -> dict[str, Any]:
    """The same as data for ``--json``."""
    return {
        "scenario": name,
        "faults": sum(len(part.faults) for part in parts),
        "parts": [
            {
                "name": part.name, "kind": part.kind, "samples": part.samples, "calls": part.calls,
                "findings": [asdict(finding) for finding in part.findings],
            }
            for part in parts
        ],
        "in_place": list(hazards),
    }  # fmt: skip
