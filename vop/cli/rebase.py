"""``vop rebase``: the same body and array under other excitations."""

from __future__ import annotations

from pathlib import Path

import click

from vop.cli import options
from vop.cli.progress import progress_on_terminal
from vop.sarmodel import SarModel


@click.command(name="rebase")
@options.path_argument("MODEL")
@options.output("rebased.h5")
@click.option(
    "--touchstone", type=click.Path(path_type=Path), help="S-matrix of all ports, for --match and --close."
)
@click.option("--match", is_flag=True, help="Match every port by a lossless L-section, by calculation.")
@click.option(
    "--close",
    "closed",
    multiple=True,
    metavar="PORT=OHM",
    help="Close a port (numbered from 1) with an impedance such as 50, 10+3j, inf; may be repeated.",
)
@click.option(
    "--accuracy", type=float, help="Bound on the spectral norm of the error of S; carried as an interval."
)
@click.option(
    "--transform", type=click.Path(path_type=Path), help="NPY file with T (n × m): w_old = T w_new."
)
@click.option("--names", help="Names of the new channels, with commas; for --transform.")
@click.option("--reason", help="Why, for the record; for --transform.")
@options.force
def command(
    model: Path,
    output: Path,
    touchstone: Path | None,
    match: bool,
    closed: tuple[str, ...],
    accuracy: float | None,
    transform: Path | None,
    names: str | None,
    reason: str | None,
    force: bool,
) -> None:
    """Change what an excitation of MODEL is: match its ports or close some of them by calculation, or
    apply any matrix T. Local and global matrices become TᴴQT, rounded outward.

    \b
    Example:
      vop rebase model.h5 --touchstone array.s8p --match --accuracy 1e-3 -o matched.h5
      vop rebase model.h5 --touchstone array.s8p --close 3=50 --close 7=inf -o six.h5
      vop rebase model.h5 --transform T.npy --names A,B --reason "two amplifiers" -o two.h5
    """
    from vop.rebase import rebase_by_matrix, rebase_by_network
    from vop.storage import refuse_existing
    from vop.summary import model_lines

    refuse_existing(output, force)
    loaded = SarModel.load(model)
    with progress_on_terminal() as progress:
        if transform is not None:
            if touchstone or match or closed:
                raise click.UsageError("--transform stands alone: without --touchstone, --match, --close")
            made, lines = rebase_by_matrix(loaded, transform, names, reason, progress=progress)
        elif touchstone is not None:
            made, lines = rebase_by_network(
                loaded, touchstone, match=match, closed=closed, accuracy=accuracy, progress=progress
            )
        else:
            raise click.UsageError("say what to do: --transform, or --touchstone with --match or --close")
        made.save(output, force)
    click.echo("\n".join([*lines, *model_lines(made)]))
    click.echo(f"written to {output}")
