"""``breakstep simulator``: how fast the forecast's replay engines are here."""

from __future__ import annotations

from pathlib import Path

import click

from breakstep.commands.shared import check_json, write_json
from breakstep.measure.simulator import simulator_figures
from breakstep.report.simulator import simulator_lines


@click.command()
@click.option("--json", "json_file", type=click.Path(path_type=Path), help="Write the figures there as JSON.")
@click.option("--quick", is_flag=True, help="Small graphs and one round; nothing is judged.")
def simulator(json_file: Path | None, quick: bool) -> None:
    """Measure the replay engines behind forecasts on large graphs, and say whether they are fast enough."""
    check_json(json_file)
    figures = simulator_figures(quick, lambda what: click.echo(f"measuring: {what}", err=True))
    for line in simulator_lines(figures):
        click.echo(line)
    write_json(json_file, figures)
