"""Probes of what is declared: reads, ghost zones, corners and reductions declared and not used, or the reverse."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from functools import partial
from itertools import islice

import numpy as np
from numpy.typing import NDArray

from breakstep.audit.bench import Base, Bench, Given, corner_mask, layer_mask
from breakstep.audit.calls import Outcome, first_difference, name_writes
from breakstep.audit.findings import NOTE, Finding
from breakstep.audit.reach import reached_state
from breakstep.audit.sample import Sample
from breakstep.mesh.mesh import AXIS_NAMES, Triple
from breakstep.steps.step import Array, Read, Step


def probe_contract(bench: Bench) -> Iterator[Finding]:
    """Call it as the engine does: names, shapes, types, finite numbers, its own arrays."""
    failed: list[tuple[Sample, str]] = []
    for sample in bench.samples:
        outcome, guarded = bench.run_raw(sample)
        wrong = name_writes(outcome, bench.part, bench.fields, sample.call.shape)
        if outcome.arrays is None or any("of shape" in clause for clause in wrong):
            reason = outcome.error if outcome.arrays is None else "; ".join(wrong)
            place = f" ({outcome.place})" if outcome.place else ""
            failed.append((sample, f"{outcome.kind + ': ' if outcome.kind else ''}{reason}{place}"))
            continue
        for clause in wrong:
            yield Finding(bench.part.name, "wrong writes", f"It {clause} ({sample.where()}).")
        yield from _aliases(bench, outcome, {name: one.array for name, one in guarded.items()})
        yield from _not_finite(bench, sample, outcome)
    if failed:
        yield from _failures(bench, failed)


def _aliases(bench: Bench, outcome: Outcome, given: Given) -> Iterator[Finding]:
    for name, array in (outcome.arrays or {}).items() if bench.is_step else ():
        for source, had in given.items():
            if np.may_share_memory(array, had):
                yield Finding(
                    bench.part.name, "shared result",
                    f"What it returns for {name!r} is memory of its input {source!r}; return a copy.", field=name,
                )  # fmt: skip


def _not_finite(bench: Bench, sample: Sample, outcome: Outcome) -> Iterator[Finding]:
    for name, array in (outcome.arrays or {}).items():
        if np.isfinite(array).all() or (name in bench.fields and bench.fields[name].scratch):
            continue
        if bench.run(sample, bench.given(sample, None)).finite():
            continue  # corners, of which their own probe speaks
        place = tuple(int(i) for i in np.argwhere(~np.isfinite(array))[0])
        yield Finding(
            bench.part.name, "raises",
            f"It yields {array[place]} in {name or 'its vector'} at index {place} from a state that a run meets"
            f" ({sample.where()}).",
        )  # fmt: skip


def _failures(bench: Bench, failed: list[tuple[Sample, str]]) -> Iterator[Finding]:
    """Say that it fails; where wider ghost zones cure it, say that instead."""
    sample, reason = failed[0]
    cure = _cure(bench, sample) if bench.is_step else None
    if cure is None:
        every = (
            "in every call" if len(failed) == len(bench.samples) else f"in {len(failed)} of {len(bench.samples)} calls"
        )
        yield Finding(bench.part.name, "raises", f"It fails {every}, first at {sample.where()}: {reason[:300]}.")
        return
    name, halo, corners = cure
    declared = next(read for read in bench.reads if read.field == name)
    wider = any(h > d for h, d in zip(halo, declared.halo, strict=True))
    yield Finding(
        bench.part.name, "undeclared halo" if wider else "wrong writes",
        f"It fails with the declared halo {declared.halo} of {name!r} ({reason[:160]}) and works with {halo}.",
        field=name, change={"halo": list(halo), "corners": corners},
    )  # fmt: skip
    bench.reads = tuple(
        replace(read, halo=halo, corners=corners) if read.field == name else read for read in bench.reads
    )


def _cure(bench: Bench, sample: Sample) -> tuple[str, Triple, bool] | None:
    """The smallest wider halo with which a failing call works."""
    declared = bench.reads
    try:
        for read in declared:
            for halo in _wider(read.halo, sample.reach[read.field]):
                for corners in (read.corners, True):
                    changed = Read(read.field, halo, corners)
                    bench.reads = tuple(changed if one is read else one for one in declared)
                    outcome = bench.run(sample)
                    if outcome.arrays is not None and not name_writes(
                        outcome, bench.part, bench.fields, sample.call.shape
                    ):
                        return read.field, halo, corners
    finally:
        bench.reads = declared
    return None


def _wider(halo: Triple, reach: Triple) -> list[Triple]:
    """Halos other than the declared one within reach, the nearest to it first."""
    every = [(x, y, z) for x in range(reach[0] + 1) for y in range(reach[1] + 1) for z in range(reach[2] + 1)]
    others = [h for h in every if h != halo]
    return sorted(others, key=lambda h: sum(abs(a - b) for a, b in zip(h, halo, strict=True)))


def probe_undeclared(bench: Bench) -> Iterator[Finding]:
    """Fields and reductions it asked for, in any state, without declaring them: do they matter?"""
    for _ in bench.in_time():
        continue
    for (kind, name), where in list(bench.incidents.items()):
        if kind == "undeclared field":
            tried = _first_effect(bench, partial(_other_field, bench, name))
            verb = "and uses it" if tried.matters else "although it was not seen to matter"
            yield Finding(
                bench.part.name, kind, f"It reads {name!r} {verb} ({where}{tried.evidence}).", field=name,
                change={"halo": [0, 0, 0], "corners": False},
            )  # fmt: skip
        elif kind == "undeclared reduction":
            tried = _first_effect(bench, partial(_other_value, bench, name))
            verb = "and uses it" if tried.matters else "although it was not seen to matter"
            yield Finding(
                bench.part.name, kind, f"It asks for the reduction {name!r} {verb} ({where}{tried.evidence}).",
                field=name, change={"uses": True},
            )  # fmt: skip


def probe_named(bench: Bench) -> Iterator[Finding]:
    """Fields and reductions whose names stand in its code, and which it neither declares nor was seen to ask for."""
    part = bench.part
    declared = {read.field for read in part.reads} | {name for _, name in bench.incidents}
    declared |= {*part.writes, *part.uses} if isinstance(part, Step) else set()
    known = dict.fromkeys(bench.fields, "undeclared field")
    known |= dict.fromkeys(bench.samples[0].call.values, "undeclared reduction")
    for name in sorted(reached_state(part.kernel).words & known.keys() - declared):
        text = (
            f"Its code names {name!r}, which it does not declare; it was not seen to ask for it in {bench.calls} calls."
        )
        yield Finding(part.name, known[name], text, NOTE, name)


def _other_field(bench: Bench, name: str, base: Base) -> Iterator[Outcome]:
    own = base.sample.fields.get(name)
    for changed in () if own is None else _replacements(own, np.ones(own.shape[1:], bool), 7):
        others = {**base.sample.fields, name: changed}
        yield bench.run(base.sample, base.given, call=base.call, values=base.values, others=others)


def _other_value(bench: Bench, name: str, base: Base) -> Iterator[Outcome]:
    own = base.values.get(name)
    if own is None:
        return
    for factor in (1.001, 0.5, 3.0, -1.0, 1e-6, 1e6, 1e100):
        with np.errstate(all="ignore"):
            changed = np.asarray(own * factor + (own == 0.0) * factor, np.float64)
        yield bench.run(base.sample, base.given, call=base.call, values={**base.values, name: changed})


@dataclass(frozen=True)
class Tried:
    """Whether a change was seen to matter, and in how many calls that was tried."""

    matters: bool
    calls: int
    evidence: str = ""


def _first_effect(bench: Bench, changes: Callable[[Base], Iterator[Outcome]]) -> Tried:
    """Try changes on one state after the other until one shows in the bits."""
    calls = 0
    for base in bench.in_time():
        assert base.outcome is not None
        for outcome in changes(base):
            calls += 1
            if not outcome.same(base.outcome):
                return Tried(True, calls, "; " + first_difference(base.outcome, outcome, base.call.origin))
            if outcome.counters != base.outcome.counters:
                return Tried(True, calls)
    return Tried(False, calls)


def region_matters(bench: Bench, name: str, mask_of: Callable[[Array], NDArray[np.bool_]]) -> Tried:
    """Whether the zones of a mask matter, on any of the bench's states and for any of several changes."""

    def changes(base: Base) -> Iterator[Outcome]:
        array = base.given[name]
        for changed in _replacements(array, mask_of(array), 11):
            yield bench.run(base.sample, {**base.given, name: changed}, call=base.call, values=base.values)

    return _first_effect(bench, changes)


