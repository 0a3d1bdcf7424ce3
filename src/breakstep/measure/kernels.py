"""All measurements of the compiled kernels in one go, as plain figures.

Knows what is measured and what is asked for. Refuses to know how figures are shown.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

from threadpoolctl import threadpool_limits  # type: ignore[import-untyped]

from breakstep.measure.blocks import BLOCKS, block_rows
from breakstep.measure.burning import hot_rows, zone_figures
from breakstep.measure.hydro import SIDE, hydro_rows
from breakstep.measure.limits import cores, machine_limits
from breakstep.measure.threads import MEMBERS, thread_rows
from breakstep.measure.timing import FULL, QUICK, Effort, Row
from breakstep.measure.transport import transport_figures

Measurement = tuple[str, str, str, Callable[[Effort], list[Row]]]

COMPARISONS: dict[str, Measurement] = {
    "hydro": (f"hydro sweep, {SIDE} x {SIDE}, 13 species", "ns/zone", "numpy", hydro_rows),
    "blocks": (f"factor and solve, {BLOCKS} blocks", "us/block", "numpy", block_rows),
    "burning": ("burning a hot zone, 13 species", "us/zone", "BDF", hot_rows),
    "threads": ("two threads, two processes", "calls/s", "processes", thread_rows),
}
"""Title, unit of both figures, what ours is compared with, and what measures it."""


def _silent(what: str) -> None:
    """Report nothing."""


def kernel_figures(quick: bool = False, progress: Callable[[str], None] = _silent) -> dict[str, Any]:
    """Measure everything.

    Parameters
    ----------
    quick : bool
        Fewer and shorter rounds: all figures, less to be trusted.
    progress : callable
        Told what comes next.

    Returns
    -------
    dict
        Plain figures, ready for JSON: ``machine``, ``comparisons`` (each with its ``rows``), ``transport``,
        ``zones``, ``requirements`` (``what``, ``ratio``, ``needed``, ``met``) and ``warnings``.
    """
    effort = QUICK if quick else FULL
    with threadpool_limits(limits=1):
        progress("the machine")
        machine = machine_limits(effort)
        rows: dict[str, list[Row]] = {}
        for name, (title, _, _, measure) in COMPARISONS.items():
            progress(title)
            rows[name] = measure(effort)
        progress("zones and tiles")
        transport, zones = transport_figures(effort), zone_figures(effort)
    return {
        "quick": quick,
        "rounds": effort.rounds,
        "machine": machine,
        "comparisons": {name: _comparison(name, found) for name, found in rows.items()},
        "transport": transport,
        "zones": zones,
        "requirements": requirements(rows),
        "warnings": warnings(cores(), rows["threads"], quick),
    }


def _comparison(name: str, rows: Sequence[Row]) -> dict[str, Any]:
    title, unit, against, _ = COMPARISONS[name]
    return {"title": title, "unit": unit, "against": against, "rows": [row.as_json() for row in rows]}


def requirements(rows: dict[str, list[Row]]) -> list[dict[str, Any]]:
    """Every ratio that something is asked of; ``met`` is None where the machine cannot tell."""
    return [
        {
            "what": f"{COMPARISONS[name][0]}: {row.what}",
            "ratio": row.ratio.median,
            "needed": row.needed,
            "met": row.met,
        }
        for name, found in rows.items()
        for row in found
        if row.needed is not None
    ]


def warnings(available: int, threads: Sequence[Row], quick: bool) -> list[str]:
    """What makes the figures say less than they seem to."""
    found = []
    if available < MEMBERS:
        found.append(f"{available} core: two threads and two processes share it, so their ratio says nothing.")
    elif not all(row.judged for row in threads):
        found.append("two cores were not free, so threads and processes cannot be told apart everywhere.")
    if quick:
        found.append("few and short rounds; judge by a full run.")
    return found
