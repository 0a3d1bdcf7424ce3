"""Tables for the terminal: 25 lines at most for a comparison, made to read well at 80 columns."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

from breakstep.profile.ledger import ACCOUNTS, Ledger
from breakstep.profile.run import Profile
from breakstep.profile.words import LABELS
from breakstep.report.comparison import Comparison
from breakstep.report.reasons import NOTABLE_SHARE, reasons
from breakstep.report.trust import trust_sentences
from breakstep.report.wording import (
    FULL_CHOICES,
    barriers_of,
    column_name,
    counted,
    digits_of,
    in_mode,
    ratio,
    seconds,
    shortened,
    size,
    wrapped,
)

LINES = 25  # of a whole comparison, so that it fits a terminal of the usual height; a rehearsal's account comes on top
TOP_STEPS = 4
WIDE = 1.1  # high over low end from which an interval leaves a gain of some percent undecided


def comparison_lines(comparison: Comparison) -> list[str]:
    """The whole text of ``compare``."""
    first = [*wrapped(headline(comparison)), *wrapped(_subline(comparison)), ""]
    table, steps = _accounts(comparison), list(_steps(comparison))
    trusted = [line for sentence in trust_sentences(comparison.shown) for line in wrapped(sentence, bullet=True)]
    last = wrapped(_bytes_sentence(*comparison.shown), bullet=True)
    why = [wrapped(sentence, bullet=True) for sentence in reasons(*comparison.shown)]
    room = LINES - len(first) - len(table) - len(last) - 1
    shown = min(len(steps), max(1, room - sum(map(len, why))))
    at = 2  # below the heading and the account of compute
    return [*first, *table[:at], *steps[:shown], *table[at:], "", *_fitting(why, room - shown), *trusted, *last]


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
    digits = digits_of(left, right)
    lines = [f"{'core-seconds':<24}{names[0]:>17}{names[1]:>18}{'handed back':>15}"]
    lines += [_row(LABELS[account], left, right, account, digits) for account in ACCOUNTS]
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


def _row(label: str, left: Ledger, right: Ledger, account: str, digits: int) -> str:
    a, b = (ledger.accounts_seconds[account] for ledger in (left, right))
    shares = [100.0 * x * 1e9 / max(ledger.available_ns, 1) for x, ledger in ((a, left), (b, right))]
    return f"{label:<24}{a:>10.{digits}f}{shares[0]:>5.0f} %{b:>11.{digits}f}{shares[1]:>5.0f} %{a - b:>15.{digits}f}"


def _steps(comparison: Comparison) -> Iterator[str]:
    """The costliest steps, to stand under ``compute``."""
    left, right = (p.work["compute_seconds"] for p in comparison.shown)
    digits = digits_of(*(p.ledger for p in comparison.shown))
    notable = NOTABLE_SHARE * float(left.sum())
    for step in left[left >= notable].sort_values(ascending=False).index[:TOP_STEPS]:
        a, b = float(left[step]), float(right.get(step, 0.0))
        yield f"  {shortened(str(step), 21):<22}{a:>10.{digits}f}{'':>7}{b:>11.{digits}f}{'':>7}{a - b:>15.{digits}f}"


def _bytes_sentence(left: Profile, right: Profile) -> str:
    names = [column_name(p) if p.manifest["mode"] in FULL_CHOICES else f"with {column_name(p)}" for p in (left, right)]
    moved = [f"{size(p.traffic.total_bytes)} {name}" for p, name in zip((left, right), names, strict=True)]
    live = [size(p.live.peak_bytes) for p in (left, right)]
    by_stage = right.traffic.by_stage
    most = f" (most: {max(by_stage, key=lambda s: by_stage[s])})" if by_stage else ""
    return f"Moved between workers: {', '.join(moved)}{most}; most alive at once: {live[0]}, {live[1]}."
