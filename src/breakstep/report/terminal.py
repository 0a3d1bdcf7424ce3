"""Tables and sentences for the terminal: 25 lines at most for a comparison, made to read well at 80 columns."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator
from typing import Any

from breakstep.profile.ledger import ACCOUNTS
from breakstep.profile.run import Profile
from breakstep.report.comparison import Comparison

WIDTH = 80
WAITING = {
    "neighbour": "wait: neighbour tile",
    "reduction": "wait: reduction",
    "barrier": "wait: barrier",
    "transfer": "bytes, ghost zones",
    "engine": "dispatch (engine)",
    "unemployed": "out of work",
}
NOTABLE_SHARE = 0.02  # a cause below 2 % of the core-seconds is not worth a line
UNEVEN = 1.1  # busiest over mean from which a lasting imbalance is worth a line
TOP_STEPS = 4


def comparison_lines(comparison: Comparison) -> list[str]:
    """The whole text of ``compare``."""
    lines = [*_wrap(headline(comparison)), *_wrap(_subline(comparison)), ""]
    lines += _accounts(comparison)
    lines.append("")
    for sentence in _reasons(comparison):
        lines += _wrap(sentence, bullet=True)
    return lines


def headline(comparison: Comparison) -> str:
    """The answer in one sentence."""
    gain, name = comparison.gain, comparison.shown[0].manifest["scenario"]["name"]
    if not comparison.identical:
        return f"{name}: the two modes do NOT give the same bits; {describe_difference(comparison)}"
    if gain.significant and gain.median > 1.0:
        back = 100.0 * (1.0 - 1.0 / gain.median)
        return f"{name}: leaving lockstep hands back {back:.1f} of every 100 core-seconds."
    if gain.significant:
        more = 100.0 * (1.0 / gain.median - 1.0)
        return f"{name}: leaving lockstep costs {more:.1f} core-seconds for every 100 spent."
    return f"{name}: leaving lockstep buys nothing beyond noise."


def describe_difference(comparison: Comparison) -> str:
    """Where the runs differ first, in words."""
    found = comparison.difference
    assert found is not None
    if not found.step:
        return (
            f"field {found.field} differs at the end, first on tile {found.tile}; a traced second run did not"
            " show where it began"
        )
    return f"they differ first in {found.field} after step {found.step} on tile {found.tile} in cycle {found.cycle}"


def _subline(comparison: Comparison) -> str:
    lockstep, tasked = comparison.shown
    manifest, gain = lockstep.manifest, comparison.gain
    interval = (
        "no interval from one pair"
        if gain.low is None
        else f"95 % interval {gain.low:.2f} to {gain.high:.2f}"
    )
    same = "Same bits in all runs." if comparison.identical else ""
    return (
        f"{manifest['workers']} workers, {manifest['dispatch']} dispatch, {len(comparison.lockstep)} pairs:"
        f" {lockstep.ledger.span_ns / 1e9:.2f} s {lockstep.manifest['mode']},"
        f" {tasked.ledger.span_ns / 1e9:.2f} s {tasked.manifest['mode']}; gain {gain.median:.2f}, {interval}. {same}"
    ).strip()


def _accounts(comparison: Comparison) -> list[str]:
    lockstep, tasked = (p.ledger for p in comparison.shown)
    names = [p.manifest["mode"] for p in comparison.shown]
    names = [name if len(name) <= 15 else "some barriers" for name in names]
    lines = [f"{'core-seconds':<24}{names[0]:>18}{names[1]:>18}{'handed back':>15}"]
    for account in ACCOUNTS:
        label = WAITING.get(account, account)
        lines.append(_row(label, lockstep, tasked, account))
        if account == "compute":
            lines += _steps(comparison)
    total = [ledger.available_ns / 1e9 for ledger in (lockstep, tasked)]
    closure = max(lockstep.closure_error, tasked.closure_error)
    lines.append(
        f"{'= threads x time':<24}{total[0]:>10.2f}  100 %{total[1]:>11.2f}  100 %{total[0] - total[1]:>15.2f}"
        f"   off by {100 * closure:.3f} %"
    )
    return lines


def _row(label: str, lockstep: Any, tasked: Any, account: str) -> str:
    a, b = (ledger.accounts_seconds[account] for ledger in (lockstep, tasked))
    shares = [100.0 * x * 1e9 / max(ledger.available_ns, 1) for x, ledger in ((a, lockstep), (b, tasked))]
    return f"{label:<24}{a:>10.2f}{shares[0]:>5.0f} %{b:>11.2f}{shares[1]:>5.0f} %{a - b:>15.2f}"


def _steps(comparison: Comparison) -> Iterator[str]:
    """The costliest steps, under ``compute``."""
    left, right = (p.work["compute_seconds"] for p in comparison.shown)
    for step in left.sort_values(ascending=False).index[:TOP_STEPS]:
        a, b = float(left[step]), float(right.get(step, 0.0))
        yield f"  {step:<22}{a:>10.2f}{'':>7}{b:>11.2f}{'':>7}{a - b:>15.2f}"


def _reasons(comparison: Comparison) -> Iterator[str]:
    lockstep, tasked = comparison.shown
    yield from _barrier_reason(lockstep)
    yield from _reduction_reasons(tasked)
    yield from _neighbour_reason(tasked)
    yield from _placement_reason(tasked)
    yield from _engine_reason(tasked)
    yield _bytes_sentence(lockstep, tasked)


def _share(profile: Profile, account: str) -> float:
    return profile.ledger.accounts_ns[account] / max(profile.ledger.available_ns, 1)


def _most_at_fault(profile: Profile, account: str) -> str:
    waits = profile.ledger.waits_by_stage[account]
    return str(waits.idxmax()) if len(waits) else ""


def _barrier_reason(lockstep: Profile) -> Iterator[str]:
    share = _share(lockstep, "barrier")
    if share < NOTABLE_SHARE:
        yield f"Why: cores waited at barriers for only {100 * share:.1f} % of their time; the phases are even."
        return
    stage = _most_at_fault(lockstep, "barrier")
    costs = lockstep.work["compute_ns"]
    step = max(stage.split("+"), key=lambda name: int(costs[name]) if name in costs.index else 0)
    uneven = lockstep.imbalance.loc[step] if step in lockstep.imbalance.index else None
    words = (
        f", whose busiest worker has {uneven['phases_weighted']:.2f} times the mean work of a phase"
        f" (busiest tile: {uneven['tiles']:.1f} times the mean tile)"
        if uneven is not None
        else ""
    )
    yield f"Why: in lockstep cores waited at barriers {100 * share:.0f} % of their time, most of it for {step}{words}."


def _reduction_reasons(tasked: Profile) -> Iterator[str]:
    lags: dict[str, int] = tasked.manifest["notes"].get("lags", {})
    share = _share(tasked, "reduction")
    prompt = [name for name, lag in lags.items() if lag == 0]
    if prompt and share >= NOTABLE_SHARE:
        yield (
            f"Reductions ({', '.join(prompt)}) have lag 0: every tile waits for the slowest one, barriers or not,"
            f" and so {100 * share:.0f} % of the tasked time is lost to them. A lag of 1 would free the cycles."
        )
    elif share >= NOTABLE_SHARE:
        worst = _most_at_fault(tasked, "reduction")
        yield f"Reductions still hold tasks back for {100 * share:.0f} % of their time, most of it behind {worst}."


def _neighbour_reason(tasked: Profile) -> Iterator[str]:
    share = _share(tasked, "neighbour")
    if share >= NOTABLE_SHARE:
        stage = _most_at_fault(tasked, "neighbour")
        yield f"Without barriers, {100 * share:.0f} % goes to waiting for neighbour tiles, most of it for {stage}."


def _placement_reason(tasked: Profile) -> Iterator[str]:
    costs = tasked.work["compute_ns"]
    if not len(costs):
        return
    step = str(costs.idxmax())
    lasting = float(tasked.imbalance["workers"][step])
    if lasting >= UNEVEN:
        yield (
            f"Over the whole run the busiest worker has {lasting:.2f} times the mean work of {step}: an unevenness"
            " that stays in place is cured by placement, not by tasks."
        )


def _engine_reason(tasked: Profile) -> Iterator[str]:
    share = _share(tasked, "engine")
    steps = tasked.tasks[tasked.tasks["kind"] == "step"]
    if share < NOTABLE_SHARE or not len(steps):
        return
    mean = float((steps["end_ns"] - steps["start_ns"]).mean()) / 1e6
    verdict = " Larger tiles would let the waits speak more clearly." if share > 0.1 else ""
    yield f"The dispatch itself takes {100 * share:.0f} % at {mean:.1f} ms a step task.{verdict}"


def _bytes_sentence(lockstep: Profile, tasked: Profile) -> str:
    moved = [size(p.traffic.total_bytes) for p in (lockstep, tasked)]
    live = [size(p.live.peak_bytes) for p in (lockstep, tasked)]
    by_stage = tasked.traffic.by_stage
    most = f" (most: {max(by_stage, key=lambda s: by_stage[s])})" if by_stage else ""
    return f"Moved between workers: {moved[0]} lockstep, {moved[1]} tasked{most}; most alive at once: {live[0]}, {live[1]}."


def size(count: float) -> str:
    """A number of bytes in decimal units."""
    for unit in ("B", "kB", "MB", "GB"):
        if count < 1000:
            return f"{count:.0f} {unit}" if unit == "B" else f"{count:.1f} {unit}"
        count /= 1000
    return f"{count:.1f} TB"


def _wrap(text: str, bullet: bool = False) -> list[str]:
    return textwrap.wrap(text, WIDTH, subsequent_indent="  " if bullet else "")


def ledger_lines(profile: Profile) -> list[str]:
    """One run's accounts, steps and bytes."""
    ledger, manifest = profile.ledger, profile.manifest
    lines = _wrap(
        f"{manifest['scenario'].get('name', '?')}, {manifest['mode']}: {ledger.span_ns / 1e9:.2f} s on"
        f" {manifest['workers']} workers with {ledger.threads} threads, {manifest['cycles']} cycles,"
        f" {len(profile.tasks)} tasks, {manifest['dispatch']} dispatch, {manifest['status']}"
    )
    lines += ["", f"{'account':<24}{'core-seconds':>14}{'share':>9}"]
    for account in ACCOUNTS:
        seconds = ledger.accounts_seconds[account]
        lines.append(
            f"{WAITING.get(account, account):<24}{seconds:>14.3f}{100 * _share(profile, account):>7.1f} %"
        )
    lines.append(
        f"{'= threads x time':<24}{ledger.available_ns / 1e9:>14.3f}{100:>7.1f} %   off by {100 * ledger.closure_error:.4f} %"
    )
    lines += [
        "",
        f"{'step':<16}{'compute s':>11}{'CPU s':>9}{'workers':>10}{'phases':>9}{'tiles':>8}   busiest/mean",
    ]
    for step, row in profile.work.sort_values("compute_ns", ascending=False).iterrows():
        uneven = profile.imbalance.loc[str(step)]
        lines.append(
            f"{step!s:<16}{row['compute_seconds']:>11.3f}{row['cpu_seconds']:>9.3f}{uneven['workers']:>10.2f}"
            f"{uneven['phases_weighted']:>9.2f}{uneven['tiles']:>8.2f}"
        )
    traffic = profile.traffic
    lines += ["", f"moved between workers: {size(traffic.total_bytes)} in {traffic.transfers} transfers"]
    for (sender, receiver), count in sorted(traffic.by_workers.items()):
        lines.append(f"  worker {sender} to {receiver}: {size(count)}")
    for stage, count in sorted(traffic.by_stage.items(), key=lambda item: -item[1]):
        lines.append(f"  made by {stage}: {size(count)}")
    lines.append(f"most alive at once: {size(profile.live.peak_bytes)}")
    counted = profile.counters_by_step
    counted = counted[~counted["counter"].astype(str).str.startswith("checksum:")]
    lines += [f"counted in {row.step}: {row.counter} {row.value}" for row in counted.itertuples()]
    return lines
