"""Inventing timer records: an even step, a step whose hot ranks move, and a solve. Nothing here was measured.

``python -m breakstep.scenario.invent_timers FILE --ranks 32,32 --cycles 50 --seed 1`` writes a Parquet or CSV file
that a scenario's ``[timers]`` can name. The same options give the same records.

Each rank spends a base time in each step, with a few percent of noise. Round hot spots wander over the mesh of
ranks, whose edges meet, in straight lines; near one, ``burn`` takes up to ``1 + heat`` times its base. So no rank
stays the slowest, and over the whole run the ranks do nearly the same.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import click
import numpy as np
import pandas as pd
from numpy.typing import NDArray

from breakstep.errors import OutputError

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Invention:
    """What to invent.

    Attributes
    ----------
    ranks : tuple of int
        Along each of one to three axes; numbered with the last axis fastest.
    cycles, seed : int
    spots : int
        Hot spots.
    heat : float
        By how many times its base ``burn`` is longer at the centre of a spot.
    width : float
        Radius of a spot [ranks].
    speed : float
        Ranks that a spot moves in a cycle.
    noise : float
        Relative standard deviation of every time.
    sweep, burn, solve : float
        Base times [s].
    iterations : int
        Most iterations of the solve in a cycle; with 1 the records have no column for them.
    face_bytes : float
        Bytes that a sweep sends to one neighbour; an iteration of the solve sends an eighth of it.
    """

    ranks: tuple[int, ...]
    cycles: int
    seed: int = 0
    spots: int = 3
    heat: float = 8.0
    width: float = 1.5
    speed: float = 0.5
    noise: float = 0.03
    sweep: float = 0.004
    burn: float = 0.003
    solve: float = 0.003
    iterations: int = 1
    face_bytes: float = 16384.0


def invent(what: Invention) -> pd.DataFrame:
    """Invented records: columns rank, step, cycle, seconds, bytes, and iteration if there are several.

    Returns
    -------
    DataFrame
        Sorted by cycle, step and rank; seconds with four significant digits.
    """
    chance = np.random.default_rng(what.seed)
    heat = 1.0 + what.heat * _warmth(what, chance)
    counts = chance.integers(1, what.iterations, size=what.cycles, endpoint=True)
    parts = []
    for cycle in range(what.cycles):
        parts.append(_records(what, chance, "sweep", cycle, what.sweep, what.face_bytes))
        parts.append(_records(what, chance, "burn", cycle, what.burn * heat[cycle], 0.0))
        for iteration in range(int(counts[cycle])):
            parts.append(_records(what, chance, "solve", cycle, what.solve, what.face_bytes / 8.0, iteration))
    frame = pd.concat(parts, ignore_index=True)
    return frame if what.iterations > 1 else frame.drop(columns="iteration")


def _records(
    what: Invention,
    chance: np.random.Generator,
    step: str,
    cycle: int,
    base: float | Array,
    sent: float,
    iteration: int = 0,
) -> pd.DataFrame:
    """One step of one cycle on all ranks."""
    ranks = int(np.prod(what.ranks))
    spread = np.maximum(0.0, 1.0 + what.noise * chance.standard_normal(ranks))
    return pd.DataFrame(
        {
            "rank": np.arange(ranks),
            "step": step,
            "cycle": cycle,
            "iteration": iteration,
            "seconds": [float(f"{seconds:.4g}") for seconds in base * spread],
            "bytes": round(sent * 2 * len(what.ranks)),
        }
    )


def _warmth(what: Invention, chance: np.random.Generator) -> Array:
    """How near a hot spot each rank is, from 0 to 1, shape (cycles, ranks)."""
    extent = np.array(what.ranks, dtype=np.float64)
    places = np.stack(np.meshgrid(*(np.arange(n) for n in what.ranks), indexing="ij"), axis=-1).reshape(-1, len(extent))
    begin = chance.uniform(0.0, extent, size=(what.spots, len(extent)))
    course = chance.standard_normal((what.spots, len(extent)))
    course *= what.speed / np.linalg.norm(course, axis=1, keepdims=True)
    centre = begin + np.arange(what.cycles)[:, None, None] * course
    away = np.abs(places[None, None] - (centre % extent)[:, :, None])
    away = np.minimum(away, extent - away)
    warmth: Array = np.exp(-0.5 * (away**2).sum(axis=-1) / what.width**2).max(axis=1, initial=0.0)
    return warmth


def write(frame: pd.DataFrame, path: Path) -> None:
    """Write records as what the path's ending says.

    Raises
    ------
    OutputError
        It cannot be written, or ends in neither .parquet nor .csv.
    """
    if path.suffix not in (".parquet", ".csv"):
        raise OutputError(f"{path}: expected a name that ends in .parquet or .csv")
    try:
        if path.suffix == ".csv":
            frame.to_csv(path, index=False)
        else:
            frame.to_parquet(path, index=False)
    except OSError as error:
        raise OutputError(f"{path} cannot be written ({error.strerror or error}); choose another path") from error


def _extents(context: click.Context, parameter: click.Parameter, text: str) -> tuple[int, ...]:
    try:
        extents = tuple(int(part) for part in text.split(","))
    except ValueError:
        extents = ()
    if not 1 <= len(extents) <= 3 or min(extents) < 1:
        raise click.BadParameter(f"expected one to three whole numbers joined by commas, such as 32,32, came {text}")
    return extents


@click.command()
@click.argument("path", type=click.Path(path_type=Path))
@click.option("--ranks", callback=_extents, default="32,32", show_default=True, help="Ranks along each axis.")
@click.option("--cycles", type=click.IntRange(1), default=50, show_default=True, help="Cycles.")
@click.option("--seed", type=int, default=0, show_default=True, help="Another seed, other records.")
@click.option("--spots", type=click.IntRange(0), default=3, show_default=True, help="Hot spots.")
@click.option("--heat", type=click.FloatRange(0.0), default=8.0, show_default=True, help="Their height, in base times.")
@click.option("--width", type=click.FloatRange(0.01), default=1.5, show_default=True, help="Their radius, in ranks.")
@click.option("--speed", type=click.FloatRange(0.0), default=0.5, show_default=True, help="Ranks they move a cycle.")
@click.option("--noise", type=click.FloatRange(0.0, 1.0), default=0.03, show_default=True, help="Relative noise.")
@click.option("--sweep", type=click.FloatRange(0.0), default=0.004, show_default=True, help="Base of sweep [s].")
@click.option("--burn", type=click.FloatRange(0.0), default=0.003, show_default=True, help="Base of burn [s].")
@click.option("--solve", type=click.FloatRange(0.0), default=0.003, show_default=True, help="Base of solve [s].")
@click.option("--iterations", type=click.IntRange(1), default=1, show_default=True, help="Most iterations of solve.")
@click.option("--face-bytes", type=click.FloatRange(0.0), default=16384.0, show_default=True, help="Sent by a sweep.")
def main(path: Path, **what: object) -> None:
    """Write invented timer records to PATH, which ends in .parquet or .csv."""
    try:
        frame = invent(Invention(**what))  # type: ignore[arg-type]
        write(frame, path)
    except OutputError as error:
        raise click.ClickException(error.message) from error
    click.echo(f"{path}: {len(frame)} invented records of {frame['rank'].nunique()} ranks, {what['cycles']} cycles")


if __name__ == "__main__":
    main()
