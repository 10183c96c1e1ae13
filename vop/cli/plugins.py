"""``vop plugins``: list readers and exporters."""

from __future__ import annotations

import click

from vop.plugins import EXPORTERS, READERS, installed, reader_options


@click.command(name="plugins")
def command() -> None:
    """List the installed readers and exporters, and say which of them do not load.

    \b
    Example:
      vop plugins
    """
    for group, title in ((READERS, "Readers"), (EXPORTERS, "Exporters")):
        click.echo(title)
        for plugin in installed(group):
            if plugin.fault is not None:
                click.echo(f"  {plugin.name:<16} does not load ({plugin.package}): {plugin.fault}")
                continue
            click.echo(f"  {plugin.name:<16} {plugin.target.description} [{plugin.package}]")
            if group == READERS:
                options = ", ".join(reader_options(plugin.target))
                click.echo(f"  {'':<16} options: {options}")
        click.echo()
