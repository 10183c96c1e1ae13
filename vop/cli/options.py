"""Options and arguments that several commands share, spelled once."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar

import click

F = TypeVar("F", bound=Callable[..., Any])

_FILE = click.Path(path_type=Path)

force = click.option("--force", is_flag=True, help="Replace an output that exists.")


def output(default: str) -> Callable[[F], F]:
    """``-o/--output FILE``."""
    return click.option(
        "-o", "--output", type=_FILE, default=Path(default), show_default=True, help="File to write."
    )


def path_argument(name: str) -> Callable[[F], F]:
    """A positional path; existence is checked where it is opened, with a better message."""
    return click.argument(name.lower(), metavar=name, type=_FILE)


def reading(command: F) -> F:
    """Options of everything that opens an export."""
    for option in reversed(
        (
            click.option("--reader", help="Reader plugin; by default the one that recognises the path."),
            click.option("--phasor", help="'peak' or 'rms': what |E| in the export is."),
            click.option("--time-sign", help="'+' for exp(+jωt), '-' for exp(−jωt)."),
            click.option(
                "--reference",
                help="What |w|² is: 'forward power', 'accepted power', 'port voltage', 'port current'.",
            ),
            click.option(
                "--reader-option",
                "reader_options",
                multiple=True,
                metavar="NAME=VALUE",
                help="Further option of the reader; may be repeated.",
            ),
        )
    ):
        command = option(command)
    return command


def overestimation(command: F) -> F:
    """Options of everything that compresses."""
    for option in reversed(
        (
            click.option(
                "--overestimation",
                type=float,
                default=0.05,
                show_default=True,
                help="Bound ε as a fraction of worst-case local SAR.",
            ),
            click.option(
                "--method", default="clustering", show_default=True, help="'clustering' or 'clustering-free'."
            ),
        )
    ):
        command = option(command)
    return command


def gather(
    phasor: str | None, time_sign: str | None, reference: str | None, reader_options: tuple[str, ...]
) -> dict[str, Any]:
    """Keyword options for :func:`vop.open_fields` from those of :func:`reading`."""
    options: dict[str, Any] = {
        k: v for k, v in (("phasor", phasor), ("time_sign", time_sign), ("reference", reference)) if v
    }
    for text in reader_options:
        name, separator, value = text.partition("=")
        if not separator:
            raise click.BadParameter(f"{text!r} should be NAME=VALUE", param_hint="--reader-option")
        options[name] = value
    return options
