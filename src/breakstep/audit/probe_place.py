"""Probes of place: the tile's number, the cut of the mesh, and how far an influence reaches."""

from __future__ import annotations

import time
from collections.abc import Iterator
from dataclasses import replace

import numpy as np

from breakstep.audit.bench import Bench, Given, corner_mask
from breakstep.audit.calls import Outcome, first_difference, largest_gap, unlike
from breakstep.audit.findings import FAULT, NOTE, Finding
from breakstep.audit.sample import Sample
from breakstep.mesh.mesh import AXIS_NAMES, Triple
from breakstep.steps.reduction import Combine, Reduction, combine
from breakstep.steps.step import Array, Call

ROUNDING = 1e-13  # vectorised and single zones may round a function differently: a few hundred units of the last place
SECONDS = 10.0  # on influences


def probe_numbers(bench: Bench) -> Iterator[Finding]:
    """Another number for the same tile; then another place and another cycle, on which it may depend."""
    yield from _tile_number(bench)
    said: set[str] = set()
    for sample in bench.samples:
        plain, call = bench.run(sample), sample.call
        if plain.arrays is None or not bench.run(sample).same(plain):
            continue
        for what, other in _elsewhere(call):
            if what not in said and not bench.run(sample, call=other).same(plain):
                said.add(what)
                yield Finding(bench.part.name, "position", f"It depends on {what}.", NOTE)


def _tile_number(bench: Bench) -> Iterator[Finding]:
    for base in bench.in_time():
        plain, call = base.outcome, base.call
        if plain is None or plain.arrays is None:
            continue
        for number in (call.tile + 1, call.tile + 7, 0):
            outcome = bench.run(base.sample, base.given, call=replace(call, tile=number), values=base.values)
            if not outcome.same(plain):
                yield Finding(
                    bench.part.name, "tile number",
                    f"The same zones as tile {number} instead of {call.tile} give other bits:"
                    f" {first_difference(plain, outcome, call.origin)} (cycle {call.cycle}).",
                )  # fmt: skip
                return


def _elsewhere(call: Call) -> Iterator[tuple[str, Call]]:
    moved = [o + 3 if a else o for o, a in zip(call.origin, call.active, strict=True)]
    yield "the place of its zones (call.origin)", replace(call, origin=(moved[0], moved[1], moved[2]))
    yield "the number of the cycle (call.cycle)", replace(call, cycle=call.cycle + 1)
    if call.iteration >= 0:
        yield "the number of the iteration (call.iteration)", replace(call, iteration=call.iteration + 1)


def probe_cut(bench: Bench) -> Iterator[Finding]:
    """The same zones as two smaller tiles must give the same bits; in an iteration they need not."""
    worst: tuple[float, str] | None = None
    for sample in bench.samples:
        whole = bench.run(sample)
        if whole.arrays is None or not bench.run(sample).same(whole):
            continue
        for axis in range(3):
            found = _halves(bench, sample, whole, axis)
            if found is not None and (worst is None or found[0] > worst[0]):
                worst = found
    if worst is None:
        return
    gap, words = worst
    repeat = bench.samples[0].repeat
    severity, why = FAULT, ""
    if repeat:
        severity, why = NOTE, f" Within the iteration {repeat!r} that is legitimate as long as its verdict decides."
    elif any(read.field in bench.private for read in bench.reads):
        severity, why = NOTE, " It reads scratch whose order of numbers may be its own, so that says little."
    elif gap <= ROUNDING:
        severity, why = NOTE, " That is rounding."
    yield Finding(bench.part.name, "tiling", f"Its bits depend on how the mesh is cut: {words}.{why}", severity)


def _halves(bench: Bench, sample: Sample, whole: Outcome, axis: int) -> tuple[float, str] | None:
    """Largest difference between a tile and its two halves, with words; None if there is none."""
    call = sample.call
    zones, width = call.shape[axis], max((read.halo[axis] for read in bench.reads), default=0)
    middle = zones // 2
    if not sample.cut_axes[axis] or middle < max(1, width) or zones - middle < max(1, width):
        return None
    parts = [(0, middle), (middle, zones)]
    outcomes = [_part(bench, sample, axis, low, high) for low, high in parts]
    title = f"as two tiles along {AXIS_NAMES[axis]} ({sample.where()})"
    if isinstance(bench.part, Reduction):
        return _combined(bench.part, whole, outcomes, title)
    for (low, high), outcome in zip(parts, outcomes, strict=True):
        expected = _cropped(bench, whole, axis, low, high)
        if outcome.arrays is None:
            return np.inf, f"{title} it fails: {outcome.error[:120]}"
        kept = replace(outcome, arrays={n: a for n, a in outcome.arrays.items() if n in (expected.arrays or {})})
        if not kept.same(expected):
            origin = _origin(call, axis, low)
            return largest_gap(expected, kept), f"{title} {first_difference(expected, kept, origin)}"
    return None


