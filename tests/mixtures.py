"""Random problems that can be run: steps that mix fields, reductions of every kind, repeats that end by themselves.

The arithmetic is invented and means nothing; it is bounded, and sensitive to every input, so that a version, a rim
or a value that is not the right one changes bits.
"""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from hypothesis import strategies as st

from breakstep.engine.program import Program
from breakstep.mesh.fields import Field
from breakstep.mesh.mesh import Edge, Mesh, Triple
from breakstep.mesh.tiling import Tile
from breakstep.steps.problem import Problem
from breakstep.steps.reduction import Combine, Reduction
from breakstep.steps.splitting import Item, Repeat, Splitting
from breakstep.steps.step import Array, Call, Read, Step
from tests.toys import moved

NAMES = ("a", "b", "c")
LONGEST = 4  # iterations of a repeat before it stops


@dataclass(frozen=True)
class Mix:
    """Every write is a mean of all zones of all reads, plus a little of every value used."""

    reads: tuple[Read, ...]
    writes: tuple[str, ...]

    def __call__(self, arrays: Mapping[str, Array], call: Call) -> dict[str, Array]:
        parts = [part for read in self.reads for part in _parts(arrays[read.field], read)]
        shift = sum(0.01 * float(vector[0]) for vector in call.values.values())
        made = {}
        for salt, name in enumerate(self.writes, start=1):
            weights = [1.0 / (1.0 + (salt * n) % 7) for n in range(len(parts))]
            total = sum(w * part for w, part in zip(weights, parts, strict=True)) / sum(weights)
            made[name] = 0.9 * total + 0.05 * salt + shift
        return made


def _parts(array: Array, read: Read) -> list[Array]:
    """The array seen from each offset that was declared."""
    offsets = itertools.product(*(range(-w, w + 1) for w in read.halo))
    wanted = [o for o in offsets if read.corners or sum(d != 0 for d in o) <= 1]
    return [moved(array, read.halo, o) for o in wanted]


@dataclass(frozen=True)
class Measure:
    """A tile's contribution: a sum and an extreme of one field."""

    field: str

    def __call__(self, arrays: Mapping[str, Array], call: Call) -> Array:
        array = arrays[self.field]
        return np.array([array.sum(), array.max()])


def follow_up(combined: Array, previous: Array | None) -> Array:
    """A bounded value that depends on the one before, and how many there were before."""
    before = np.zeros(2) if previous is None else previous
    return np.array([np.tanh(combined[0] + combined[1]) + 0.5 * before[0], before[1] + (previous is not None)])


def verdict(combined: Array, previous: Array | None) -> Array:
    """(iterations so far, iterations wanted): the first measurement of a repeat decides."""
    wanted = 1 + int(997.0 * abs(float(combined[0]))) % LONGEST if previous is None else previous[1]
    return np.array([1.0 if previous is None else previous[0] + 1.0, float(wanted)])


def steady_verdict(combined: Array, previous: Array | None) -> Array:
    """The same for a repeat that always takes as long."""
    return np.array([1.0 if previous is None else previous[0] + 1.0, LONGEST - 1.0])


def is_enough(value: Array) -> bool:
    """Whether a repeat may stop."""
    return bool(value[0] >= value[1])


@dataclass(frozen=True)
class Ends:
    """Stop before the cycle whose value is this one in the row."""

    count: int

    def __call__(self, value: Array) -> bool:
        return bool(value[1] >= self.count)


def ripples(tile: Tile, mesh: Mesh) -> dict[str, Array]:
    """An initial state that differs from zone to zone."""
    axes = [np.arange(o, o + n, dtype=np.float64) for o, n in zip(tile.origin, tile.shape, strict=True)]
    x, y, z = np.meshgrid(*axes, indexing="ij")
    return {name: np.sin((1.3 + k) * x + (0.7 + k) * y * y + z)[None] for k, name in enumerate(NAMES)}


FIELDS = (*(Field(name, (name,)) for name in NAMES), Field("within", ("within",), scratch=True))
WITHIN = (  # a field that lives within a cycle
    Step("fill", Mix((Read("a"),), ("within",)), (Read("a"),), ("within",)),
    Step("spend", Mix((Read("within", (1, 0, 0)),), ("b",)), (Read("within", (1, 0, 0)),), ("b",)),
)


def mixing(name: str, reads: Sequence[Read], writes: Sequence[str], uses: Sequence[str] = ()) -> Step:
    """A step that mixes."""
    return Step(name, Mix(tuple(reads), tuple(writes)), tuple(reads), tuple(writes), tuple(uses))


