"""``python -m vop`` is the command ``vop``."""

from vop.cli.main import run

run()
