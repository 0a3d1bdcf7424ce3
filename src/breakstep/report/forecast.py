"""A forecast and advice as text for the terminal. It knows the figures, and plays nothing."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping, Sequence
from typing import Any

from breakstep.report.wording import counted, listed, seconds, size

WIDTH = 80
TOP_ADVICE = 6


def _wrap(text: str, indent: str = "") -> list[str]:
    return textwrap.wrap(text, WIDTH, initial_indent=indent, subsequent_indent="  ")


def percent(value: float) -> str:
    """A signed error in percent."""
    return f"{100.0 * value:+.1f} %"


def recorded_sentence(recorded: Mapping[str, Mapping[str, Any]], where: str = "Here") -> str:
    """What was measured beside what the method says of it."""
    parts = [
        f"{mode} {seconds(facts['measured_s'])} measured, {seconds(facts['forecast_s'])} forecast"
        f" ({percent(facts['error'])}; {counted(facts['runs'], 'run')}"
        + (f", {100.0 * facts['spread']:.0f} % between slowest and fastest)" if facts["runs"] > 1 else ")")
        for mode, facts in recorded.items()
    ]
    return f"{where}: {'; '.join(parts)}." if parts else "No run with all barriers or none was given to compare with."


def worst(recorded: Mapping[str, Mapping[str, Any]]) -> str:
    """The largest error on the machine of recording, to be put beside every other figure."""
    errors = [abs(float(facts["error"])) for facts in recorded.values()]
    return f"{100.0 * max(errors):.1f} %" if errors else "?"


def forecast_lines(name: str, figures: Mapping[str, Any], asked: Sequence[str]) -> list[str]:
    """The whole text of ``forecast``."""
    machine, error = figures["machine"], worst(figures["recorded"])
    lines = _wrap(f"{name} on {machine['title']}" + (f", if {', '.join(asked)}" if asked else ""))
    lines += _wrap(recorded_sentence(figures["recorded"]))
    lines += ["", *_header(), *(_row(row, error) for row in figures["rows"]), ""]
    lines += _wrap(
        "All in seconds; in brackets where 95 % of repeats should lie. Kept: without barriers, each worker in"
        " lockstep's order and costs, never longer than lockstep. Bounds: no order of the tasked run is shorter, its"
        " tiles and messages being where they are: all work over all threads, the longest path with its messages, the"
        " busiest worker. Useful: kernels' own time over threads x time. Error"
        " here: how far the same method missed the runs that were recorded."
    )
    for note in notes(figures):
        lines += _wrap(note)
    for check in figures.get("checked", []):
        lines += _wrap(recorded_sentence(check["recorded"], f"Not used for the forecast, {check['profile']}"))
    return lines


def _header() -> list[str]:
    return [
        f"{'workers':>8} {'lockstep':>17} {'tasked':>17} {'kept':>6} {'bounds: area':>13} {'path':>6} {'worker':>6}",
        f"{'':>8} {'useful':>17} {'useful':>17} {'':>6} {'error here':>13}",
    ]


def _row(row: Mapping[str, Any], error: str) -> str:
    lock, task = (_span(row, mode) for mode in ("lockstep", "tasked"))
    kept, area, path, busy = (
        _short(row[key]) for key in ("tasked_fixed_s", "area_bound_s", "path_bound_s", "worker_bound_s")
    )
    useful = [f"{100.0 * row[f'{mode}_efficiency']:.0f} %" for mode in ("lockstep", "tasked")]
    return (
        f"{_workers(row):>8} {lock:>17} {task:>17} {kept:>6} {area:>13} {path:>6} {busy:>6}\n"
        f"{'':>8} {useful[0]:>17} {useful[1]:>17} {'':>6} {error:>13}"
    )


def _workers(row: Mapping[str, Any]) -> str:
    threads = int(row["threads"])
    return f"{row['workers']} x {threads}" if threads > 1 else str(row["workers"])


def _span(row: Mapping[str, Any], mode: str) -> str:
    low, high = _short(row[f"{mode}_low_s"]), _short(row[f"{mode}_high_s"])
    return f"{_short(row[f'{mode}_s'])} [{low}-{high}]"


def _short(value: float) -> str:
    return f"{value:#.3g}" if value < 100.0 else f"{value:.0f}"


def notes(figures: Mapping[str, Any]) -> list[str]:
    """What a reader must know before believing the figures."""
    found = []
    if not figures["messages_seen"]:
        found.append(
            "The recorded runs sent no messages: what messages cost is taken from runs of this program's own dispatch"
            " on two cores. Record a run with two workers to have it measured."
        )
    beyond = [row for row in figures["rows"] if row["workers"] > row["busy_workers"]]
    if beyond:
        found.append(
            f"There are {beyond[0]['busy_workers']} tiles: workers beyond that number have none. Ask for smaller tiles"
            " (--what-if tile=...), or for a mesh that grows with the workers (--what-if weak=1)."
        )
    crowded = [row for row in figures["rows"] if row["workers"] * row["threads"] > row["cores"]]
    if crowded:
        found.append(f"More threads than the machine's {counted(int(crowded[0]['cores']), 'core')} share them.")
    full = [row for row in figures["rows"] if not row["fits_memory"]]
    if full:
        found.append(f"{_workers(full[0])} workers need {size(full[0]['memory_bytes'])} each, more than they have.")
    practice = figures["machine"]["common_practice"]
    if practice:
        found.append(f"Common practice rather than measured on any machine: {listed(practice)}.")
    return found + list(figures.get("notes", []))


def advice_lines(name: str, figures: Mapping[str, Any]) -> list[str]:
    """The whole text of ``advise``."""
    machine, error = figures["machine"], worst(figures["recorded"])
    lines = _wrap(f"{name}, {counted(int(figures['workers']), 'worker')}, on {machine['title']}")
    lines += _wrap(recorded_sentence(figures["recorded"]))
    lines += ["", f"{'seconds gained':<46}{'alone':>10}{'in order':>12}{'fair share':>12}"]
    for row in figures["ranking"]:
        what = textwrap.shorten(str(row["what"]), 45, placeholder=" ...")
        order = f"{row['in_order_s']:.3f} ({row['place_in_order']})"
        lines.append(f"{what:<46}{row['alone_s']:>10.3f}{order:>12}{row['share_s']:>12.3f}")
    lines += _wrap(
        "Gains do not add: alone is with everything else as in lockstep; in order is in the best order of removal, its"
        " place in brackets; fair shares are means over all orders and sum to the whole."
        f" Error of the forecast here: {error}."
    )
    lines += ["", *_wrap(tie_sentence(figures["tie"]) + _measured_gain(figures["recorded"])), ""]
    for number, advice in enumerate(figures["advice"][:TOP_ADVICE], start=1):
        lines += _advice(number, advice, error)
    if not figures["advice"]:
        lines += _wrap("Nothing tried here should gain half a percent; leave it as it is.")
    return lines + verify_lines(figures.get("verify"))


def tie_sentence(tie: Mapping[str, Any]) -> str:
    """Whether reductions tie what barriers no longer do, with figures."""
    whole = f"of {seconds(tie['lockstep_s'])}"
    barriers = f"Removing all barriers alone gains {_gain(tie['barriers_gain_s'])} {whole}"
    held = _gain(tie["held_by_reductions_s"])
    if tie["reductions_limit_gain"]:
        return (
            f"{barriers}: little, for the reductions still tie the cycles together, and hold back another {held}."
            f" Using their results later would {_brings(tie['later_reductions_gain_s'])}, extra iterations counted;"
            f" were they free, the gain would be {_gain(tie['gain_without_reductions_s'])} in all."
        )
    return f"{barriers}; the reductions hold back another {held}, so they are not what ties the cycles together."


def _brings(gain: float) -> str:
    return f"bring {_gain(gain)} more" if gain >= 0.0 else f"cost {_gain(-gain)} on balance"


def _measured_gain(recorded: Mapping[str, Mapping[str, Any]]) -> str:
    """What leaving barriers out gained in the recorded runs, where both modes are there."""
    if not {"lockstep", "tasked"} <= set(recorded):
        return ""
    gain = float(recorded["lockstep"]["measured_s"]) - float(recorded["tasked"]["measured_s"])
    return f" Measured in the recorded runs: {_gain(gain)}."


def _gain(value: float) -> str:
    return f"{value:.3f} s"


def _advice(number: int, advice: Mapping[str, Any], error: str) -> list[str]:
    gains = f"gains {_gain(advice['gain_s'])} [{advice['low_s']:.3f} to {advice['high_s']:.3f}], error here {error}"
    unsure = "" if advice["low_s"] > 0.0 else "; not certain to gain at all"
    costs = f"{_more(advice['bytes'])} moved, {_more(advice['memory_bytes'])} held on one worker"
    lines = _wrap(f"{number}. {advice['do']}, against {advice['against']}: {gains}{unsure}.")
    lines += _wrap(f"costs: {costs}; answers: {advice['answers']}.", "   ")
    return [*lines, f"   {advice['command']}"]


def _more(count: int) -> str:
    return f"{'+' if count >= 0 else '-'}{size(abs(count))}"


def verify_lines(verify: Mapping[str, Any] | None) -> list[str]:
    """Forecast against measured."""
    if verify is None:
        return []
    share = 100.0 / float(verify["baseline_s"])
    text = (
        f"Tried for real: {verify['do']}. Forecast {_gain(verify['forecast_gain_s'])}"
        f" [{verify['forecast_low_s']:.3f} to {verify['forecast_high_s']:.3f}] of"
        f" {seconds(verify['forecast_baseline_s'])}; measured {_gain(verify['measured_gain_s'])}"
        f" [{verify['measured_low_s']:.3f} to {verify['measured_high_s']:.3f}] of {seconds(verify['baseline_s'])}"
        f" ({share * verify['measured_gain_s']:.1f} %), {counted(int(verify['pairs']), 'pair')}."
    )
    if verify["within"]:
        verdict = "As a share of the time, the middle pair lies within the forecast's interval."
    elif verify["contradicts"]:
        verdict = "As a share of the time, the two intervals do not meet: the forecast was wrong here."
    else:
        verdict = (
            "The middle pair lies outside the forecast's interval, but the measured interval reaches into it: the"
            " machine is too restless to say more. Try more pairs, or a quieter moment."
        )
    return ["", *_wrap(text), *_wrap(verdict)]
