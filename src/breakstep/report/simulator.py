"""The text of ``breakstep simulator``: how fast the replay engines are, and whether it is enough."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping
from typing import Any

WIDTH = 96
_VERDICTS = {True: "met", False: "NOT MET", None: "not judged"}

Figures = Mapping[str, Any]


def simulator_lines(figures: Figures) -> list[str]:
    """The whole text, from plain figures as the JSON file holds them."""
    cores = figures["cores"]
    lines = [f"{cores} core{'' if cores == 1 else 's'}; seconds on the wall, best of the rounds.", ""]
    lines.append(f"{'':<62}{'s':>7}{'Mtask/s':>9}  needed")
    for row in figures["rows"]:
        lines += _row(row)
    lines.append("")
    return lines + textwrap.wrap(_verdict(figures["rows"]), WIDTH, subsequent_indent="  ")


def _row(row: Figures) -> list[str]:
    rate = row["tasks"] / row["seconds"] / 1e6
    needed = "" if row["needed_s"] is None else f"{row['needed_s']:g} s {_VERDICTS[row['met']]}"
    lines = [f"{row['what']:<62}{row['seconds']:>7.2f}{rate:>9.1f}  {needed}".rstrip()]
    if row["memory_mib"] is not None:
        lines.append(f"  memory of the whole process {row['memory_mib']:.0f} MiB, needed {row['needed_mib']:g} MiB")
    if row["found"]:
        lines.append(f"  {row['found']}")
    return lines


def _verdict(rows: list[Figures]) -> str:
    asked = [row for row in rows if row["needed_s"] is not None]
    missed = [row["what"] for row in asked if row["met"] is False]
    if all(row["met"] is None for row in asked):
        return "Smaller sizes than those asked about: judge by a full run."
    text = f"Requirements: {sum(row['met'] is True for row in asked)} of {len(asked)} met."
    return text + (f" Not met: {'; '.join(missed)}." if missed else "")
