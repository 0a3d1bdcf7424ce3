"""Probes of what a kernel keeps or shares: repeated, permuted and concurrent calls, shared results, static memory."""

from __future__ import annotations

import contextlib
import random
import sys
import threading
import time
from collections.abc import Callable, Iterator
from typing import Any

import numpy as np

from breakstep.audit.bench import Base, Bench
from breakstep.audit.calls import Outcome, call_part, first_difference
from breakstep.audit.findings import NOTE, Finding
from breakstep.audit.reach import SHARED, Reached, reached_state, static_memory
from breakstep.audit.sample import digest

REPEATS = 24  # calls in a row, for what happens now and then
THREAD_SECONDS = 0.15  # on concurrent calls; a race that shows less often than that is found by its memory


def probe_repeats(bench: Bench) -> Iterator[Finding]:
    """The same input again: at once, after another one, and in another process."""
    name = bench.part.name
    bases = _two(bench)
    first = bases[0]
    random.seed(20391)  # so that a kernel that seeds them leaves another state behind
    np.random.seed(20391)
    before = _everything(bench)
    once, again = _plain(bench, first), _plain(bench, first)
    after = _everything(bench)
    _plain(bench, bases[-1])
    third = _plain(bench, first)
    more = (_plain(bench, first) for _ in range(REPEATS))
    odd = next((outcome for outcome in more if not outcome.same(third)), None)
    last = _everything(bench)
    changed = before.differing(after) | after.differing(last)
    kept = sorted(changed - SHARED.keys())
    where = f"; what changed: {', '.join(kept[:4])}" if kept else ""
    if not once.same(again):
        kind = "hidden state" if kept else "not repeatable"
        yield Finding(name, kind, f"Two calls in a row differ: {first_difference(once, again)}{where}.")
    elif not once.same(third):
        yield Finding(
            name, "hidden state",
            f"A call differs after another one has come between: {first_difference(once, third)}{where}.",
        )  # fmt: skip
    elif odd is not None:
        kind = "hidden state" if kept else "not repeatable"
        yield Finding(name, kind, f"One of {REPEATS} calls in a row differs: {first_difference(third, odd)}{where}.")
    elif kept:
        yield from _quiet_state(name, kept, after.arrays)
    bench.is_erratic = not (once.same(again) and once.same(third) and odd is None)
    for shared in sorted(changed & SHARED.keys()):
        yield Finding(name, "side effect", f"A call changes {shared}, which the whole process shares.")


def _quiet_state(name: str, kept: list[str], arrays: set[str]) -> Iterator[Finding]:
    """State that changes without being seen in the results so far."""
    shared = [path for path in kept if path in arrays or path.startswith("static ")]
    if shared:
        yield Finding(
            name, "hidden state",
            f"Each call changes {', '.join(shared[:4])}; the results did not differ, but two threads would share it.",
        )  # fmt: skip
    elif kept:
        yield Finding(
            name, "position", f"Each call changes {', '.join(kept[:4])}; the results did not differ.", NOTE
        )  # fmt: skip


def _everything(bench: Bench) -> Reached:
    """What the kernel reaches, static memory of libraries included."""
    found = reached_state(bench.part.kernel)
    for title, data in static_memory(found.libraries).items():
        found.digests[title] = str(hash(data))
        found.arrays.add(title)
    return found


def _two(bench: Bench) -> list[Base]:
    """Two states as different as there are, the second from another sample or made up."""
    bases = []
    for base in bench.bases():
        bases.append(base)
        if len(bases) > len(bench.samples):
            break
    working = [base for base in bases if base.outcome is not None and base.outcome.arrays is not None] or bases
    return [working[0], working[-1]]


def _plain(bench: Bench, base: Base) -> Outcome:
    return bench.run(base.sample, base.given, call=base.call, values=base.values)


def probe_processes(bench: Bench) -> Iterator[Finding]:
    """The samples again, in another order and another process than they were taken in."""
    here = [bench.run(sample) for sample in bench.samples]
    there = [bench.run(sample) for sample in reversed(bench.samples)][::-1]
    for sample, one, two in zip(bench.samples, here, there, strict=True):
        if not one.same(two):
            yield Finding(
                bench.part.name, "call order",
                f"The same calls in another order give other bits ({sample.where()}:"
                f" {first_difference(one, two, sample.call.origin)}).",
            )  # fmt: skip
            return
    for sample, one in zip(bench.samples, here, strict=True):
        if (
            sample.digest
            and bench.reads == bench.part.reads
            and one.arrays is not None
            and digest(one) != sample.digest
        ):
            yield Finding(
                bench.part.name, "call order",
                f"The call at {sample.where()} gives other bits alone in a fresh process than it gave in a run, after"
                " other calls and steps: it uses something that it was not given.",
            )  # fmt: skip
            return


