"""nipc on the command line. Heavy imports wait until a command needs them."""

from __future__ import annotations

import json
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from nipc.errors import InputError, NipcError

if TYPE_CHECKING:
    from nipc.runs.progress import Progress

app = typer.Typer(
    no_args_is_help=True,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 80},
    help="Noise and uncertain starts pushed through a propagator that stays a black box. "
    "Begin with `nipc new FOLDER`; then check, plan, run.",
)

StudyFile = Annotated[Path, typer.Argument(metavar="STUDY", help="The study file (TOML).")]
AsJson = Annotated[bool, typer.Option("--json", help="Print JSON, for scripts.")]
Jobs = Annotated[int, typer.Option("--jobs", "-j", help="Runs at a time; -1 for all processors.")]
Quiet = Annotated[bool, typer.Option("--quiet", "-q", help="Say nothing but errors.")]


@app.command()
def check(study: StudyFile, as_json: AsJson = False) -> None:
    """Say all that is wrong with a study, by line. Nothing of yours is run."""
    from nipc.terminal import console, show_study
    from nipc.workflow import load_study

    loaded = load_study(study)
    if as_json:
        print(json.dumps({"file": str(study), "ok": True, "title": loaded.title}))
        return
    show_study(console(), loaded)
    print(f"{study}: nothing is wrong. Next: nipc plan {study}")


@app.command()
def plan(study: StudyFile, as_json: AsJson = False) -> None:
    """Tell what a study will cost and what each noise basis would lose, without running it."""
    from nipc.terminal import console, show_plan
    from nipc.workflow import load_study
    from nipc.workflow import plan as make_plan

    loaded = load_study(study)
    made = make_plan(loaded)
    if as_json:
        print(json.dumps(made.as_dict()))
        return
    show_plan(console(), made, loaded.clock.unit)
    print(f"Next: nipc run {study}")


@app.command()
def run(
    study: StudyFile,
    jobs: Jobs = 1,
    quiet: Quiet = False,
    as_json: AsJson = False,
    page: Annotated[bool, typer.Option(help="Write the page too.")] = True,
) -> None:
    """Run a study: the propagator's runs, the expansions, the check, the answers, the page.

    Every finished run is kept: stop with Ctrl-C and start again, it goes on where it was.
    """
    from nipc.terminal import console, show_result
    from nipc.workflow import load_study, report
    from nipc.workflow import run as run_study

    loaded = load_study(study)
    result = run_study(loaded, n_jobs=jobs, progress=_progress(quiet or as_json))
    written = str(report(result)) if page else None
    if as_json:
        print(json.dumps(result.summary))
    elif not quiet:
        show_result(console(), result, written)


@app.command()
def report(
    study: StudyFile,
    figures: Annotated[
        bool, typer.Option("--figures", help="Also write each figure as PNG, SVG and PDF.")
    ] = False,
) -> None:
    """Write the page again from the kept results, and the figures as files."""
    from nipc.answers.result import load_result
    from nipc.workflow import load_study, work_folder
    from nipc.workflow import report as write

    folder = work_folder(load_study(study))
    page = write(load_result(folder), figures=figures)
    print(f"page     {page}")
    if figures:
        print(f"figures  {folder / 'figures'}")


@app.command()
def status(study: StudyFile, as_json: AsJson = False) -> None:
    """Tell how far a study is: runs done, failed and missing, also while it goes on elsewhere."""
    from dataclasses import asdict

    from nipc.runs.status import status
    from nipc.workflow import load_study, work_folder

    folder = work_folder(load_study(study))
    if not folder.is_dir():
        raise InputError(f"{folder} is not there yet: nothing of this study has been run")
    found = status(folder)
    print(json.dumps(asdict(found)) if as_json else str(found))


@app.command()
def new(
    folder: Annotated[Path, typer.Argument(help="A folder that is not there yet.")],
    flavour: Annotated[
        str, typer.Option(help="How the propagator is made: function or ode.")
    ] = "function",
) -> None:
    """Write a commented study and a small propagator that run as they are."""
    from nipc.starter import write_starter

    study = write_starter(folder, flavour)
    print(f"{study} is written. Next:")
    print(f"  nipc check {study}")
    print(f"  nipc run {study}")


def _progress(quiet: bool) -> Progress:
    from nipc.runs.progress import Silent, suited

    return Silent() if quiet else suited()


def main() -> None:
    """The entry point: a user's mistake ends with a message and exit code 2, never a traceback."""
    try:
        app(standalone_mode=False)
    except NipcError as error:
        print(f"nipc: {error}", file=sys.stderr)
        sys.exit(error.exit_code)
    except KeyboardInterrupt:
        print("nipc: stopped; what is finished is kept, start again to go on", file=sys.stderr)
        sys.exit(130)
    except typer.Exit as done:
        sys.exit(done.exit_code)
    except typer.Abort:
        sys.exit(130)
    except Exception as error:
        show = getattr(error, "show", None)
        if show is None:
            raise
        show()
        sys.exit(2)
