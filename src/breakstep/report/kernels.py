"""The text of ``breakstep kernels``: what was measured, against what, and whether it is enough."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping
from typing import Any

WIDTH = 80
_VERDICTS = {True: "met", False: "NOT MET", None: "?"}

Figures = Mapping[str, Any]


def kernel_lines(figures: Figures) -> list[str]:
    """The whole text, from plain figures as the JSON file holds them."""
    lines = _wrap(_machine(figures))
    for name, comparison in figures["comparisons"].items():
        lines += ["", _head(comparison)]
        lines += [_row(name, row) for row in comparison["rows"]]
    lines.append("")
    for sentence in (_transport, _scale, _zones, _paces, _verdict):
        lines += _wrap(sentence(figures))
    for warning in figures["warnings"]:
        lines += _wrap(f"Warning: {warning}")
    return lines


def _wrap(text: str) -> list[str]:
    return textwrap.wrap(text, WIDTH, subsequent_indent="  ")


def _machine(figures: Figures) -> str:
    machine, rounds = figures["machine"], figures["rounds"]
    cores = f"{machine['cores']} core{'' if machine['cores'] == 1 else 's'}"
    return (
        f"{cores}. One thread: triad {machine['triad_memory_gb_s']:.0f} GB/s from"
        f" memory, {machine['triad_cache_gb_s']:.0f} in cache; matrix product"
        f" {machine['matrix_product_gflop_s']:.0f} Gflop/s. Times: best of {rounds} rounds; ratios: median"
        " (middle half) of the rounds."
    )


def _head(comparison: Figures) -> str:
    return f"{comparison['title']:<33}{comparison['unit']:>8}{comparison['against']:>10} ratio{'needed':>19}"


def _row(name: str, row: Figures) -> str:
    ratio, label = row["ratio"], f"  {row['what']}"
    if name == "blocks":
        label += f": {row['ns_over_order_squared']:.2f} ns, {row['operations_over_order_squared']:.0f} flop / N^2"
    spread = f"({_short(ratio['low'])}-{_short(ratio['high'])})"
    needed = "" if row["needed"] is None else f"{row['needed']:g} {_VERDICTS[row['met']]}"
    values = f"{_short(row['ours']):>8}{_short(row['other']):>10}{_short(ratio['median']):>6}"
    return f"{label:<33}{values} {spread:<11} {needed}".rstrip()


def _short(value: float) -> str:
    """Two or three significant digits without an exponent."""
    decimals = 0 if value >= 100 else 1 if value >= 10 else 2 if value >= 0.1 else 3
    return f"{value:.{decimals}f}"


def _transport(figures: Figures) -> str:
    found, side = figures["transport"], figures["transport"]["side"]
    return (
        f"Transport, {found['groups']} groups, {side} x {side} zones: assemble"
        f" {_short(found['assemble_ns_per_zone'])} ns a zone, relax every zone once"
        f" {_short(found['relax_ns_per_zone'])} ns."
    )


def _scale(figures: Figures) -> str:
    """What the machine's memory alone would take; 1 GB/s is one byte a nanosecond."""
    machine, relaxation = figures["machine"], figures["transport"]["relax_bytes_per_zone"]
    sweep = figures["comparisons"]["hydro"]["rows"][0]["bytes_per_zone"]
    memory, cache = machine["triad_memory_gb_s"], machine["triad_cache_gb_s"]
    return (
        f"For scale: {sweep} bytes a zone of a sweep are {_short(sweep / memory)} ns from memory;"
        f" {relaxation} of a relaxation are {_short(relaxation / memory)} ns from memory,"
        f" {_short(relaxation / cache)} in cache."
    )


def _zones(figures: Figures) -> str:
    kinds = [
        f"T9 = {kind['temperature'] / 1e9:g}: {_short(kind['microseconds'])} ({kind['sub_steps']:.3g})"
        for kind in figures["zones"]["kinds"]
    ]
    return f"Burning for {figures['zones']['duration']:g} s, us a zone (sub-steps): {'; '.join(kinds)}."


def _paces(figures: Figures) -> str:
    rows = figures["comparisons"]["threads"]["rows"]
    paces = ", ".join(f"{_short(row['two_processes_over_one'])} ({row['what']})" for row in rows)
    return f"Two processes are faster than one by {paces}."


def _verdict(figures: Figures) -> str:
    asked = figures["requirements"]
    missed = [f"{one['what']}: {_short(one['ratio'])}" for one in asked if one["met"] is False]
    counts = [sum(one["met"] is verdict for one in asked) for verdict in (True, None)]
    unclear = f", {counts[1]} cannot be told" if counts[1] else ""
    text = f"Requirements: {counts[0]} of {len(asked)} met{unclear}."
    return text + (f" Not met: {'; '.join(missed)}." if missed else "")
