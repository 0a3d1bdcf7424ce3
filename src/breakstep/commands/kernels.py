"""``breakstep kernels``: how fast the compiled kernels are here, beside other ways of computing."""

from __future__ import annotations

from pathlib import Path

import click

from breakstep.commands.shared import check_json, write_json
from breakstep.measure.kernels import kernel_figures
from breakstep.report.kernels import kernel_lines


@click.command()
@click.option("--json", "json_file", type=click.Path(path_type=Path), help="Write the figures there as JSON.")
@click.option("--quick", is_flag=True, help="Fewer and shorter rounds; less to be trusted.")
def kernels(json_file: Path | None, quick: bool) -> None:
    """Measure the compiled kernels against numpy, scipy and this machine, and say what is fast enough."""
    check_json(json_file)
    figures = kernel_figures(quick, lambda what: click.echo(f"measuring: {what}", err=True))
    for line in kernel_lines(figures):
        click.echo(line)
    write_json(json_file, figures)