def measured(name: str, field: str, kind: Combine = Combine.SUM, lag: int = 0) -> Reduction:
    """A cycle-level reduction."""
    return Reduction(name, Measure(field), (Read(field),), kind, follow_up, lag)


def repeated(
    name: str, body: Sequence[Step], field: str, kind: Combine = Combine.MAX, lag: int = 0, steady: bool = False
) -> Repeat:
    """A repeat of one to four iterations, as its first measurement decides, or always of three; its lag adds on."""
    finish = steady_verdict if steady else verdict
    until = Reduction(f"{name}_verdict", Measure(field), (Read(field),), kind, finish, lag)
    return Repeat(name, tuple(body), until, is_enough, LONGEST + lag)


def mixture(
    splitting: Splitting, shape: tuple[int, ...], edges: tuple[Edge, ...], cycles: int, ends: int | None = None
) -> Problem:
    """The problem as declared to Breakstep."""
    mesh = Mesh(shape, (1.0,) * len(shape), tuple((e, e) for e in edges))
    ended = Ends(ends) if ends is not None and splitting.reductions else None
    return Problem("mixture", "an invented problem", mesh, FIELDS, splitting, ripples, cycles, ended)


@st.composite
def steps(draw: st.DrawFn, name: str, dimensions: int, reductions: Sequence[str], local: bool = False) -> Step:
    """A step with random reads, writes and uses."""
    halos: list[Triple] = [(0, 0, 0), (1, 0, 0)]
    if dimensions == 2:
        halos += [(0, 1, 0), (1, 1, 0)]
    fields = draw(st.lists(st.sampled_from(NAMES), min_size=1, max_size=2, unique=True))
    chosen = [(0, 0, 0) if local else draw(st.sampled_from(halos)) for _ in fields]
    reads = [Read(f, h, draw(st.booleans())) for f, h in zip(fields, chosen, strict=True)]
    writes = draw(st.lists(st.sampled_from(NAMES), min_size=1, max_size=2, unique=True))
    uses = draw(st.lists(st.sampled_from(reductions), unique=True)) if reductions else []
    return mixing(name, reads, writes, uses)


@st.composite
def splittings(draw: st.DrawFn, dimensions: int, steady: bool = False) -> Splitting:
    """One or two orders of up to four items; up to two reductions with lags, some of which nobody uses."""
    kinds, fields, lags = st.sampled_from(list(Combine)), st.sampled_from(NAMES), st.integers(0, 2)
    number = draw(st.integers(0, 2))
    reductions = [measured(f"r{i}", draw(fields), draw(kinds), draw(lags)) for i in range(number)]
    known = [reduction.name for reduction in reductions]
    local = draw(st.sampled_from([False, False, False, True]))  # with local steps alone, nothing keeps tiles together
    pool: list[Item] = [draw(steps(f"s{i}", dimensions, known, local)) for i in range(draw(st.integers(1, 3)))]
    if draw(st.booleans()):
        body = [draw(steps(f"q{j}", dimensions, known, local)) for j in range(draw(st.integers(1, 2)))]
        pool.append(repeated("p", body, draw(fields), draw(kinds), draw(lags), steady))
    orders = draw(st.lists(st.lists(st.sampled_from(pool), min_size=1, max_size=3), min_size=1, max_size=2))
    front = WITHIN if draw(st.booleans()) else ()
    return Splitting(tuple((*front, *order) for order in orders), tuple(reductions))


TILINGS = (
    ((2,), (2,)),
    ((6,), (2,)),
    ((10,), (1,)),
    ((7,), (3,)),
    ((6, 6), (2, 2)),
    ((8, 5), (2, 2)),
    ((4, 4), (2, 4)),
    ((5, 3), (1, 2)),
)


@st.composite
def programs(draw: st.DrawFn, cycles: st.SearchStrategy[int] | None = None, steady: bool = False) -> Program:
    """A random problem cut into one to twelve tiles; a steady one runs all its cycles and all of them alike."""
    shape, tile = draw(st.sampled_from(TILINGS))
    edges = tuple(draw(st.sampled_from([Edge.PERIODIC, Edge.OUTFLOW, Edge.REFLECTING])) for _ in shape)
    splitting = draw(splittings(len(shape), steady))
    ends = draw(st.sampled_from([None, None, 0, 2])) if not steady else None
    length = draw(cycles if cycles is not None else st.integers(1, 3))
    return Program(mixture(splitting, shape, edges, length, ends), tile, draw(st.booleans()))
