"""One run told on the terminal: its accounts, the factors beside them, its critical chain, steps, bytes and clocks."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Iterator

from breakstep.profile.chain import CHAIN_ACCOUNTS
from breakstep.profile.ledger import ACCOUNTS
from breakstep.profile.run import Profile
from breakstep.profile.words import LABELS
from breakstep.report.comparison import attempts_of, resumed_from
from breakstep.report.reasons import share
from breakstep.report.trust import trust_sentences
from breakstep.report.wording import (
    FULL_CHOICES,
    WIDTH,
    counted,
    digits_of,
    in_mode,
    seconds,
    shortened,
    size,
    unevenness,
    wrapped,
)

TOP_LINKS = 8  # busiest pairs of workers that are listed; 16 workers have 240
TOP_CHAIN = 6  # steps of the critical chain that are listed; the rest is summed up


def ledger_lines(profile: Profile) -> list[str]:
    """One run's accounts, efficiency, critical chain, steps, bytes and clocks."""
    ledger, manifest = profile.ledger, profile.manifest
    mode = manifest["mode"] if manifest["mode"] in FULL_CHOICES else in_mode(profile)
    lines = wrapped(
        f"{manifest['scenario'].get('name', '?')}, {mode}: {seconds(ledger.span_ns / 1e9)} on"
        f" {counted(manifest['workers'], 'worker')} with {counted(ledger.threads, 'thread')},"
        f" {counted(manifest['cycles'], 'cycle')}, {counted(len(profile.tasks), 'task')},"
        f" {manifest['dispatch']} dispatch, {manifest['status']}"
    )
    lines += wrapped(_coverage(profile))
    if manifest["message"]:
        lines += wrapped(manifest["message"])
    lines += ["", *_account_table(profile), "", *_factor_lines(profile), "", *_chain_table(profile)]
    trusted = [line for sentence in trust_sentences([profile]) for line in wrapped(sentence)]
    return [*lines, "", *_step_table(profile), "", *_traffic_lines(profile), *_clock_lines(profile), *trusted]


def _coverage(profile: Profile) -> str:
    """What of a run that was started more than once the record covers; nothing to say of others."""
    attempts, cycle = attempts_of(profile), resumed_from(profile)
    which = f"this is the last of {attempts} starts" if attempts > 1 else "This run"
    lost = "Workers were lost: " if attempts > 1 else ""
    if cycle is not None:
        went = ", which went on" if attempts > 1 else " went on"
        return f"{lost}{which}{went} from the checkpoint before cycle {cycle}; all figures are of the cycles since."
    return f"{lost}{which}, which began anew; all figures are of it alone." if attempts > 1 else ""


def _account_table(profile: Profile) -> Iterator[str]:
    ledger = profile.ledger
    digits = digits_of(ledger) + 1
    yield f"{'account':<24}{'core-seconds':>14}{'share':>9}"
    for account in ACCOUNTS:
        spent = ledger.accounts_seconds[account]
        yield f"{LABELS[account]:<24}{spent:>14.{digits}f}{100 * share(profile, account):>7.1f} %"
    yield (
        f"{'= threads x time':<24}{ledger.available_ns / 1e9:>14.{digits}f}{100:>7.1f} %"
        f"   off by {100 * ledger.closure_error:.4f} %"
    )


def _factor_lines(profile: Profile) -> list[str]:
    """The published factors, which multiply to the parallel efficiency."""
    found, accounts = profile.ledger.factors, profile.ledger.accounts_ns
    if not found.useful_ns:
        return ["no kernel ran: no efficiency to tell"]
    factors = {"load balance": found.load_balance, "serialisation": found.serialisation, "transfer": found.transfer}
    product = " x ".join(f"{name} {unevenness(value)}" for name, value in factors.items())
    served = accounts["compute"] / found.useful_ns
    of_what = f"of wall time in kernels, {100 * served:.0f} % of it on a processor"
    return wrapped(f"efficiency {found.parallel:.2f} = {product}, {of_what}", bullet=True)


def _chain_table(profile: Profile) -> Iterator[str]:
    """What the run's time was spent on along its critical chain."""
    chain, digits = profile.ledger.chain, digits_of(profile.ledger) + 1
    heads = ("compute", "no proc.", "bytes", "dispatch", "together")
    yield f"{'critical chain, s':<25}" + "".join(f"{head:>11}" for head in heads)
    rows = [
        (str(step), [int(ns) for ns in row])
        for step, row in zip(chain.by_step.index, chain.by_step.to_numpy(), strict=True)
    ]
    rest = [ns for _, ns in rows[TOP_CHAIN:]]
    if len(rest) > 1:
        rows[TOP_CHAIN:] = [(f"{len(rest)} others", [sum(column) for column in zip(*rest, strict=True)])]
    total = [chain.accounts_ns[account] for account in CHAIN_ACCOUNTS]
    for name, spent in [*rows, (f"= time, {counted(len(chain.tasks), 'task')}", total)]:
        yield f"{shortened(name, 24):<25}" + "".join(f"{ns / 1e9:>11.{digits}f}" for ns in [*spent, sum(spent)])


def _demand_lines(profile: Profile) -> Iterator[str]:
    """Logical bytes, to be read beside those that moved."""
    demand = profile.demand
    if len(demand):
        across = demand[demand["from_worker"] != demand["to_worker"]]
        whole, apart = int(demand["bytes"].sum()), int(across["bytes"].sum())
        yield f"read across tile faces: {size(whole)}, of that from tiles of other workers: {size(apart)}"
        for stage, count in demand.groupby("stage")["bytes"].sum().sort_values(ascending=False).items():
            yield f"  by {stage}: {size(int(count))}"


def _clock_lines(profile: Profile) -> list[str]:
    """How well the workers' clocks agree, and what the accounts owe to it."""
    clock = profile.manifest["clock"]
    residual = max((int(ns) for ns in clock.get("residual_ns", [])), default=0)
    return wrapped(f"clocks: {clock.get('method', '?')}; off by {residual / 1e3:.3g} us at most", bullet=True)


def _parts(name: str, width: int) -> list[str]:
    """What stands in a column, and before it the lines for a name that the column does not hold."""
    return [name] if len(name) < width else ["", *textwrap.wrap(name, WIDTH)]


def _step_table(profile: Profile) -> Iterator[str]:
    digits, among = digits_of(profile.ledger) + 1, profile.imbalance
    yield f"{'step':<16}{'compute s':>11}{'CPU s':>11}{'workers':>10}{'phases':>9}{'tiles':>8}   busiest/mean"
    for step, row in profile.work.sort_values("compute_ns", ascending=False).iterrows():
        uneven = [unevenness(float(among[c].get(str(step), math.nan))) for c in ("workers", "phases_weighted", "tiles")]
        name, *above = _parts(str(step), 16)
        yield from above
        yield (
            f"{name:<16}{row['compute_seconds']:>11.{digits}f}{row['cpu_seconds']:>11.{digits}f}"
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
        yield from textwrap.wrap(f"  made by {stage}: {size(count)}", WIDTH, subsequent_indent="    ")
    yield from _demand_lines(profile)
    peaks = sorted(profile.live.peak_by_data.items(), key=lambda item: -item[1])
    yield f"most alive at once: {size(profile.live.peak_bytes)}"
    for data, peak in peaks:
        if peak:
            yield f"  of {data}: {size(peak)}"
    for row in profile.counters_by_step.itertuples():
        if not str(row.counter).startswith("checksum:"):
            yield from wrapped(f"counted in {row.step}: {row.counter} {row.value}", bullet=True)
