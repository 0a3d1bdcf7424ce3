"""Tables for the terminal: 25 lines at most for a comparison, made to read well at 80 columns."""

from __future__ import annotations

import math
import re
import textwrap
from collections.abc import Iterable, Iterator

from breakstep.profile.ledger import ACCOUNTS, Ledger
from breakstep.profile.run import Profile
from breakstep.report.comparison import Comparison
from breakstep.report.reasons import NOTABLE_SHARE, reasons, share
from breakstep.report.wording import (
    FULL_CHOICES,
    barriers_of,
    column_name,
    counted,
    in_mode,
    ratio,
    seconds,
    size,
    unevenness,
)

WIDTH = 80
LINES = 25  # of a whole comparison, so that it fits a terminal of the usual height
WAITING = {
    "neighbour": "wait: neighbour tile",
    "reduction": "wait: reduction",
    "barrier": "wait: barrier",
    "transfer": "bytes, ghost zones",
    "engine": "dispatch (engine)",
    "unemployed": "out of work",
}
TOP_STEPS = 4
TOP_LINKS = 8  # busiest pairs of workers that a ledger lists; 16 workers have 240
UNIT = re.compile(r"(\d) (?=(?:%|[kMGT]?B|m?s|times)(?:\W|$))")
WIDE = 1.1  # high over low end from which an interval leaves a gain of some percent undecided


def comparison_lines(comparison: Comparison) -> list[str]:
    """The whole text of ``compare``."""
    first = [*_wrap(headline(comparison)), *_wrap(_subline(comparison)), ""]
    table, steps = _accounts(comparison), list(_steps(comparison))
    last = _wrap(_bytes_sentence(*comparison.shown), bullet=True)
    why = [_wrap(sentence, bullet=True) for sentence in reasons(*comparison.shown)]
    room = LINES - len(first) - len(table) - len(last) - 1
    shown = min(len(steps), max(1, room - sum(map(len, why))))
    at = 2  # below the heading and the account of compute
    return [*first, *table[:at], *steps[:shown], *table[at:], "", *_fitting(why, room - shown), *last]


def _fitting(sentences: Iterable[list[str]], room: int) -> Iterator[str]:
    """Lines of those sentences, the first ones first, for which there is room."""
    for lines in sentences:
        if len(lines) <= room:
            room -= len(lines)
            yield from lines


def headline(comparison: Comparison) -> str:
    """The answer in one sentence."""
    name = comparison.shown[0].manifest["scenario"]["name"]
    if not comparison.identical:
        return f"{name}: the runs do NOT end with the same bits; {describe_difference(comparison)}"
    if comparison.shown[0].manifest["mode"] == "tasked":
        return f"{name}: {_against_itself(comparison)}"
    return f"{name}: {_answer(comparison)}"


def _answer(comparison: Comparison) -> str:
    gain, first = comparison.gain, comparison.shown[0]
    leaving = "leaving lockstep" if first.manifest["mode"] == "lockstep" else f"leaving out {barriers_of(first)}"
    if gain.low is None or gain.high is None:
        return f"one pair cannot say whether {leaving} pays; use --pairs 3 or more."
    if gain.low > 1.0 and gain.median > 1.0:
        return f"{leaving} hands back {100.0 * (1.0 - 1.0 / gain.median):.1f} of every 100 core-seconds."
    if gain.high < 1.0 and gain.median < 1.0:
        return f"{leaving} costs {100.0 * (1.0 / gain.median - 1.0):.1f} core-seconds more for every 100."
    more = "; more --pairs would narrow the interval" if gain.high > WIDE * gain.low else ""
    return f"{leaving} buys nothing that stands out from the noise{more}."


def _against_itself(comparison: Comparison) -> str:
    """What is said of a comparison of tasked runs with each other."""
    gain = comparison.gain
    if gain.significant:
        return f"tasked against tasked differs by {100.0 * abs(gain.median - 1.0):.1f} %; trust no gain of that size."
    return "tasked against tasked shows no difference beyond noise, as it should."


