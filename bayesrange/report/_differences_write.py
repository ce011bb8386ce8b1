"""What lies between periods, written: differences.html, differences.csv."""

import os
from collections.abc import Sequence
from datetime import date
from pathlib import Path

from bayesrange._errors import StudyError
from bayesrange.inference import Differences, Run, between_periods
from bayesrange.report._contents import read_facts
from bayesrange.report._differences_page import differences_page
from bayesrange.report._own_folder import refuse_other_things
from bayesrange.report._tables import write_table
from bayesrange.report._write import refuse_sensitive

FILES = ("differences.html", "differences.csv")
_MARK = '<meta name="generator" content="bayesrange differences">'


def check_differences_folder(folder: Path) -> None:
    """Refuse a folder that holds anything but earlier differences; these are replaced, being made from the runs.

    Raises:
        StudyError: it does.
    """
    refuse_other_things(folder, FILES, _MARK, "a page of differences")


def write_differences(runs: Sequence[Run], folder: str | Path) -> Differences:
    """Write table and page of the differences between the runs of several periods.

    Args:
        runs: finished, of one card and study, in the order of its periods; at least two.
        folder: where to write; made if it is not there.

    Raises:
        StudyError: the runs do not belong together, the study is marked sensitive, or the folder holds other things.
    """
    folder = Path(folder)
    if len(runs) < 2:
        raise StudyError(f"{folder}: differences need the runs of at least two periods, got {len(runs)}.")
    check_differences_folder(folder)
    for run in runs:
        refuse_sensitive(run.folder, read_facts(run.folder))
    found = between_periods(runs)
    html = differences_page(found, date.today())
    try:
        write_table(found.table, folder / FILES[1])
        part = folder / f"{FILES[0]}.part"
        part.write_text(html, encoding="utf-8")
        os.replace(part, folder / FILES[0])
    except OSError as error:
        raise StudyError(f"{folder}: the differences cannot be written there ({error.strerror}).") from None
    return found