def _replacements(array: Array, mask: NDArray[np.bool_], seed: int) -> Iterator[Array]:
    """The array with the masked zones changed: a little, by factors, by jumps of any size, to absurd numbers."""
    rng = np.random.default_rng(seed)
    old = array[:, mask]
    if not old.size:
        return
    size = float(np.nanmax(np.abs(array), initial=0.0)) or 1.0
    noise = rng.standard_normal(old.shape)
    with np.errstate(all="ignore"):
        made = [
            old * (1.0 + 1e-3 * noise) + np.where(old == 0.0, 1e-3 * size * noise, 0.0),
            old * np.exp(noise),
            old + size * noise,
            -old + size * 1e3 * np.abs(noise),
            np.full_like(old, -1e150),  # not NaN, which shows even through a factor of 0
        ]
    for new in made:
        changed = array.copy()
        changed[:, mask] = new
        yield changed


def probe_corners(bench: Bench) -> Iterator[Finding]:
    """Corners that were not declared: does what stands there matter?"""
    for read in bench.reads:
        if read.corners or sum(w > 0 for w in read.halo) < 2:
            continue
        for base in bench.in_time():
            evidence = _uses_corners(bench, base, read)
            if evidence is not None:
                yield Finding(
                    bench.part.name, "undeclared corners",
                    f"The diagonal ghost zones of {read.field!r} matter ({base.sample.where()}; {evidence}).",
                    field=read.field, change={"halo": list(read.halo), "corners": True},
                )  # fmt: skip
                break


