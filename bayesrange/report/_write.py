"""The report of a run, written in one go."""

import os
from datetime import date
from pathlib import Path

from bayesrange._errors import StudyError
from bayesrange.report._isopleths import isopleth_outlines
from bayesrange.report._maps import write_densities, write_isopleths
from bayesrange.report._page import page
from bayesrange.report._read import Run, read_run
from bayesrange.report._tables import overlaps_table, ranges_table, write_table


def write(run_folder: Path) -> Path:
    """Write tables/ranges.csv, tables/overlaps.csv, maps/ and report.html into a run folder.

    Written again, they are made anew from the posterior, which is left as it is.

    Args:
        run_folder: a finished run: posterior.nc, run.json, tables/parameters.csv.

    Returns:
        The path of report.html.

    Raises:
        StudyError: the folder is no finished run, or its study is marked sensitive.
    """
    run = read_run(Path(run_folder))
    _refuse_sensitive(run)
    ranges, overlaps, outlines = ranges_table(run), overlaps_table(run), isopleth_outlines(run)
    html = page(run, ranges, overlaps, outlines, date.today())
    write_table(ranges, run.folder / "tables" / "ranges.csv")
    write_table(overlaps, run.folder / "tables" / "overlaps.csv")
    write_densities(run)
    write_isopleths(run, outlines)
    file = run.folder / "report.html"
    part = file.with_name("report.html.part")
    part.write_text(html, encoding="utf-8")
    os.replace(part, file)
    return file


def _refuse_sensitive(run: Run) -> None:
    """Maps and figures hold exact places, and coarsening them is not built yet: better no report than a leak."""
    if run.facts.get("sensitive") not in (None, False, "", "no"):
        raise StudyError(
            f"{run.folder / 'run.json'} marks the study sensitive = {run.facts['sensitive']!r} and generalised reports "
            'are not built yet: nothing was written; set sensitive = "no" and fit again if exact places may be shown.'
        )
