"""``vop run``: the whole chain from one job file."""

from __future__ import annotations

from pathlib import Path

import click

from vop.cli import options
from vop.cli.main import EXIT_NOT_PROVED
from vop.cli.progress import progress_on_terminal
from vop.job import load_job


@click.command(name="run")
@options.path_argument("JOB.toml")
@options.force
def command(force: bool, **path: Path) -> None:
    """Do what JOB.toml says, and leave model, set, proof, hand-off files and a plain-text summary in
    its output folder. Finished steps are reused where their inputs have not changed.

    \b
    Example:
      vop run JOB.toml
    \b
    A job file:
      [input]
      path = "export"            # what the simulator wrote, relative to this file
      phasor = "peak"            # or "rms"; needed unless the export states it
      time_sign = "+"            # exp(+jωt), or "-"
      [domain]
      coil = "my array"
      b0_direction = "+z"
      [model]
      average_mass_kg = 0.010
      [compress]
      overestimation = 0.05
      method = "clustering-free"
      [export]
      formats = ["hdf5", "mat5"]
      [output]
      folder = "result"
    """
    finish(*path.values(), force=force)


def finish(job_file: Path, *, force: bool) -> None:
    """Run a job and print its summary; exit code 1 where the set is not proved."""
    from vop.chain import run_job

    job = load_job(job_file)
    with progress_on_terminal() as progress:
        result = run_job(job, force=force, progress=progress)
    click.echo(result.summary, nl=False)
    if result.reused:
        click.echo(f"reused, inputs unchanged: {', '.join(result.reused)}", err=True)
    click.echo(f"everything is in {result.folder}", err=True)
    if not result.holds:
        raise click.exceptions.Exit(EXIT_NOT_PROVED)
