"""``vop export``: hand-off file from a set."""

from __future__ import annotations

from pathlib import Path

import click

from vop.cli import options
from vop.handoff import export
from vop.storage import file_digest
from vop.vopset import VopSet


@click.command(name="export")
@options.path_argument("SET")
@options.path_argument("OUTPUT")
@click.option(
    "--format", "format_", default="hdf5", show_default=True, help="Exporter plugin (see 'vop plugins')."
)
@options.force
def command(set: Path, output: Path, format_: str, force: bool) -> None:
    """Write the delivered VOPs of SET to OUTPUT. What is written is read back and compared to the
    last bit before it gets its name; whether the set is proved is the business of 'vop prove'.

    \b
    Example:
      vop export set.h5 vops.mat --format mat5
    """
    vop_set = VopSet.load(set)
    export(vop_set, output, format_, force=force)
    click.echo(
        f"{output}: {len(vop_set)} VOPs, {vop_set.n_channels} channels, "
        f"{output.stat().st_size} bytes, SHA-256 {file_digest(output)}"
    )
