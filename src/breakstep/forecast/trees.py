"""Reductions of a recorded run: what makes each result, and which phases it holds up.

The nodes of a tree collapse into one instance: made by a phase, used by phases.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from breakstep.profile.frames import Integers
from breakstep.profile.schema import EDGE_KINDS, TASK_KINDS


@dataclass(frozen=True)
class Reductions:
    """Results made from all tiles.

    Attributes
    ----------
    names : tuple of str
    lags : dict of str to int
        How late each may be used: cycles, or iterations for a verdict.
    repeated : dict of str to bool
        Whether it ends a repeat.
    name : ndarray of int64, shape (instances,)
        Place in ``names``.
    made_by : ndarray of int64, shape (instances,)
        Phase whose tasks contribute.
    instance, used_by : ndarray of int64
        Which instance each waiting phase waits for: as a value, as a verdict, or because nothing further is
        emitted before it is known.
    """

    names: tuple[str, ...]
    lags: Mapping[str, int]
    repeated: Mapping[str, bool]
    name: Integers
    made_by: Integers
    instance: Integers
    used_by: Integers


def reductions_of(
    kind: Integers,
    place: Integers,
    code: Integers,
    words: Sequence[str],
    links: tuple[Integers, Integers, Integers],
    tiles: int,
    *,
    cycle: Integers,
    iteration: Integers,
    skipped: NDArray[np.bool_],
    lags: Mapping[str, int],
) -> Reductions:
    """Collapse the trees of a record.

    Parameters
    ----------
    kind, place, code : ndarray of int64, shape (tasks,)
        Kind of each recorded task; its number among step tasks or -1; its stage's place in ``words``.
    links : tuple of ndarray
        Producer, consumer and kind of each recorded edge.
    """
    making = _making_phases(kind, place, links, tiles)
    nodes = np.flatnonzero((kind == TASK_KINDS.index("combine")) & (making >= 0))
    keys, which = np.unique(np.stack([making[nodes], code[nodes]]), axis=1, return_inverse=True)
    number = np.full(len(kind), -1, dtype=np.int64)
    number[nodes] = which
    instance, used_by = _uses(number, place, links, tiles)
    names = tuple(words[c] for c in dict.fromkeys(keys[1].tolist()))
    name = np.array([names.index(words[c]) for c in keys[1]], dtype=np.int64)
    made_by = keys[0].astype(np.int64)
    repeated = {n: bool(np.any(iteration[made_by[name == i]] >= 0)) for i, n in enumerate(names)}
    known = {n: int(lags.get(n, 0)) for n in names}
    held = _held(names, name, made_by, cycle, iteration, skipped, repeated, known)
    pairs = np.unique(np.concatenate([np.stack([instance, used_by]), held], axis=1), axis=1)
    return Reductions(names, known, repeated, name, made_by, pairs[0], pairs[1])


def _making_phases(kind: Integers, place: Integers, links: tuple[Integers, Integers, Integers], tiles: int) -> Integers:
    """For each recorded task, the newest phase that it has a contribution of; -1 for none.

    A root also reads the result before its own, which was made by an earlier phase.
    """
    source, target, what = links
    phase = np.where(place >= 0, place // tiles, -1)
    carries = (what != EDGE_KINDS.index("barrier")) & (place[target] < 0)
    source, target = source[carries], target[carries]
    order = np.argsort(target, kind="stable")
    for s, t in zip(source[order].tolist(), target[order].tolist(), strict=True):  # producers come first
        phase[t] = max(phase[t], phase[s])
    return phase


def _uses(
    number: Integers, place: Integers, links: tuple[Integers, Integers, Integers], tiles: int
) -> tuple[Integers, Integers]:
    source, target, _ = links
    real = (number[source] >= 0) & (place[target] >= 0)
    pairs = np.unique(np.stack([number[source[real]], place[target[real]] // tiles]), axis=1)
    return pairs[0], pairs[1]


def _held(
    names: Sequence[str],
    name: Integers,
    made_by: Integers,
    cycle: Integers,
    iteration: Integers,
    skipped: NDArray[np.bool_],
    repeated: Mapping[str, bool],
    lags: Mapping[str, int],
) -> Integers:
    """What follows a repeat is emitted when the verdict that ended it is known: (instance, phase) pairs."""
    found: list[tuple[int, int]] = []
    for place, which in enumerate(names):
        if not repeated[which]:
            continue
        mine = np.flatnonzero(name == place)
        for c in np.unique(cycle[made_by[mine]]):
            verdicts = mine[cycle[made_by[mine]] == c]
            passed = np.flatnonzero(skipped[made_by[verdicts]])
            executed = int(passed[0]) if len(passed) else len(verdicts)
            last = verdicts[max(executed - 1 - lags[which], 0)]
            after = int(made_by[verdicts[-1]]) + 1
            while after < len(iteration) and iteration[after] >= 0 and cycle[after] == c:
                after += 1
            if after < len(iteration):
                found.append((int(last), after))
    return np.array(found, dtype=np.int64).reshape(-1, 2).T