def describe_difference(comparison: Comparison) -> str:
    """Where the runs differ first, in words."""
    found = comparison.difference
    assert found is not None
    if not found.step:
        return (
            f"field {found.field} differs at the end, first on tile {found.tile}; a traced second run did not"
            " show where it began."
        )
    return f"they differ first in {found.field} after step {found.step} on tile {found.tile} in cycle {found.cycle}."


def _subline(comparison: Comparison) -> str:
    left, _ = comparison.shown
    gain, pairs = comparison.gain, len(comparison.lockstep)
    spans = [f"{seconds(p.ledger.span_ns / 1e9)} {in_mode(p).removeprefix('in ')}" for p in comparison.shown]
    evidence = (
        "one pair has no interval"
        if gain.low is None or gain.high is None
        else f"95 % interval {ratio(gain.low)} to {ratio(gain.high)}"
    )
    same = " Same bits in all runs." if comparison.identical else ""
    return (
        f"{_crew(left)}, {left.manifest['dispatch']} dispatch, {counted(pairs, 'pair')}:"
        f" {spans[0]}, {spans[1]}; {'median ' if pairs > 1 else ''}gain {ratio(gain.median)}, {evidence}.{same}"
    )


def _crew(profile: Profile) -> str:
    """Workers, and their threads where those are more."""
    workers, threads = profile.manifest["workers"], profile.manifest["threads"]
    return counted(workers, "worker") + (f" with {counted(threads, 'thread')}" if threads != workers else "")


def _accounts(comparison: Comparison) -> list[str]:
    left, right = (p.ledger for p in comparison.shown)
    names = [column_name(p) for p in comparison.shown]
    digits = _digits(left, right)
    lines = [f"{'core-seconds':<24}{names[0]:>17}{names[1]:>18}{'handed back':>15}"]
    lines += [_row(WAITING.get(account, account), left, right, account, digits) for account in ACCOUNTS]
    total = [ledger.available_ns / 1e9 for ledger in (left, right)]
    closure = max(left.closure_error, right.closure_error)
    lines.append(
        f"{'= threads x time':<24}{total[0]:>10.{digits}f}  100 %{total[1]:>11.{digits}f}  100 %"
        f"{total[0] - total[1]:>15.{digits}f}"
    )
    if closure > 0.0:
        lines.append(
            f"The accounts miss threads x time by {100 * closure:.4f} %: a defect of the record, please report it."
        )
    return lines


def _digits(*ledgers: Ledger) -> int:
    """Decimals that leave the largest number of core-seconds with about four digits."""
    largest = max(ledger.available_ns for ledger in ledgers) / 1e9
    return 2 if largest >= 10.0 else 3 if largest >= 1.0 else 4


def _row(label: str, left: Ledger, right: Ledger, account: str, digits: int) -> str:
    a, b = (ledger.accounts_seconds[account] for ledger in (left, right))
    shares = [100.0 * x * 1e9 / max(ledger.available_ns, 1) for x, ledger in ((a, left), (b, right))]
    return f"{label:<24}{a:>10.{digits}f}{shares[0]:>5.0f} %{b:>11.{digits}f}{shares[1]:>5.0f} %{a - b:>15.{digits}f}"


def _steps(comparison: Comparison) -> Iterator[str]:
    """The costliest steps, to stand under ``compute``."""
    left, right = (p.work["compute_seconds"] for p in comparison.shown)
    digits = _digits(*(p.ledger for p in comparison.shown))
    notable = NOTABLE_SHARE * float(left.sum())
    for step in left[left >= notable].sort_values(ascending=False).index[:TOP_STEPS]:
        a, b = float(left[step]), float(right.get(step, 0.0))
        yield f"  {step:<22}{a:>10.{digits}f}{'':>7}{b:>11.{digits}f}{'':>7}{a - b:>15.{digits}f}"


