"""nipc on the command line. Heavy imports wait until a command needs them."""

from __future__ import annotations

import os
import signal
import sys
import threading
from io import TextIOWrapper
from typing import Annotated

import typer

from nipc.commands.allowance import allowance
from nipc.commands.check import check
from nipc.commands.export import export
from nipc.commands.new import new
from nipc.commands.plan import plan
from nipc.commands.probe import probe
from nipc.commands.report import report
from nipc.commands.run import run
from nipc.commands.schema import schema
from nipc.commands.status import status
from nipc.commands.sweep import sweep
from nipc.commands.take_in import take_in
from nipc.commands.whatif import whatif
from nipc.errors import Interrupted, NipcError

app = typer.Typer(
    no_args_is_help=True,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 80},
    help="Tell how noise and an uncertain start spread a motion, by running your own propagator "
    "as a black box.\n\nBegin with `nipc new FOLDER`, then go on in this order: check, plan, "
    "probe, run.",
)


def _version(asked: bool) -> None:
    if asked:
        from nipc import __version__

        print(f"nipc {__version__}")
        raise typer.Exit


@app.callback()
def _options(
    version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Print the version.")
    ] = False,
) -> None:
    pass


# in the order in which they are used; their names are their functions' unless told
for _command in (
    new, check, plan, probe, run, status, report, whatif, sweep, allowance,
    schema, export,
):  # fmt: skip
    app.command()(_command)
app.command("import")(take_in)  # "import" is a word of Python's


def _on_sigterm() -> list[int]:
    """Batch queues end a job with SIGTERM: stop as on Ctrl-C; the list tells which it was."""
    ended: list[int] = []

    def stop(number: int, frame: object) -> None:
        ended.append(number)
        raise KeyboardInterrupt

    if threading.current_thread() is threading.main_thread():
        signal.signal(signal.SIGTERM, stop)
    return ended


def main() -> None:
    """The entry point: a user's mistake ends with a message and exit code 2, never a traceback."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, TextIOWrapper):
            stream.reconfigure(errors="replace")  # a terminal that cannot show a letter
    ended = _on_sigterm()
    try:
        sys.exit(app(prog_name="nipc", standalone_mode=False) or 0)
    except NipcError as error:
        print(f"nipc: {error}", file=sys.stderr)
        sys.exit(143 if ended and isinstance(error, Interrupted) else error.exit_code)
    except typer.Exit as left:
        sys.exit(left.exit_code)
    except (KeyboardInterrupt, typer.Abort):
        print(
            "nipc: stopped; what is finished is kept, and the same command goes on from there",
            file=sys.stderr,
        )
        sys.exit(143 if ended else 130)
    except BrokenPipeError:
        # whoever read the output has read enough; nothing more can be flushed to it
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        sys.exit(1)
    except Exception as error:
        show = getattr(error, "show", None)  # a wrong option or command: the parser explains it
        if show is None:
            raise
        show()
        sys.exit(2)
