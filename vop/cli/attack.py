"""``vop attack``: search for excitations that break a set."""

from __future__ import annotations

from pathlib import Path

import click

from vop.cli import options
from vop.cli.main import EXIT_NOT_PROVED
from vop.cli.progress import progress_on_terminal
from vop.sarmodel import SarModel
from vop.vopset import VopSet


@click.command(name="attack")
@options.path_argument("SET")
@options.path_argument("MODEL")
@click.option(
    "--excitations", type=click.IntRange(1), default=1_000_000, show_default=True, help="How many to try."
)
@click.option("--seed", type=int, default=0, show_default=True, help="Of the random excitations.")
def command(set: Path, model: Path, excitations: int, seed: int) -> None:
    """Search for excitations whose local SAR in MODEL exceeds what SET says. Finding none proves
    nothing ('vop prove' does); finding one disproves. Exit code 1 where one was found.

    \b
    Example:
      vop attack set.h5 model.h5 --excitations 10000000
    """
    from vop.attack import attack

    vop_set, loaded = VopSet.load(set), SarModel.load(model)
    with progress_on_terminal() as progress:
        result = attack(vop_set, loaded, n_excitations=excitations, seed=seed, progress=progress)
    click.echo(result.summary())
    if result.broken:
        raise click.exceptions.Exit(EXIT_NOT_PROVED)
