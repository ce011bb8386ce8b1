"""The report of a run, written in one go."""

import os
from datetime import date
from pathlib import Path
from typing import Protocol, runtime_checkable

from bayesrange._errors import StudyError
from bayesrange.report._isopleths import isopleth_outlines
from bayesrange.report._maps import write_densities, write_isopleths
from bayesrange.report._page import page
from bayesrange.report._read import Contents, read_contents
from bayesrange.report._tables import overlaps_table, ranges_table, write_table


@runtime_checkable
class HasFolder(Protocol):
    """A run object, such as what `fit` returns."""

    folder: Path


def write(run: str | Path | HasFolder) -> Path:
    """Write tables/ranges.csv, tables/overlaps.csv, maps/ and report.html into a run folder.

    Written again, they are made anew from the posterior, which is left as it is.

    Args:
        run: a finished run, or its folder: posterior.nc, run.json, tables/parameters.csv.

    Returns:
        The path of report.html.

    Raises:
        StudyError: the folder is no finished run, or its study is marked sensitive.
    """
    folder = Path(run.folder if isinstance(run, HasFolder) else run)
    contents = read_contents(folder)
    _refuse_sensitive(contents)
    ranges, overlaps, outlines = ranges_table(contents), overlaps_table(contents), isopleth_outlines(contents)
    html = page(contents, ranges, overlaps, outlines, date.today())
    write_table(ranges, folder / "tables" / "ranges.csv")
    write_table(overlaps, folder / "tables" / "overlaps.csv")
    write_densities(contents)
    write_isopleths(contents, outlines)
    file = folder / "report.html"
    part = file.with_name("report.html.part")
    part.write_text(html, encoding="utf-8")
    os.replace(part, file)
    return file


def _refuse_sensitive(run: Contents) -> None:
    """Maps and figures hold exact places, and coarsening them is not built yet: better no report than a leak."""
    if run.facts.get("sensitive") not in (None, False, "", "no"):
        raise StudyError(
            f"{run.folder / 'run.json'} marks the study sensitive = {run.facts['sensitive']!r} and generalised reports "
            'are not built yet: nothing was written; set sensitive = "no" and fit again if exact places may be shown.'
        )
