"""``vop prove``: both bounds, proved in floating point."""

from __future__ import annotations

from pathlib import Path

import click

from vop.cli import options
from vop.cli.main import EXIT_NOT_PROVED
from vop.cli.progress import progress_on_terminal
from vop.sarmodel import SarModel
from vop.vopset import VopSet


@click.command(name="prove")
@options.path_argument("SET")
@options.path_argument("MODEL")
@click.option(
    "--certificate",
    type=click.Path(path_type=Path),
    help="Store the weights, so that anyone can recheck in one pass.",
)
@click.option(
    "--from-certificate",
    type=click.Path(path_type=Path),
    help="Recheck stored weights instead of searching for new ones.",
)
@options.force
def command(
    set: Path, model: Path, certificate: Path | None, from_certificate: Path | None, force: bool
) -> None:
    """Prove that SET never underestimates local SAR of MODEL for any excitation, and overestimates
    by no more than its bound. Exit code 0: proved; 1: not proved.

    \b
    Example:
      vop prove set.h5 model.h5 --certificate proof.h5
      vop prove set.h5 model.h5 --from-certificate proof.h5
    """
    from vop.proof import prove, recheck
    from vop.storage import refuse_existing

    if certificate is not None and from_certificate is not None:
        raise click.UsageError("--certificate and --from-certificate exclude each other")
    if certificate is not None:
        refuse_existing(certificate, force)
    vop_set, loaded = VopSet.load(set), SarModel.load(model)
    with progress_on_terminal() as progress:
        if from_certificate is not None:
            result = recheck(vop_set, loaded, from_certificate, progress=progress)
        else:
            result = prove(vop_set, loaded, certificate_path=certificate, force=force, progress=progress)
    click.echo(result.summary())
    if not result.holds:
        raise click.exceptions.Exit(EXIT_NOT_PROVED)
