"""The command ``vop``: finds the subcommand, turns errors into one line and an exit code.

Exit codes: 0 done (and proved, where proof was asked); 1 the set is not proved; 2 the command or
its input is wrong, or a result cannot be written; 3 a fault of the tool itself; 130 interrupted.
"""

from __future__ import annotations

import importlib
import logging
import sys

import click

from vop import __version__
from vop.errors import VopError

EXIT_NOT_PROVED = 1
EXIT_INPUT = 2
EXIT_BUG = 3
EXIT_INTERRUPTED = 130

_COMMANDS = {
    "run": "The whole chain from one job file: model, set, proof, exports, summary.",
    "demo": "Write an invented array around an invented body part, and run it.",
    "inspect": "Say what an export holds, how it is read, and whether its power adds up.",
    "model": "Local SAR matrices from an export.",
    "rebase": "The same model under other excitations: matched or closed ports, any matrix.",
    "compress": "A set of VOPs from a model.",
    "prove": "Prove that a set is safe for a model, and no more conservative than its bound.",
    "attack": "Search for excitations that break a set.",
    "export": "Hand-off file from a set.",
    "plugins": "List readers and exporters.",
}


class _Lazy(click.Group):
    """Imports a command's module only when it is called, so that --help is quick."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(_COMMANDS)

    def get_command(self, ctx: click.Context, name: str) -> click.Command | None:
        if name not in _COMMANDS:
            return None
        command: click.Command = importlib.import_module(f"vop.cli.{name}").command
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl(list(_COMMANDS.items()))


@click.group(cls=_Lazy, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(__version__, prog_name="vop")
@click.option("-v", "--verbose", count=True, help="Log what is done; twice for details and tracebacks.")
def main(verbose: int) -> None:
    """From the simulated fields of a parallel-transmit MRI array to a small, provably safe set of
    virtual observation points (VOPs).

    \b
    Example:
      vop demo try-it          (invented data, whole chain)
      vop run JOB.toml         (your data)

    Results need review by qualified people; local rules and licensed practice decide.
    """
    level = [logging.WARNING, logging.INFO, logging.DEBUG][min(verbose, 2)]
    logging.basicConfig(level=level, stream=sys.stderr, format="vop: %(message)s")
    # Debug messages of compilers and plotting libraries are not ours to show.
    for library in ("numba", "h5py", "matplotlib"):
        logging.getLogger(library).setLevel(logging.WARNING)


def run() -> None:
    """Entry point of the console command."""
    try:
        code = main(standalone_mode=False)
    except click.exceptions.Exit as stop:
        code = stop.exit_code
    except click.ClickException as error:
        error.show()
        code = EXIT_INPUT
    except (click.Abort, KeyboardInterrupt):
        _say("interrupted; no unfinished file was kept")
        code = EXIT_INTERRUPTED
    except VopError as error:
        _say(str(error))
        code = EXIT_INPUT
    except BrokenPipeError:
        # The reader of a pipe had enough; silence the flush at exit as well.
        sys.stdout = open(1, "w", closefd=False)  # noqa: SIM115
        code = 0
    except MemoryError:
        _say("out of memory; nothing was left half written")
        code = EXIT_BUG
    except Exception as error:  # anything else is a bug, and still one line
        if logging.getLogger().isEnabledFor(logging.DEBUG):
            logging.exception("traceback")
        _say(f"internal error, please report: {type(error).__name__}: {error} (vop -vv … shows where)")
        code = EXIT_BUG
    sys.exit(code if isinstance(code, int) else 0)


def _say(text: str) -> None:
    click.echo(f"vop: {' '.join(text.split())}", err=True)
