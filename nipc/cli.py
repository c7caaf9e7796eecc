"""nipc on the command line. Heavy imports wait until a command needs them."""

from __future__ import annotations

import json
import os
import shlex
import sys
from io import TextIOWrapper
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from nipc.errors import InputError, NipcError, RunsError
from nipc.starter import Flavour

if TYPE_CHECKING:
    from nipc.runs.progress import Progress

app = typer.Typer(
    no_args_is_help=True,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 80},
    help="Tell how noise and an uncertain start spread a motion, by running your own propagator "
    "as a black box.\n\nBegin with `nipc new FOLDER`, then go on in this order: check, plan, "
    "probe, run.",
)

StudyFile = Annotated[
    Path, typer.Argument(metavar="STUDY", help="The study file, as study.toml.", show_default=False)
]
AsJson = Annotated[bool, typer.Option("--json", help="Print JSON, for scripts.")]
Jobs = Annotated[
    int, typer.Option("--jobs", "-j", help="How many runs at a time; -1: one a processor.")
]
Quiet = Annotated[bool, typer.Option("--quiet", "-q", help="Print errors only.")]


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


@app.command()
def check(study: StudyFile, as_json: AsJson = False) -> None:
    """Look a study over: what is in it, or all that is wrong, by line.

    Neither your propagator nor any other code of yours is run.
    """
    from nipc.terminal import console, show_study
    from nipc.workflow import load_study

    loaded = load_study(study)
    if as_json:
        print(json.dumps({"file": str(study), "ok": True, "title": loaded.title}))
        return
    show_study(console(), loaded)
    print("\nNothing is wrong.")
    _next(f"nipc plan {_quoted(study)}")


@app.command()
def plan(study: StudyFile, as_json: AsJson = False) -> None:
    """Tell how many runs a study will take, before any is made.

    Also what each noise basis would lose at the chosen number of terms.
    Neither your propagator nor any other code of yours is run.
    """
    from nipc.terminal import console, show_plan
    from nipc.workflow import load_study
    from nipc.workflow import plan as make_plan

    made = make_plan(load_study(study))
    if as_json:
        print(json.dumps(made.as_dict()))
        return
    show_plan(console(), made)
    print()
    file = _quoted(study)
    _next(f"nipc probe {file}", f"nipc run {file} --jobs {os.cpu_count() or 1}")


@app.command()
def probe(study: StudyFile, as_json: AsJson = False) -> None:
    """Try your propagator with a handful of runs before a night of them.

    Tells the time of a run, whether it gives the same twice, whether the
    noise is felt, whether a restart from the middle goes on as an undisturbed
    run does, and how many digits its output carries. This runs the program
    that the study names. The exit code is 1 when something needs a look.
    """
    from dataclasses import asdict

    from nipc.terminal import console, show_probe
    from nipc.workflow import load_study
    from nipc.workflow import probe as make_probe

    found = make_probe(load_study(study))
    if as_json:
        print(json.dumps({"good": found.good, **asdict(found)}))
    else:
        show_probe(console(), found)
        print()
        if found.good:
            _next(f"nipc run {_quoted(study)}")
        else:
            print("Look at these before running.")
    if not found.good:
        raise typer.Exit(1)


@app.command()
def run(
    study: StudyFile,
    jobs: Jobs = 1,
    quiet: Quiet = False,
    as_json: AsJson = False,
    page: Annotated[bool, typer.Option(help="Write the page as well.")] = True,
) -> None:
    """Run a study: the program it names is run, and a page and data are written.

    They go to a folder beside the study, study.work for study.toml.
    Every finished run is kept there: stop with Ctrl-C, start again, and it
    goes on where it was.
    """
    from nipc.terminal import console, show_result
    from nipc.workflow import load_study, write_report
    from nipc.workflow import run as run_study

    if jobs == 0:
        raise InputError("--jobs 0: give 1 or more, or -1 for one a processor")
    loaded = load_study(study)
    try:
        result = run_study(loaded, n_jobs=jobs, progress=_progress(quiet or as_json))
    except RunsError as error:
        remedy = f"Mend it and start again; all reasons so far: nipc status {_quoted(study)}"
        raise RunsError(f"{error}\n{remedy}") from error
    written = write_report(result) if page else None
    if as_json:
        print(json.dumps(result.summary))
    elif not quiet:
        show_result(console(), result, written, _quoted(study))
        figures = f"nipc report {_quoted(study)} --figures"
        _next(*["open the page in a browser"] * page, f"{figures}  # as files")


@app.command()
def report(
    study: StudyFile,
    figures: Annotated[
        bool, typer.Option("--figures", help="Write each figure as PNG, SVG and PDF as well.")
    ] = False,
) -> None:
    """Write the page again from the results that are kept; nothing is run."""
    from nipc.answers.result import load_result
    from nipc.workflow import load_study, work_folder
    from nipc.workflow import write_report as write

    folder = work_folder(load_study(study))
    page = write(load_result(folder), figures=figures)
    print(f"page     {page}")
    if figures:
        print(f"figures  {folder / 'figures'}")


@app.command()
def status(study: StudyFile, as_json: AsJson = False) -> None:
    """Tell how far a study is: runs done, failed and missing.

    Also from another terminal, while the runs go on.
    """
    from dataclasses import asdict

    from nipc.runs.status import status
    from nipc.workflow import load_study, work_folder

    folder = work_folder(load_study(study))
    if not folder.is_dir():
        raise InputError(
            f"{folder} is not there yet: nothing of this study has been run. Next: nipc run {study}"
        )
    found = status(folder)
    print(json.dumps(asdict(found)) if as_json else str(found))


@app.command()
def new(
    folder: Annotated[
        Path, typer.Argument(metavar="FOLDER", help="A new folder.", show_default=False)
    ],
    flavour: Annotated[
        Flavour,
        typer.Option(
            help="What your propagator is: a Python function that integrates by itself, the "
            "right-hand side of an ODE, or a program that reads and writes files."
        ),
    ] = Flavour.FUNCTION,
) -> None:
    """Write a commented study and a small propagator, to change into yours.

    They run as they are.
    """
    from nipc.starter import write_starter

    study = write_starter(folder, flavour)
    print(f"Written to {folder}: {', '.join(sorted(p.name for p in folder.iterdir()))}")
    _next(f"nipc check {_quoted(study)}", f"nipc run {_quoted(study)}")


def _next(*steps: str) -> None:
    """What comes next, a line each: only a path can make one long, and each can be copied."""
    for head, step in zip(("Next:", *[""] * len(steps)), steps, strict=False):
        print(f"{head:5} {step}")


def _quoted(path: Path) -> str:
    """The path as a shell takes it, blanks and all."""
    return shlex.quote(str(path))


def _progress(quiet: bool) -> Progress:
    from nipc.runs.progress import Silent, suited

    return Silent() if quiet else suited()


def main() -> None:
    """The entry point: a user's mistake ends with a message and exit code 2, never a traceback."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, TextIOWrapper):
            stream.reconfigure(errors="replace")  # a terminal that cannot show a letter
    try:
        sys.exit(app(prog_name="nipc", standalone_mode=False) or 0)
    except NipcError as error:
        print(f"nipc: {error}", file=sys.stderr)
        sys.exit(error.exit_code)
    except typer.Exit as left:
        sys.exit(left.exit_code)
    except (KeyboardInterrupt, typer.Abort):
        print(
            "nipc: stopped; what is finished is kept, and the same command goes on from there",
            file=sys.stderr,
        )
        sys.exit(130)
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
