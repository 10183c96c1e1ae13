"""``vop inspect``: what an export holds and how it is read."""

from __future__ import annotations

from pathlib import Path

import click

from vop.cli import options
from vop.plugins import open_fields


@click.command(name="inspect")
@options.path_argument("PATH")
@options.reading
def command(
    path: Path,
    reader: str | None,
    phasor: str | None,
    time_sign: str | None,
    reference: str | None,
    reader_options: tuple[str, ...],
) -> None:
    """Say what an export, a model or a set holds; for an export also whether its power adds up.

    \b
    Example:
      vop inspect export/ --phasor peak --time-sign +
      vop inspect set.h5
    """
    from vop.summary import inspect_file, inspect_source

    lines = inspect_file(path) if path.is_file() else None
    if lines is None:
        given = options.gather(phasor, time_sign, reference, reader_options)
        lines = inspect_source(open_fields(path, reader, **given))
    click.echo("\n".join(lines))
