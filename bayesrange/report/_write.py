"""The report of a run, written in one go; what it holds depends on the kind of card."""

import os
from datetime import date
from pathlib import Path
from typing import Any, Protocol, runtime_checkable

from bayesrange._errors import StudyError
from bayesrange.report._contents import is_memory, read_facts
from bayesrange.report._decay import decay_table
from bayesrange.report._isopleths import isopleth_outlines
from bayesrange.report._maps import write_densities, write_isopleths
from bayesrange.report._memory_page import memory_page
from bayesrange.report._page import page
from bayesrange.report._read import read_contents
from bayesrange.report._read_memory import read_memory
from bayesrange.report._recall import write_recall
from bayesrange.report._tables import overlaps_table, ranges_table, write_table


@runtime_checkable
class HasFolder(Protocol):
    """A run object, such as what `fit` returns."""

    folder: Path


def write(run: str | Path | HasFolder) -> Path:
    """Write tables, maps and report.html into a run folder.

    A range card gets tables/ranges.csv, tables/overlaps.csv and maps of densities and isopleths; a memory card
    tables/decay.csv and maps of recall. Written again, they are made anew from the posterior, which is left as it is.

    Args:
        run: a finished run, or its folder: posterior.nc, run.json, tables/parameters.csv.

    Returns:
        The path of report.html.

    Raises:
        StudyError: the folder is no finished run, or its study is marked sensitive.
    """
    folder = Path(run.folder if isinstance(run, HasFolder) else run)
    facts = read_facts(folder)
    refuse_sensitive(folder, facts)
    html = _write_memory(folder, facts) if is_memory(facts) else _write_range(folder, facts)
    file = folder / "report.html"
    part = file.with_name("report.html.part")
    part.write_text(html, encoding="utf-8")
    os.replace(part, file)
    return file


def _write_range(folder: Path, facts: dict[str, Any]) -> str:
    """Tables and maps of a range card; returns the page."""
    contents = read_contents(folder, facts)
    ranges, overlaps, outlines = ranges_table(contents), overlaps_table(contents), isopleth_outlines(contents)
    html = page(contents, ranges, overlaps, outlines, date.today())
    write_table(ranges, folder / "tables" / "ranges.csv")
    write_table(overlaps, folder / "tables" / "overlaps.csv")
    write_densities(contents)
    write_isopleths(contents, outlines)
    return html


def _write_memory(folder: Path, facts: dict[str, Any]) -> str:
    """Table and maps of a memory card; returns the page. A card without memory has neither decay nor recall."""
    contents = read_memory(folder, facts)
    decay = decay_table(contents)
    html = memory_page(contents, decay, date.today())
    if not decay.empty:
        write_table(decay, folder / "tables" / "decay.csv")
    write_recall(contents)
    return html


def refuse_sensitive(folder: Path, facts: dict[str, Any]) -> None:
    """Maps and figures hold exact places, and coarsening them is not built yet: better no report than a leak."""
    if facts.get("sensitive") not in (None, False, "", "no"):
        raise StudyError(
            f"{folder / 'run.json'} marks the study sensitive = {facts['sensitive']!r} and generalised reports "
            'are not built yet: nothing was written; set sensitive = "no" and fit again if exact places may be shown.'
        )
