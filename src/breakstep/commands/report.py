"""``breakstep report``: one page that tells what recorded runs say, in a file that needs no network."""

from __future__ import annotations

import importlib
import importlib.util
from pathlib import Path
from typing import Any

import click

from breakstep.commands.shared import check_json, reading, write_json
from breakstep.errors import OutputError, ProfileError
from breakstep.report.page.data import page_data
from breakstep.report.page.render import page_html
from breakstep.report.page.runs import Runs, read_runs
from breakstep.report.wording import size


@click.command()
@click.argument("profiles", nargs=-1, required=True, type=click.Path(path_type=Path))
@click.option(
    "--out", type=click.Path(path_type=Path), default=Path("report.html"), show_default=True, help="The page to write."
)
@click.option("--json", "json_file", type=click.Path(path_type=Path), help="Write all of the page's numbers as JSON.")
def report(profiles: tuple[Path, ...], out: Path, json_file: Path | None) -> None:
    """Make a page of PROFILES: a run's folder, one of each way, or the folder that a comparison left."""
    check_json(json_file)
    with reading(profiles[0], ProfileError):
        runs = read_runs(profiles)
    data = page_data(runs, _forecast(runs))
    html = page_html(data)
    _write(out, html)
    write_json(json_file, data)
    click.echo(data["headline"]["sentence"])
    click.echo(f"Page: {out} ({size(len(html.encode()))}); it needs no network.")


def _forecast(runs: Runs) -> dict[str, Any]:
    """Figures of the forecasts, where this installation makes them."""
    if importlib.util.find_spec("breakstep.forecast") is None:
        return {}
    if importlib.util.find_spec("breakstep.forecast.figures") is None:
        return {}
    module = importlib.import_module("breakstep.forecast.figures")
    found: dict[str, Any] = module.page_forecast(runs.lockstep, runs.tasked)
    return found


def _write(out: Path, html: str) -> None:
    """Whole or not at all."""
    unfinished = out.with_name(f"{out.name}.unfinished")
    try:
        out.parent.mkdir(parents=True, exist_ok=True)
        unfinished.write_text(html, encoding="utf-8")
        unfinished.replace(out)
    except OSError as error:
        raise OutputError(f"--out {out} cannot be written ({error.strerror or error}); choose another path") from error