def probe_shared_result(bench: Bench) -> Iterator[Finding]:
    """Results that change when the kernel is called again."""
    bases = _two(bench)
    for one, two in ((bases[0], bases[1]), (bases[1], bases[0])):
        kept, _inputs = bench.run_raw(one.sample, one.given, call=one.call, values=one.values)
        copied = kept.copied()
        later, _other = bench.run_raw(two.sample, two.given, call=two.call, values=two.values)
        shares = _overlap(kept, later)
        if not kept.same(copied) or shares:
            what = first_difference(copied, kept) if not kept.same(copied) else f"{shares!r} lies in the same memory"
            yield Finding(
                bench.part.name, "shared result", f"A later call overwrites what an earlier one returned: {what}."
            )
            return


def _overlap(one: Outcome, two: Outcome) -> str:
    for name, array in (one.arrays or {}).items():
        for other in (two.arrays or {}).values():
            if array.size and np.may_share_memory(array, other):
                return name or "its vector"
    return ""


def probe_clock(bench: Bench) -> Iterator[Finding]:
    """A clock that is years ahead."""
    base = _two(bench)[0]
    one = _plain(bench, base)
    with _shifted_clock(bench.part.kernel):
        two = _plain(bench, base)
    if one.same(_plain(bench, base)) and not one.same(two):
        yield Finding(bench.part.name, "not repeatable", f"It depends on the clock: {first_difference(one, two)}.")


@contextlib.contextmanager
def _shifted_clock(kernel: Any) -> Iterator[None]:
    shift = 1.1e8  # seconds: some years, and no whole number of days
    names = ("time", "perf_counter", "monotonic", "process_time")
    originals = {name: getattr(time, name) for name in (*names, *(f"{n}_ns" for n in names))}

    def moved(original: Callable[[], Any], by: float) -> Callable[[], Any]:
        return lambda: type(original())(original() + by)

    replaced = {n: moved(f, shift * 1e9 if n.endswith("_ns") else shift) for n, f in originals.items()}
    function = kernel if hasattr(kernel, "__globals__") else vars(type(kernel)).get("__call__")
    space = getattr(function, "__globals__", {})
    bound = {key: name for key, value in space.items() for name, f in originals.items() if value is f}
    try:
        for name, fake in replaced.items():
            setattr(time, name, fake)
        space.update({key: replaced[name] for key, name in bound.items()})
        yield
    finally:
        for name, original in originals.items():
            setattr(time, name, original)
        space.update({key: originals[name] for key, name in bound.items()})


def probe_threads(bench: Bench) -> Iterator[Finding]:
    """Two threads that call at once, with different inputs."""
    bases = _two(bench)
    if bases[0] is bases[1]:
        return
    alone = [_call(bench, base) for base in bases]
    if not all(_call(bench, base).same(outcome) for base, outcome in zip(bases, alone, strict=True)):
        return  # it does not even repeat itself, which has been said
    wrong: list[str] = []
    end = time.monotonic() + THREAD_SECONDS

    def work(base: Base, expected: Outcome) -> None:
        while time.monotonic() < end and not wrong:
            outcome = _call(bench, base)
            if not outcome.same(expected):
                wrong.append(first_difference(expected, outcome, base.call.origin))

    interval = sys.getswitchinterval()
    sys.setswitchinterval(1e-6)
    try:
        threads = [threading.Thread(target=work, args=pair) for pair in zip(bases, alone, strict=True)]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
    finally:
        sys.setswitchinterval(interval)
    if wrong:
        yield Finding(bench.part.name, "threads", f"Two threads that call at once disturb each other: {wrong[0]}.")


def _call(bench: Bench, base: Base) -> Outcome:
    """A call without the bench's instruments, which are not for two threads."""
    given = {name: array.copy() for name, array in base.given.items()}
    for array in given.values():
        array.flags.writeable = bench.writable  # as before: what Numba compiled is for these
    with np.errstate(all="ignore"):
        return call_part(bench.part, given, base.call, base.sample.fields, base.values).copied()
