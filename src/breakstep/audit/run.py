"""The audit of a program: fresh processes for the walk and for each step, and what they say put together.

A process that dies or hangs is a finding; it is started again without what it was doing.
"""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

from breakstep.audit.carry import save
from breakstep.audit.findings import NOTE, Finding
from breakstep.engine.program import Program
from breakstep.errors import DeclarationError, KernelError
from breakstep.steps.rehearsal import without_waits
from breakstep.steps.timed import timed_kernel

DERIVED = {
    "call order": {"uninitialised", "outside memory", "not repeatable", "hidden state", "shared result"},
    "tiling": {"undeclared halo", "undeclared corners", "outside memory", "uninitialised", "tile number"},
    "threads": {"not repeatable"},
}
"""Kinds that only follow from others of the same part, and then say nothing new."""

CRASHES = {
    "pages": ("outside memory", "It touches memory right before or behind an array that it was given"),
    "protected pages": ("changed input", "It writes to an array that it was given, on pages that cannot be written"),
}


@dataclass
class PartAudit:
    """What was found of one step or reduction.

    Attributes
    ----------
    name : str
    kind : str
        ``step`` or ``reduction``.
    samples, calls : int
        Calls kept from the run, and calls made by the probes.
    is_timed : bool
        Whether it is a step by timer, without code.
    """

    name: str
    kind: str
    samples: int = 0
    calls: int = 0
    is_timed: bool = False
    findings: list[Finding] = field(default_factory=list)

    @property
    def faults(self) -> list[Finding]:
        """The findings that are faults."""
        return [finding for finding in self.findings if finding.is_fault]


@dataclass
class Spawned:
    """One fresh process and what it said."""

    said: list[dict[str, Any]]
    doing: str
    signal: int
    hung: bool
    log: str

    @property
    def is_done(self) -> bool:
        """Whether it came to its end."""
        return any("done" in line for line in self.said)

    def ending(self) -> str:
        """How it ended, in words."""
        if self.hung:
            return "did not return in time"
        name = signal.Signals(self.signal).name if self.signal else "an exit that nobody asked for"
        return f"ended the process ({name}{self._line()})"

    def _line(self) -> str:
        """The innermost line of the user's that the crash report names."""
        for line in self.log.splitlines():
            ours = any(mark in line for mark in ("/breakstep/", "ctypes", "<frozen"))
            if line.strip().startswith("File ") and not ours:
                return ", at " + line.strip().removeprefix("File ")
        return ""


def audit_program(
    program: Program,
    *,
    cycles: int = 4,
    timeout: float = 300.0,
    progress: Callable[[str], None] = lambda part: None,
) -> list[PartAudit]:
    """Audit every step and reduction of a program.

    Parameters
    ----------
    cycles : int
        How long to let the state evolve before and while samples are taken.
    timeout : float
        Seconds that one probe, or one step over all tiles, may take.
    progress : callable
        Told each part's name when its audit begins.

    Raises
    ------
    DeclarationError, KernelError
        The program cannot be carried into a process, or has no initial state to begin with.
    """
    with tempfile.TemporaryDirectory(prefix="audit-") as name:
        folder = Path(name)
        problem = program.problem
        hurried = replace(problem, splitting=without_waits(problem.splitting))
        save(Program(hurried, program.tile_shape, program.fuse), folder / "program")
        parts = _walked(program, folder, min(max(cycles, 1), program.problem.cycles), timeout)
        with ThreadPoolExecutor(max_workers=_processors()) as pool:
            list(pool.map(lambda part: _audited(part, folder, timeout, progress), parts))
    return parts


def _processors() -> int:
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def _parts(program: Program) -> list[PartAudit]:
    splitting = program.problem.splitting
    found = {s.name: PartAudit(s.name, "step", is_timed=timed_kernel(s) is not None) for s in splitting.steps()}
    found |= {reduction.name: PartAudit(reduction.name, "reduction") for reduction in splitting.all_reductions()}
    return list(found.values())


def _walked(program: Program, folder: Path, cycles: int, timeout: float) -> list[PartAudit]:
    """Walk until nothing ends the walk any more; parts with their crashes and sample counts."""
    parts = {part.name: part for part in _parts(program)}
    skip: set[str] = set()
    while True:
        ran = spawn("walk", folder, skip, str(cycles), timeout)
        if ran.is_done:
            break
        broken = [str(line["broken"]) for line in ran.said if "broken" in line]
        if broken:
            raise KernelError(f"the audit found no state to begin with: {broken[0]}")
        if ran.doing not in parts or ran.doing in skip:
            raise DeclarationError(f"the audit's run {ran.ending()} before its first step; {ran.log[-300:]}")
        kind = "timeout" if ran.hung else "crash"
        parts[ran.doing].findings.append(Finding(ran.doing, kind, f"Called as the engine does, it {ran.ending()}."))
        skip.add(ran.doing)
    for line in ran.said:
        if "part" in line:
            parts[line["part"]].samples = int(line["samples"])
    stopped = next((str(line["stopped"]) for line in ran.said if "stopped" in line), "")
    if stopped and not any(part.samples or part.findings for part in parts.values()):
        raise KernelError(f"the audit found no state to begin with: {stopped}")
    return list(parts.values())