def _bytes_sentence(left: Profile, right: Profile) -> str:
    names = [column_name(p) if p.manifest["mode"] in FULL_CHOICES else f"with {column_name(p)}" for p in (left, right)]
    moved = [f"{size(p.traffic.total_bytes)} {name}" for p, name in zip((left, right), names, strict=True)]
    live = [size(p.live.peak_bytes) for p in (left, right)]
    by_stage = right.traffic.by_stage
    most = f" (most: {max(by_stage, key=lambda s: by_stage[s])})" if by_stage else ""
    return f"Moved between workers: {', '.join(moved)}{most}; most alive at once: {live[0]}, {live[1]}."


def _wrap(text: str, bullet: bool = False) -> list[str]:
    """Lines of at most WIDTH; a number stays with its unit."""
    joined = UNIT.sub("\\1\u00a0", text)
    lines = textwrap.wrap(joined, WIDTH, subsequent_indent="  " if bullet else "", break_on_hyphens=False)
    return [line.replace("\u00a0", " ") for line in lines]


def ledger_lines(profile: Profile) -> list[str]:
    """One run's accounts, steps and bytes."""
    ledger, manifest = profile.ledger, profile.manifest
    mode = manifest["mode"] if manifest["mode"] in FULL_CHOICES else in_mode(profile)
    lines = _wrap(
        f"{manifest['scenario'].get('name', '?')}, {mode}: {seconds(ledger.span_ns / 1e9)} on"
        f" {counted(manifest['workers'], 'worker')} with {counted(ledger.threads, 'thread')},"
        f" {counted(manifest['cycles'], 'cycle')}, {counted(len(profile.tasks), 'task')},"
        f" {manifest['dispatch']} dispatch, {manifest['status']}"
    )
    if manifest["message"]:
        lines += _wrap(manifest["message"])
    return [*lines, "", *_account_table(profile), "", *_step_table(profile), "", *_traffic_lines(profile)]


def _account_table(profile: Profile) -> Iterator[str]:
    ledger = profile.ledger
    digits = _digits(ledger) + 1
    yield f"{'account':<24}{'core-seconds':>14}{'share':>9}"
    for account in ACCOUNTS:
        spent = ledger.accounts_seconds[account]
        yield f"{WAITING.get(account, account):<24}{spent:>14.{digits}f}{100 * share(profile, account):>7.1f} %"
    yield (
        f"{'= threads x time':<24}{ledger.available_ns / 1e9:>14.{digits}f}{100:>7.1f} %"
        f"   off by {100 * ledger.closure_error:.4f} %"
    )


def _step_table(profile: Profile) -> Iterator[str]:
    digits, among = _digits(profile.ledger) + 1, profile.imbalance
    yield f"{'step':<16}{'compute s':>11}{'CPU s':>11}{'workers':>10}{'phases':>9}{'tiles':>8}   busiest/mean"
    for step, row in profile.work.sort_values("compute_ns", ascending=False).iterrows():
        uneven = [unevenness(float(among[c].get(str(step), math.nan))) for c in ("workers", "phases_weighted", "tiles")]
        yield (
            f"{step!s:<16}{row['compute_seconds']:>11.{digits}f}{row['cpu_seconds']:>11.{digits}f}"
            f"{uneven[0]:>10}{uneven[1]:>9}{uneven[2]:>8}"
        )


def _traffic_lines(profile: Profile) -> Iterator[str]:
    traffic = profile.traffic
    yield f"moved between workers: {size(traffic.total_bytes)} in {counted(traffic.transfers, 'transfer')}"
    links = sorted(traffic.by_workers.items(), key=lambda item: -item[1])
    for (sender, receiver), count in sorted(links[:TOP_LINKS]):
        yield f"  worker {sender} to {receiver}: {size(count)}"
    if len(links) > TOP_LINKS:
        rest = sum(count for _, count in links[TOP_LINKS:])
        yield f"  between {counted(len(links) - TOP_LINKS, 'other pair')}: {size(rest)}"
    for stage, count in sorted(traffic.by_stage.items(), key=lambda item: -item[1]):
        yield f"  made by {stage}: {size(count)}"
    yield f"most alive at once: {size(profile.live.peak_bytes)}"
    for row in profile.counters_by_step.itertuples():
        if not str(row.counter).startswith("checksum:"):
            yield f"counted in {row.step}: {row.counter} {row.value}"
