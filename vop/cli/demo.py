"""``vop demo``: invented data, whole chain."""

from __future__ import annotations

from pathlib import Path

import click

from vop.cli import options
from vop.cli.progress import progress_on_terminal
from vop.cli.run import finish


@click.command(name="demo")
@options.path_argument("DIR")
@click.option("--write-only", is_flag=True, help="Write the data and JOB.toml, but do not run it.")
@options.force
def command(dir: Path, write_only: bool, force: bool) -> None:
    """Write the fields of an invented array around an invented body part to DIR, with a JOB.toml, and
    run it. The fields are computed from physics, but nothing about them is measured or real.

    \b
    Example:
      vop demo try-it
    """
    from vop.demo import write_demo

    with progress_on_terminal() as progress:
        job_file = write_demo(dir, force=force, progress=progress)
    click.echo(
        f"INVENTED DATA written to {dir}: computed, not measured; of no real body or device.", err=True
    )
    if not write_only:
        finish(job_file, force=force)