def _audited(part: PartAudit, folder: Path, timeout: float, progress: Callable[[str], None]) -> None:
    """Everything about one part."""
    if part.is_timed:
        text = "It is made of recorded times alone: nothing of a kernel's is there to be audited."
        part.findings = [Finding(part.name, "position", text, NOTE)]
        return
    progress(part.name)
    hung = any(finding.kind == "timeout" for finding in part.findings)
    if part.samples and not hung:  # what hung once would hang again
        if _probed(part, folder, timeout):
            ran = spawn("python", folder, set(), part.name, timeout)
            part.findings += [Finding(**line["finding"]) for line in ran.said if "finding" in line]
        part.findings = tidied(part.findings)
    elif not part.findings:
        text = "It was never called: a step before it failed, or the run ended before it."
        part.findings.append(Finding(part.name, "raises", text))


def _probed(part: PartAudit, folder: Path, timeout: float) -> bool:
    """Probe one part, as often as it takes to get through; whether it holds functions compiled by Numba."""
    skip: set[str] = set()
    compiled = False
    while True:
        ran = spawn("probe", folder, skip, part.name, timeout)
        for line in ran.said:
            _heard(part, line, ran.log)
            compiled = compiled or bool(line.get("compiled"))
        if ran.is_done:
            return compiled
        part.findings.append(_ended(part.name, ran))
        if ran.doing in skip or ran.doing in ("", "contract"):
            return compiled
        skip.add(ran.doing)


def _heard(part: PartAudit, line: dict[str, Any], log: str) -> None:
    """Take one line of the probing process."""
    if "broken" in line:
        raise KernelError(f"the audit of {part.name} broke off: {line['broken']}\n{log[-2000:]}")
    if "finding" in line:
        part.findings.append(Finding(**line["finding"]))
    if "moved" in line:
        part.findings.append(_moved(part.name, line["moved"]))
    part.calls += int(line.get("calls", 0))


def _ended(name: str, ran: Spawned) -> Finding:
    if ran.hung:
        severity = "fault" if ran.doing == "contract" else NOTE
        return Finding(name, "timeout", f"It did not return in time while the audit tried: {ran.doing}.", severity)
    if ran.doing in CRASHES:
        kind, words = CRASHES[ran.doing]
        return Finding(name, kind, f"{words}: that {ran.ending()}.")
    return Finding(name, "crash", f"It {ran.ending()} while the audit tried: {ran.doing or 'to load it'}.")


def _moved(name: str, paths: list[str]) -> Finding:
    text = f"What it can reach changes while other steps run: {', '.join(paths[:4])}."
    return Finding(name, "position", text, NOTE)


def tidied(findings: list[Finding]) -> list[Finding]:
    """Without repetitions, and without what only follows from something else found."""
    kinds = {finding.kind for finding in findings if finding.is_fault}
    kept: dict[tuple[str, str], Finding] = {}
    for finding in findings:
        if not (DERIVED.get(finding.kind, set()) & kinds):
            kept.setdefault((finding.kind, finding.field or finding.text[:24]), finding)
    return sorted(kept.values(), key=lambda finding: not finding.is_fault)


def spawn(what: str, folder: Path, skip: set[str], argument: str, timeout: float) -> Spawned:
    """Run a fresh process and listen to it; one that says nothing for ``timeout`` seconds is ended."""
    stem = folder / f"{what}-{argument}-{len(skip)}-{time.monotonic_ns()}"
    result, log = stem.with_suffix(".lines"), stem.with_suffix(".log")
    seed = {"walk": "1", "probe": "2"}.get(what, "3")  # whatever hangs on the order of a set shows
    environment = {**os.environ, "PYTHONHASHSEED": seed, "PYTHONDONTWRITEBYTECODE": "1"}
    # Small pieces of memory then are filled like large ones, see fill_heap.
    environment["GLIBC_TUNABLES"] = "glibc.malloc.tcache_count=0"
    if what == "python":
        environment["NUMBA_DISABLE_JIT"] = "1"
        environment["NUMBA_BOUNDSCHECK"] = "1"  # for what was compiled before it was carried here
        environment["NUMBA_CACHE_DIR"] = str(folder / "numba")
    command = [sys.executable, "-m", "breakstep.audit.child", what, str(folder), str(result), json.dumps(sorted(skip))]
    with log.open("wb") as output:
        process = subprocess.Popen([*command, argument], stdout=output, stderr=output, env=environment)
        hung = _listen(process, result, timeout)
    said = _read(result)
    doing = next((str(line["begins"]) for line in reversed(said) if "begins" in line), "")
    code = process.returncode
    return Spawned(said, doing, -code if code < 0 else 0, hung, log.read_text(encoding="utf-8", errors="replace"))


def _listen(process: subprocess.Popen[bytes], result: Path, timeout: float) -> bool:
    """Wait for the end; True if it had to be ended."""
    size, since = -1, time.monotonic()
    while True:
        try:
            process.wait(0.2 if time.monotonic() - since > 1.0 else 0.02)
            return False
        except subprocess.TimeoutExpired:
            pass
        now = result.stat().st_size if result.exists() else 0
        if now != size:
            size, since = now, time.monotonic()
        elif time.monotonic() - since > timeout:
            process.kill()
            process.wait()
            return True


def _read(result: Path) -> list[dict[str, Any]]:
    if not result.exists():
        return []
    lines = result.read_text(encoding="utf-8").splitlines()
    return [json.loads(line) for line in lines if line.endswith("}")]
