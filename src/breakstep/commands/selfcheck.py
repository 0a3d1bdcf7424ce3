"""``breakstep selfcheck``: what the tool's own dispatch, recording and statistics do on this machine."""

from __future__ import annotations

from pathlib import Path

import click

from breakstep.commands.shared import check_json, write_json
from breakstep.measure.selfcheck import selfcheck_figures
from breakstep.report.selfcheck import selfcheck_lines


@click.command()
@click.option("--json", "json_file", type=click.Path(path_type=Path), help="Write the figures there as JSON.")
@click.option("--quick", is_flag=True, help="Less of everything, no long run; less to be trusted.")
@click.option("--workers", type=click.IntRange(2), default=2, show_default=True, help="Worker processes.")
def selfcheck(json_file: Path | None, quick: bool, workers: int) -> None:
    """Measure what the dispatches and the recording cost here, and that nothing is called a gain that is none."""
    check_json(json_file)
    figures = selfcheck_figures(workers, quick, lambda what: click.echo(f"measuring: {what}", err=True))
    for line in selfcheck_lines(figures):
        click.echo(line)
    write_json(json_file, figures)
