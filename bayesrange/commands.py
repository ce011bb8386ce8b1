"""The command line: what the user types, and nothing else. Heavy imports wait until a command needs them."""

import io
import sys
from pathlib import Path
from typing import Annotated

import typer

from bayesrange._errors import StudyError

WRONG_INPUT, NOT_CONVERGED, INTERRUPTED = 2, 3, 130

app = typer.Typer(
    name="bayesrange", no_args_is_help=True, add_completion=False, pretty_exceptions_enable=False,
    help="Fit mechanistic range models to animal relocations and say, with intervals, how space use arises.",
)  # fmt: skip

StudyPath = Annotated[
    Path, typer.Argument(metavar="STUDY", help="Study file (TOML), or the folder that holds study.toml.")
]
RunPath = Annotated[Path, typer.Argument(metavar="RUN", help="Folder of a finished run.")]
Out = Annotated[
    Path | None, typer.Option("--out", metavar="FOLDER", help="Where to write; a finished run is never overwritten.")
]
Processes = Annotated[
    int | None, typer.Option("--processes", min=1, help="Chains that run at the same time; default one a processor.")
]


@app.command()
def demo(out: Out = None, processes: Processes = None) -> None:
    """Fit a bundled study, from raw files to report; no input needed."""
    from bayesrange import _demo, _screen

    study = _demo.copy_study(out)
    run = _screen.fit_and_report(study, out=None, again=False, processes=processes)
    _demo.compare_with_truth(run)
    _finish(run.converged)


@app.command()
def start(
    folder: Annotated[Path, typer.Argument(metavar="FOLDER", help="A folder that is new or empty.")],
    fixes: Annotated[
        list[Path] | None,
        typer.Option(
            "--fixes", metavar="FILE", help="Fill in columns, zone and CRS as found in this file; may be repeated."
        ),
    ] = None,
) -> None:
    """Write a commented study file and tables to fill in, from a file of fixes if there is one."""
    from bayesrange._start_files import write_start

    for line in write_start(folder, fixes or []):
        typer.echo(line)


@app.command()
def screen(
    study: StudyPath,
    out: Annotated[
        Path | None,
        typer.Option("--out", metavar="FOLDER", help="Where to write; default screening/ beside the study file."),
    ] = None,
) -> None:
    """Look at the data first: doubtful fixes, gaps, autocorrelation, settling, a map; nothing is changed."""
    from bayesrange._screen_data import screen_and_show

    screen_and_show(study, out)


@app.command()
def fit(
    study: StudyPath,
    out: Out = None,
    again: Annotated[bool, typer.Option("--again", help="Make a new run folder where a finished run stands.")] = False,
    processes: Processes = None,
    period: Annotated[
        str | None,
        typer.Option("--period", metavar="NAME", help="Fit this of the study's periods only; default all, one by one."),
    ] = None,
) -> None:
    """Sample the posterior and write the run folder with tables, maps and report; the same command resumes."""
    from bayesrange import _screen
    from bayesrange.inference import study_periods
    from bayesrange.study import read_study

    if period is None and study_periods(study):
        from bayesrange._screen_periods import fit_periods_and_report

        return _finish(fit_periods_and_report(study, out, again, processes))
    whole = study if period is None else read_study(study, period)
    run = _screen.fit_and_report(whole, out=out, again=again, processes=processes)
    _finish(run.converged)


@app.command()
def report(run: RunPath) -> None:
    """Write the tables of ranges, the maps and the report page of a run anew."""
    from bayesrange.inference import open_run
    from bayesrange.report import write

    typer.echo(f"Report: {write(open_run(run).folder)}")


@app.command()
def cards(
    name: Annotated[str | None, typer.Argument(metavar="[CARD]", help="Show one card in full.")] = None,
    study: Annotated[
        Path | None, typer.Option("--study", metavar="FOLDER", help="Also list cards in this study's folder.")
    ] = None,
    data: Annotated[
        Path | None, typer.Option("--for", metavar="STUDY", help="Say which cards this study's data can carry.")
    ] = None,
) -> None:
    """List the model cards: what each assumes and when to use it."""
    if data is not None:
        from bayesrange._screen_data import show_carried

        return show_carried(data, name)
    from bayesrange import _screen

    _screen.show_cards(name, study)


def _finish(converged: bool) -> None:
    if not converged:
        raise typer.Exit(NOT_CONVERGED)


def main(arguments: list[str] | None = None) -> int:
    """Run the command line.

    Args:
        arguments: words after the command's name; default those of the process.

    Returns:
        0 done; 2 the input is wrong; 3 done but not converged; 130 interrupted; 1 anything else. As a console script
        the process exits with it.
    """
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):  # a terminal without × or ² gets a ?, not a crash
            stream.reconfigure(errors="replace")
    try:
        status = app(args=arguments, standalone_mode=False)
    except StudyError as error:
        print(f"bayesrange: {error}", file=sys.stderr)
        return WRONG_INPUT
    except (KeyboardInterrupt, typer.Abort):  # typer itself turns an interrupt of a command into its status
        status = INTERRUPTED
    except Exception as error:
        return _unexpected(error)
    if status == INTERRUPTED:
        print("bayesrange: stopped; the same command goes on from here.", file=sys.stderr)
    return status if isinstance(status, int) else 0


def _unexpected(error: Exception) -> int:
    """Wrong words on the command line are the user's to mend (2); anything else is ours (1)."""
    usage = getattr(error, "exit_code", None)
    if usage is not None and hasattr(error, "format_message"):
        print(f"bayesrange: {error.format_message()}", file=sys.stderr)
        return int(usage)
    print(f"bayesrange: {type(error).__name__}: {error}", file=sys.stderr)
    return 1
