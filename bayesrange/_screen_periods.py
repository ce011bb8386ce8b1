"""What `fit` prints of a study with periods: each period's fit, then what lies between them."""

from pathlib import Path

from rich.console import Console
from rich.markup import escape
from rich.table import Table

from bayesrange._screen import fit_and_report, number
from bayesrange.inference import Differences, PeriodFit, Run

MOST_ROWS = 40


def fit_periods_and_report(study: Path, out: Path | None, again: bool, processes: int | None) -> bool:
    """Fit every period of a study, report each, then what lies between them.

    Returns:
        Whether every run converged.

    Raises:
        StudyError: the input is wrong.
    """
    from bayesrange.inference import plan_periods
    from bayesrange.report import check_differences_folder, write_differences

    console = Console()
    plans = plan_periods(study, out, again)
    parent = out if out is not None else plans[0].study.path.parent / "runs"
    folder = parent / f"{plans[0].card}-differences"
    check_differences_folder(folder)
    runs = [_run(plan, processes, console) for plan in plans]
    if len(runs) > 1:
        show_differences(write_differences(runs, folder), folder, console)
    return all(run.converged for run in runs)


def _run(plan: PeriodFit, processes: int | None, console: Console) -> Run:
    console.rule(f"period {escape(plan.period)}", align="left")
    if not plan.finished:
        return fit_and_report(plan.study, out=plan.folder, again=False, processes=processes)
    from bayesrange.report import write

    run = Run(plan.folder)
    when = str(run.info.get("finished") or "")[:10]
    verdict = "" if run.converged else "; it did not converge"
    console.print(
        f"Kept: a run of {when} with the same inputs is in {escape(str(plan.folder))}{verdict}.", soft_wrap=True
    )
    if not (plan.folder / "report.html").is_file():  # interrupted between the fit and its report
        console.print(f"Report: {escape(str(write(plan.folder)))}", soft_wrap=True)
    return run


def show_differences(found: Differences, folder: Path, console: Console) -> None:
    """The table of differences in short, and where everything is."""
    console.rule("differences", align="left")
    rows = found.table[[not one for one in found.single]]
    for (first, second), own in rows.groupby(["first", "second"], sort=False):
        table = Table(title=f"{escape(second)} minus {escape(first)}", title_justify="left")
        for name in ("quantity", "unit", "difference", "90 % interval", "ratio", "P(> 0)"):
            table.add_column(name, justify="left" if name in ("quantity", "unit") else "right", overflow="fold")
        for row in own.head(MOST_ROWS).itertuples():
            ratio = number(row.ratio_median) if row.ratio_median == row.ratio_median else ""
            table.add_row(
                escape(row.quantity), escape(row.unit), number(row.median),
                f"{number(row.lower)} to {number(row.upper)}", ratio, f"{row.probability_above_zero:.2f}",
            )  # fmt: skip
        console.print(table)
        if len(own) > MOST_ROWS:
            console.print(f"{len(own) - MOST_ROWS} more rows are in the table.")
    for note in dict.fromkeys(text for text in found.table["note"] if text):
        console.print(f"[yellow]Note:[/yellow] {escape(note)}.")
    for text in found.left_out:
        console.print(f"[yellow]Note:[/yellow] {escape(text)}")
    lacking = [str(run.info["period"]) for run in found.runs if not run.converged]
    if lacking:
        console.print(f"[red bold]Not converged[/red bold]: {escape(', '.join(lacking))}; these are not yet results.")
    console.print(f"Table: {escape(str(folder / 'differences.csv'))}", soft_wrap=True)
    console.print(f"Page: {escape(str(folder / 'differences.html'))}", soft_wrap=True)
