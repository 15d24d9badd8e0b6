"""The command line.  Light to start: a command loads only what it needs."""

from __future__ import annotations

import json
import os
import sys
from collections.abc import Sequence

import click

from meseta import __version__
from meseta.command import jobs, tools
from meseta.command.compare import compare
from meseta.errors import CallError, Cancelled, MesetaError

__all__ = ["main"]


def main(arguments: Sequence[str] | None = None) -> None:
    """Run the command line and leave with its exit code; no traceback ever reaches the user."""
    sys.exit(_outcome(list(sys.argv[1:] if arguments is None else arguments)))


def _outcome(arguments: list[str]) -> int:
    as_json = "--json" in arguments
    try:
        code = cli.main(arguments, prog_name="meseta", standalone_mode=False)
    except MesetaError as error:
        return _complain(error, as_json)
    except click.UsageError as error:
        name = error.ctx.command_path if error.ctx else "meseta"
        return _complain(CallError(error.format_message(), "", f"see {name} --help"), as_json)
    except (KeyboardInterrupt, click.Abort):
        return _complain(Cancelled(), as_json)
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), 1)  # the reader has gone; there is nobody to tell
        return 0
    except (OSError, MemoryError) as error:
        return _complain(
            MesetaError(
                f"{error.strerror or error}" if isinstance(error, OSError) else "out of memory",
                str(getattr(error, "filename", "") or ""),
            ),
            as_json,
        )
    except Exception as error:
        if os.environ.get("MESETA_DETAILS"):
            raise
        fault = MesetaError(
            f"a fault of Meseta itself ({type(error).__name__}: {error})",
            "",
            "run again with MESETA_DETAILS=1 set and report what it prints",
        )
        return _complain(fault, as_json)
    return code if isinstance(code, int) else 0


def _complain(error: MesetaError, as_json: bool) -> int:
    click.echo(f"meseta: {error}", err=True)
    if as_json:
        told = {"what": error.what, "where": error.where, "remedy": error.remedy, "exit": error.exit_code}
        click.echo(json.dumps({"error": told}))
    return error.exit_code


@click.group(invoke_without_command=True, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="meseta", message="%(prog)s %(version)s")
@click.pass_context
def cli(context: click.Context) -> None:
    """Conductance traces of atomic contacts and single-molecule junctions: from raw recordings to fitted peaks.

    Without a command the window opens.
    """
    if context.invoked_subcommand is None:
        context.invoke(jobs.window)


for _command in (
    jobs.window,
    jobs.peek,
    jobs.run,
    jobs.gather,
    jobs.recipe,
    tools.example,
    tools.expect,
    tools.sheet,
    tools.simulate,
    tools.decay,
    compare,
):
    cli.add_command(_command)