def _combined(reduction: Reduction, whole: Outcome, parts: list[Outcome], title: str) -> tuple[float, str] | None:
    vectors = [part.arrays[""] if part.arrays is not None else None for part in parts]
    if any(vector is None or vector.shape != (whole.arrays or {})[""].shape for vector in vectors):
        return np.inf, f"{title} it fails: {parts[0].error or parts[1].error or 'vectors of another length'}"
    made = Outcome({"": combine(reduction.combine, vectors)})  # type: ignore[dict-item]
    gap = largest_gap(whole, made)
    allowed = 1e-12 if reduction.combine is Combine.SUM else 0.0  # a sum may be rounded in another order
    return (gap, f"{title} {first_difference(whole, made)}") if gap > allowed else None


def _part(bench: Bench, sample: Sample, axis: int, low: int, high: int) -> Outcome:
    """Call on the zones from ``low`` to ``high`` along an axis, their ghost zones taken from the rest of the tile."""
    call = sample.call
    given: Given = {}
    for read in bench.reads:
        wide, reach = sample.padded[read.field], sample.reach[read.field]
        if bench.fields[read.field].per_tile:
            given[read.field] = wide
            continue
        cuts = [slice(r - w, n - (r - w)) for r, w, n in zip(reach, read.halo, wide.shape[1:], strict=True)]
        cuts[axis] = slice(reach[axis] - read.halo[axis] + low, reach[axis] + read.halo[axis] + high)
        array = np.ascontiguousarray(wide[(slice(None), *cuts)])
        if not read.corners and sum(w > 0 for w in read.halo) > 1:
            array = array.copy()
            array[:, corner_mask(array.shape[1:], read.halo)] = np.nan
        given[read.field] = array
    shape = tuple(high - low if a == axis else n for a, n in enumerate(call.shape))
    others = {name: _crop(array, axis, low, high) for name, array in sample.fields.items()}
    smaller = replace(call, origin=_origin(call, axis, low), shape=(shape[0], shape[1], shape[2]))
    return bench.run(sample, given, call=smaller, others=others)


def _crop(array: Array, axis: int, low: int, high: int) -> Array:
    if array.shape[1 + axis] < high:  # one value a tile
        return array
    cuts = [slice(None)] * 4
    cuts[1 + axis] = slice(low, high)
    return np.ascontiguousarray(array[tuple(cuts)])


def _origin(call: Call, axis: int, low: int) -> Triple:
    moved = [o + low if a == axis else o for a, o in enumerate(call.origin)]
    return (moved[0], moved[1], moved[2])


def _cropped(bench: Bench, whole: Outcome, axis: int, low: int, high: int) -> Outcome:
    arrays = whole.arrays or {}
    return Outcome({name: _crop(arrays[name], axis, low, high) for name in _comparable(bench) if name in arrays})


def _comparable(bench: Bench) -> list[str]:
    """Writes that hold a number of a zone where the zone lies."""
    return [name for name in bench.zone_fields() if name not in bench.private]


