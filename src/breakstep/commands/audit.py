"""``breakstep audit``: what each step truly reads and writes, against what it declares."""

from __future__ import annotations

from pathlib import Path

import click

from breakstep.audit.costs import inplace_hazards, with_cost
from breakstep.audit.run import audit_program
from breakstep.audit.wording import audit_figures, audit_lines
from breakstep.commands.session import Session
from breakstep.commands.shared import check_json, reading, write_json
from breakstep.errors import ProfileError
from breakstep.profile.store import read_profile


@click.command()
@click.argument("scenario")
@click.option("--set", "overrides", multiple=True, metavar="KEY.PATH=VALUE", help="Override a scenario value.")
@click.option("--cycles", type=click.IntRange(1), default=4, show_default=True, help="Let the state evolve so long.")
@click.option(
    "--timeout", type=click.FloatRange(1.0), default=300.0, show_default=True,
    help="Seconds that one probe, or one step over all tiles, may take.",
)  # fmt: skip
@click.option(
    "--profile", "folder", type=click.Path(path_type=Path), help="A recorded run, to name waits that would go."
)
@click.option("--json", "json_file", type=click.Path(path_type=Path), help="Write the figures there as JSON.")
def audit(
    scenario: str,
    overrides: tuple[str, ...],
    cycles: int,
    timeout: float,
    folder: Path | None,
    json_file: Path | None,
) -> int:
    """Run each step of SCENARIO alone and report what it reads, writes and keeps beside what it declares.

    Exit code 0 when every declaration holds, 1 when one does not, 2 when SCENARIO cannot be audited.
    """
    check_json(json_file)
    session = Session.load(scenario, overrides)
    profile = None
    if folder is not None:
        with reading(folder, ProfileError):
            profile = read_profile(folder)
    program = session.program
    parts = audit_program(
        program, cycles=cycles, timeout=timeout, progress=lambda part: click.echo(f"auditing: {part}", err=True)
    )
    for part in parts:
        part.findings = [with_cost(program, finding, profile) for finding in part.findings]
    hazards = inplace_hazards(program)
    for line in audit_lines(session.scenario.name, parts, hazards):
        click.echo(line)
    write_json(json_file, audit_figures(session.scenario.name, parts, hazards))
    return 1 if any(part.faults for part in parts) else 0
