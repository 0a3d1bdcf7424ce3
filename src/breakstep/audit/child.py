"""The fresh process: walks a program for samples, or probes one step; says what it is doing line by line.

Run as ``python -m breakstep.audit.child WHAT FOLDER ...``. Whatever a kernel does to this process, the lines
written until then are there for the parent.
"""

from __future__ import annotations

import faulthandler
import json
import os
import sys
import traceback
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

from breakstep.audit.bench import Bench
from breakstep.audit.carry import load, save
from breakstep.audit.findings import NOTE, Finding
from breakstep.audit.probe_memory import probe_pages, probe_protected, probe_surroundings, probe_uninitialised
from breakstep.audit.probe_place import probe_cut, probe_influence, probe_numbers
from breakstep.audit.probe_reads import probe_contract, probe_corners, probe_named, probe_undeclared, probe_unused
from breakstep.audit.probe_state import (
    probe_clock,
    probe_processes,
    probe_repeats,
    probe_shared_result,
    probe_threads,
)
from breakstep.audit.reach import reached_state
from breakstep.errors import BreakstepError

Probe = Callable[[Bench], Iterator[Finding]]

PROBES: dict[str, Probe] = {
    "contract": probe_contract,
    "processes": probe_processes,
    "repeats": probe_repeats,
    "shared result": probe_shared_result,
    "surroundings": probe_surroundings,
    "new memory": probe_uninitialised,
    "corners": probe_corners,
    "cut": probe_cut,
    "influence": probe_influence,
    "numbers": probe_numbers,
    "clock": probe_clock,
    "unused": probe_unused,
    "undeclared": probe_undeclared,
    "named": probe_named,
    "threads": probe_threads,
    "pages": probe_pages,
    "protected pages": probe_protected,
}
"""In this order: what may end the process comes last."""

COMPARING = {"surroundings", "new memory", "corners", "cut", "influence", "numbers", "clock", "unused", "threads"}
"""Probes that say nothing of a kernel that does not repeat itself."""

OUTSIDE = {
    "subprocess.Popen": "starts a process",
    "socket.connect": "opens a connection",
    "os.system": "runs a command",
}
CACHES = ("__pycache__", ".nbi", ".nbc", ".pyc", "numba")


class Lines:
    """What the parent reads: one JSON object a line, flushed at once."""

    def __init__(self, path: Path) -> None:
        self._descriptor = os.open(path, os.O_WRONLY | os.O_CREAT | os.O_APPEND)

    def say(self, **facts: Any) -> None:
        """Write one line."""
        os.write(self._descriptor, (json.dumps(facts) + "\n").encode())


def walk(folder: Path, lines: Lines, skip: frozenset[str], cycles: int) -> None:
    """Take samples of every part and leave a job file for each."""
    from breakstep.audit.sample import Walk, private_fields

    program = load(folder / "program")
    walked = Walk(program, cycles, skip, lambda part: lines.say(begins=part))
    try:
        walked.run()
    except BreakstepError as error:
        lines.say(stopped=str(error))
    splitting = program.problem.splitting
    private = private_fields(program)
    for part in {part.name: part for part in (*splitting.steps(), *splitting.all_reductions())}.values():
        samples = walked.samples.get(part.name, [])
        moved = sorted(walked.moved.get(part.name, ()))
        sources = getattr(program.problem, "sources", None)  # modules loaded from files come back first
        save((sources, part, program.fields, private, samples, moved), folder / f"job-{part.name}")
        lines.say(part=part.name, samples=len(samples), failure=walked.failures.get(part.name, ""))


def probe(folder: Path, lines: Lines, skip: frozenset[str], name: str) -> None:
    """Run every probe on one part."""
    _, part, fields, private, samples, moved = load(folder / f"job-{name}")
    bench = Bench(part, fields, samples[::-1], private)  # the last first: another order than in the walk
    outside = _watch_outside(bench)
    said: set[str] = set()
    for title, function in PROBES.items():
        if title in skip or (bench.is_erratic and title in COMPARING):
            continue
        lines.say(begins=title)
        try:
            for finding in function(bench):
                lines.say(finding=json.loads(finding.line()))
        except Exception as error:  # a defect of the probe must not lose what the others find
            traceback.print_exc()
            text = f"The audit itself failed while it tried: {title} ({type(error).__name__}: {error})."
            lines.say(finding=json.loads(Finding(name, "crash", text, NOTE).line()))
        for finding in _incidents(bench):
            if finding.text not in said:
                said.add(finding.text)
                lines.say(finding=json.loads(finding.line()))
    outside["on"] = False
    if bench.is_erratic:
        text = (
            "As it does not repeat itself, what it reads and where it stands was not looked at; make it repeat first."
        )
        lines.say(finding=json.loads(Finding(name, "not repeatable", text, NOTE, "rest").line()))
    if moved and not isinstance(part.kernel, type):
        lines.say(moved=moved)
    lines.say(calls=bench.calls, compiled=sorted(reached_state(part.kernel).compiled))


def _incidents(bench: Bench) -> Iterator[Finding]:
    for (kind, name), evidence in bench.incidents.items():
        if kind not in ("undeclared field", "undeclared reduction"):  # a probe of their own says whether they matter
            yield Finding(bench.part.name, kind, f"{evidence[0].upper()}{evidence[1:]}.", field=name.split(":")[-1])


def _watch_outside(bench: Bench) -> dict[str, bool]:
    """Note files written and processes started while a kernel runs."""
    state = {"on": True}

    def hook(event: str, arguments: tuple[Any, ...]) -> None:
        if not state["on"] or not bench.inside:
            return
        if event in OUTSIDE:
            bench.incident("side effect", event, f"it {OUTSIDE[event]} ({event})")
        elif event == "open" and isinstance(arguments[1], str) and set(arguments[1]) & set("wax+"):
            path = str(arguments[0])
            if not any(mark in path for mark in CACHES):
                bench.incident("side effect", path, f"it writes to the file {path}")

    sys.addaudithook(hook)
    return state


def plain_python(folder: Path, lines: Lines, name: str) -> None:
    """Run functions that Numba would compile as Python, which checks every index; the environment turned it off."""
    _, part, fields, private, samples, _ = load(folder / f"job-{name}")
    bench = Bench(part, fields, samples[::-1], private)
    lines.say(begins="indices")
    for sample in bench.samples[:3]:
        outcome = bench.run(sample)
        if outcome.kind == "IndexError":
            text = f"Run as plain Python it indexes outside of an array ({outcome.place}: {outcome.error})."
            lines.say(finding=json.loads(Finding(part.name, "outside memory", text).line()))
            return


def main() -> None:
    """Entry point: WHAT FOLDER RESULT SKIP ARGUMENT."""
    what, folder, result, skip, argument = sys.argv[1:6]
    faulthandler.enable()
    lines = Lines(Path(result))
    skipped = frozenset(json.loads(skip))
    try:
        if what == "walk":
            walk(Path(folder), lines, skipped, int(argument))
        elif what == "probe":
            probe(Path(folder), lines, skipped, argument)
        else:
            plain_python(Path(folder), lines, argument)
        lines.say(done=True)
    except BaseException as error:
        traceback.print_exc()
        lines.say(broken=f"{type(error).__name__}: {error}")
    sys.stdout.flush()
    sys.stderr.flush()
    os._exit(0)  # arrays that a watched allocator gave must not be freed after it is gone


if __name__ == "__main__":
    main()