def probe_influence(bench: Bench) -> Iterator[Finding]:
    """Change one zone: which zones of the result change, and how far away are they?"""
    if bench.samples[0].repeat or not _comparable(bench):
        return  # within an iteration zones of a tile may well see each other
    began = time.monotonic()
    for read in bench.reads:
        if bench.fields[read.field].per_tile or read.field in bench.private:
            continue
        farthest: list[int] = [0, 0, 0]
        diagonal, evidence = "", ["", "", ""]
        for sample in bench.samples[:3]:
            if time.monotonic() - began > SECONDS:
                return
            plain = bench.run(sample)
            if plain.arrays is None or not bench.run(sample).same(plain):
                continue
            for zone in _zones(sample):
                for outcome, amount in _nudged(bench, sample, read.field, read.halo, zone):
                    for away, where in _distances(bench, plain, outcome, zone, sample):
                        for axis in range(3):
                            if away[axis] > farthest[axis] and sample.cut_axes[axis]:
                                farthest[axis] = away[axis]
                                evidence[axis] = f"{where} when zone {_mesh(zone, sample)} is {amount}"
                        crossed = sum(a > 0 and c for a, c in zip(away, sample.cut_axes, strict=True))
                        if crossed > 1 and not diagonal:
                            diagonal = f"{where} when zone {_mesh(zone, sample)} is {amount}"
        yield from _too_far(bench, read.field, read.halo, read.corners, farthest, evidence, diagonal)


def _too_far(
    bench: Bench, name: str, halo: Triple, corners: bool, farthest: list[int], evidence: list[str], diagonal: str
) -> Iterator[Finding]:
    for axis in range(3):
        if farthest[axis] > halo[axis]:
            needed = [max(f, h) for f, h in zip(farthest, halo, strict=True)]
            yield Finding(
                bench.part.name, "undeclared halo",
                f"It reads {name!r} up to {farthest[axis]} zones away along {AXIS_NAMES[axis]}; declared are"
                f" {halo[axis]}. Evidence: {evidence[axis]}.",
                field=name, change={"halo": needed, "corners": corners or bool(diagonal)},
            )  # fmt: skip
    if diagonal and not corners and all(f <= h for f, h in zip(farthest, halo, strict=True)):
        yield Finding(
            bench.part.name, "undeclared corners",
            f"It reads {name!r} across a diagonal. Evidence: {diagonal}.",
            field=name, change={"halo": list(halo), "corners": True},
        )  # fmt: skip


def _zones(sample: Sample) -> list[Triple]:
    """The tile's middle, its first and last zones, and two drawn ones."""
    shape = sample.call.shape
    rng = np.random.default_rng(5)
    drawn = [tuple(int(rng.integers(0, n)) for n in shape) for _ in range(2)]
    every = [tuple(n // 2 for n in shape), tuple(0 for _ in shape), tuple(n - 1 for n in shape), *drawn]
    return list(dict.fromkeys(every))  # type: ignore[arg-type]


def _nudged(bench: Bench, sample: Sample, name: str, halo: Triple, zone: Triple) -> Iterator[tuple[Outcome, str]]:
    """Outcomes with one zone of a field changed a little and a lot."""
    given = bench.given(sample)
    place = (slice(None), zone[0] + halo[0], zone[1] + halo[1], zone[2] + halo[2])
    size = float(np.nanmax(np.abs(given[name]), initial=0.0)) or 1.0
    for factor, shift, amount in ((1.01, 1e-4, "raised by 1 %"), (1.5, 0.1, "raised by half"), (-1.0, 1.0, "reversed")):
        changed = given[name].copy()
        changed[place] = changed[place] * factor + shift * size
        outcome = bench.run(sample, {**given, name: changed})
        if outcome.arrays is not None:
            yield outcome, amount


def _distances(
    bench: Bench, plain: Outcome, outcome: Outcome, zone: Triple, sample: Sample
) -> Iterator[tuple[Triple, str]]:
    """How far the changed zones lie from a zone: the farthest along each axis, and the most diagonal one."""
    for name in _comparable(bench):
        one, two = (plain.arrays or {}).get(name), (outcome.arrays or {}).get(name)
        if one is None or two is None or one.shape != two.shape:
            continue
        moved = np.argwhere(unlike(one, two).any(axis=0))
        if not moved.size:
            continue
        away = np.abs(moved - np.array(zone))
        rows = {int(away[:, axis].argmax()) for axis in range(3)} | {int((away > 0).sum(axis=1).argmax())}
        for row in rows:
            at = (int(moved[row, 0]), int(moved[row, 1]), int(moved[row, 2]))
            distance = (int(away[row, 0]), int(away[row, 1]), int(away[row, 2]))
            yield distance, f"{name!r} in zone {_mesh(at, sample)} changes"


def _mesh(zone: Triple, sample: Sample) -> Triple:
    moved = [z + o for z, o in zip(zone, sample.call.origin, strict=True)]
    return (moved[0], moved[1], moved[2])
