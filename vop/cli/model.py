"""``vop model``: local SAR matrices from an export."""

from __future__ import annotations

from pathlib import Path

import click

from vop.cli import options
from vop.cli.progress import progress_on_terminal
from vop.plugins import open_fields


@click.command(name="model")
@options.path_argument("EXPORT")
@options.output("model.h5")
@click.option(
    "--average-mass",
    "average_mass_g",
    type=float,
    default=10.0,
    show_default=True,
    help="Averaging mass in grams; 0 for point matrices.",
)
@click.option(
    "--regions", type=click.Path(path_type=Path), help="TOML file: head, trunk, extremity, excluded."
)
@click.option(
    "--limits", help="'normal', 'first level', or a TOML table: hold matrices as fractions of limits."
)
@options.reading
@options.force
def command(
    export: Path,
    output: Path,
    average_mass_g: float,
    reader: str | None,
    phasor: str | None,
    time_sign: str | None,
    reference: str | None,
    reader_options: tuple[str, ...],
    regions: Path | None,
    limits: str | None,
    force: bool,
) -> None:
    """Read EXPORT and write the matrices of its local SAR, averaged over cubes of tissue.

    \b
    Example:
      vop model export/ --phasor peak --time-sign + -o model.h5
      vop model export/ --regions regions.toml --limits "first level" -o fractions.h5
    """
    from vop.build import build_sar_model
    from vop.limits import load_limits
    from vop.regions import load_regions
    from vop.storage import refuse_existing
    from vop.summary import model_lines

    refuse_existing(output, force)
    source = open_fields(export, reader, **options.gather(phasor, time_sign, reference, reader_options))
    with progress_on_terminal() as progress:
        model = build_sar_model(
            source,
            average_mass_g / 1000 or None,
            regions=load_regions(regions, source.grid, source.tissue) if regions else None,
            limits=load_limits(limits) if limits else None,
            path=output,
            force=force,
            progress=progress,
        )
    click.echo("\n".join(model_lines(model)))
    click.echo(f"written to {output}")
