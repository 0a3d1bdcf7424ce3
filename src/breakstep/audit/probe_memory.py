"""Probes of memory: poison around inputs, patterns in new memory, pages that nobody may touch."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from breakstep.audit.bench import FINITE, Bench
from breakstep.audit.calls import call_part, first_difference
from breakstep.audit.findings import Finding
from breakstep.audit.memory import CANARY, Paged

POISONS = (np.nan, -1e30, 0.37)  # one that spoils sums, one that spoils comparisons, one that looks innocent
FILLS = (0xFF, 0x41, 0xC3, 0xBE)  # as doubles NaN, 2e6, -3e18, -2e-6; the C library gives their complements


def probe_surroundings(bench: Bench) -> Iterator[Finding]:
    """Different numbers around its arrays must not show in its results."""
    for base in bench.in_time():
        for poison, canary in zip(POISONS, (0xFF, 0x41, 0xC3), strict=True):
            bench.watch.canary = canary
            outcome = bench.again(base, poison=poison)
            bench.watch.canary = CANARY
            plain = base.outcome
            if plain is not None and not outcome.same(plain) and bench.again(base).same(plain):
                yield Finding(
                    bench.part.name, "outside memory",
                    "It reads outside of its arrays: with"
                    f" {FINITE:g} around them or with {poison:g} ({base.sample.where()}),"
                    f" {first_difference(plain, outcome, base.call.origin)}.",
                )  # fmt: skip
                return


def probe_uninitialised(bench: Bench) -> Iterator[Finding]:
    """Different contents of new memory must not show in its results."""
    for base in bench.in_time():
        for fill in FILLS:
            plain, outcome = base.outcome, bench.again(base, fill=fill)
            if plain is not None and not outcome.same(plain) and bench.again(base).same(plain):
                yield Finding(
                    bench.part.name, "uninitialised",
                    "Its results hold, or depend on, memory that it never set: with other contents of new memory"
                    f" ({base.sample.where()}), {first_difference(plain, outcome, base.call.origin)}.",
                )  # fmt: skip
                return


def probe_pages(bench: Bench) -> Iterator[Finding]:
    """Inputs that end, then begin, at a page that nobody may touch: a touch ends the process."""
    if ("outside memory", "pages") not in bench.incidents:
        _paged(bench, writable=True)
    yield from ()


def probe_protected(bench: Bench) -> Iterator[Finding]:
    """Inputs on pages that cannot be written: a write ends the process, even one that is undone."""
    if not any(kind == "changed input" for kind, _ in bench.incidents):
        _paged(bench, writable=False)
    yield from ()


def _paged(bench: Bench, *, writable: bool) -> None:
    """Call on every state with inputs, and whatever the kernel allocates, beside forbidden pages."""
    for base in bench.in_time():
        for at_end in (True, False):
            kept = {n: Paged(a, at_end=at_end, writable=writable) for n, a in base.given.items()}
            given = {name: one.array for name, one in kept.items()}
            for array in given.values():
                array.flags.writeable = bench.writable
            bench.watch.paged, bench.watch.fill = True, 0
            with bench.watch.on(), np.errstate(all="ignore"):
                call_part(bench.part, given, base.call, base.sample.fields, base.values)
            bench.watch.paged = False
