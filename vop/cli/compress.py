"""``vop compress``: a set of VOPs from a model."""

from __future__ import annotations

from pathlib import Path

import click

from vop.cli import options
from vop.cli.progress import progress_on_terminal
from vop.sarmodel import SarModel


@click.command(name="compress")
@options.path_argument("MODEL")
@options.output("set.h5")
@options.overestimation
@options.force
def command(model: Path, output: Path, overestimation: float, method: str, force: bool) -> None:
    """Reduce the local matrices of MODEL to VOPs that never underestimate local SAR.

    \b
    Example:
      vop compress model.h5 --overestimation 0.05 --method clustering-free -o set.h5
    """
    from vop.compression import compress
    from vop.storage import refuse_existing

    refuse_existing(output, force)
    loaded = SarModel.load(model)
    with progress_on_terminal() as progress:
        vop_set = compress(loaded, overestimation, method, progress=progress)
        vop_set.save(output, force)
    click.echo(
        f"{output}: {len(vop_set)} VOPs from {len(loaded)} matrices, {vop_set.n_channels} channels; "
        f"overestimation at most {100 * vop_set.overestimation:g} % of worst-case local SAR "
        f"{vop_set.worst_case:.6g} {vop_set.metadata.matrix_unit}; not proved yet: vop prove"
    )