def _uses_corners(bench: Bench, base: Base, read: Read) -> str | None:
    """Evidence that the undeclared corners of a read matter, if they do."""
    assert base.outcome is not None
    array = base.given[read.field]
    mask = corner_mask(array.shape[1:], read.halo)
    for content in (1.0, 1e30, -0.5):
        changed = array.copy()
        changed[:, mask] = content
        outcome = bench.run(base.sample, {**base.given, read.field: changed}, call=base.call, values=base.values)
        if not outcome.same(base.outcome):
            return first_difference(base.outcome, outcome, base.call.origin)
    return None


def probe_unused(bench: Bench) -> Iterator[Finding]:
    """Declared reads, ghost zones, corners and reductions: is there a state in which they matter?"""
    if all(base.outcome is not None and base.outcome.arrays is None for base in _few(bench)):
        return  # it never works, which has been said
    for read in bench.reads:
        whole = region_matters(bench, read.field, lambda array: np.ones(array.shape[1:], bool))
        if not whole.matters:
            yield Finding(
                bench.part.name, "unused read",
                f"Nothing in {read.field!r} was seen to matter in {whole.calls} calls.",
                field=read.field, change={"drop": True},
            )  # fmt: skip
        elif not read.is_local:
            yield from _unused_halo(bench, read)
    for name in bench.part.uses if isinstance(bench.part, Step) else ():
        tried = _first_effect(bench, partial(_other_value, bench, name))
        if not tried.matters and tried.calls:
            yield Finding(
                bench.part.name, "unused reduction",
                f"The value of reduction {name!r} was not seen to matter in {tried.calls} calls.",
                field=name, change={"uses": False},
            )  # fmt: skip


def _few(bench: Bench) -> list[Base]:
    return list(islice(bench.bases(), len(bench.samples)))


def _layer(halo: Triple, axis: int, side: int, distance: int, array: Array) -> NDArray[np.bool_]:
    return layer_mask(array.shape[1:], halo, axis, side, distance)


def _unused_halo(bench: Bench, read: Read) -> Iterator[Finding]:
    used, calls = [0, 0, 0], 0
    one_sided = []
    for axis, width in enumerate(read.halo):
        sides = [0, 0]
        for side in (0, 1):
            for distance in range(width, 0, -1):
                tried = region_matters(bench, read.field, partial(_layer, read.halo, axis, side, distance))
                calls += 0 if tried.matters else tried.calls
                if tried.matters:
                    sides[side] = distance
                    break
        used[axis] = max(sides)
        if width and min(sides) == 0 < max(sides):
            one_sided.append(f"{AXIS_NAMES[axis]} ({('high', 'low')[sides[0] > 0]} side only)")
    if tuple(used) != read.halo:
        yield Finding(
            bench.part.name, "unused halo",
            f"Of the halo {read.halo} of {read.field!r} only {tuple(used)} was seen to matter; the rest did not in"
            f" {calls} calls.",
            field=read.field, change={"halo": used, "corners": read.corners and sum(w > 0 for w in used) > 1},
        )  # fmt: skip
    if one_sided:
        yield Finding(
            bench.part.name, "position", f"It reads {read.field!r} upwind along {', '.join(one_sided)}.", NOTE,
            read.field,
        )  # fmt: skip
    if read.corners and sum(w > 0 for w in read.halo) > 1:
        tried = region_matters(bench, read.field, lambda array: corner_mask(array.shape[1:], read.halo))
        if not tried.matters:
            yield Finding(
                bench.part.name, "unused corners",
                f"The diagonal ghost zones of {read.field!r} were not seen to matter in {tried.calls} calls.",
                field=read.field, change={"halo": used, "corners": False},
            )  # fmt: skip
    elif read.corners:
        yield Finding(
            bench.part.name, "unused corners",
            f"corners=True for {read.field!r}, whose halo {read.halo} has no corners.", NOTE, read.field,
        )  # fmt: skip
