"""Text tables as people save them: separator, encoding, line numbers, columns.

Every cell is read as text, blanks cut off at both ends, so that the checks that follow can quote what is written.
A line is named by its number in the file, the header being line 1.
"""

import csv
import io
from collections.abc import Iterable
from pathlib import Path

import numpy as np
import pandas as pd

from bayesrange._errors import StudyError
from bayesrange.study._settings_file import nearest

_SHOWN = 3


def read_table(path: Path, name: str) -> pd.DataFrame:
    """A delimited text file as text cells, with its line numbers as index; fully blank lines are left out.

    The separator is whichever of comma, semicolon and tab the header line has most of. UTF-8 is tried first, then
    Latin-1.

    Args:
        path: where the file is.
        name: what the user calls it.

    Raises:
        StudyError: missing or empty file, a line with too many or too few cells, a column name given twice.
    """
    lines = _decode(path, name).splitlines(keepends=True)
    start = next((i for i, line in enumerate(lines) if line.strip(" \t\r\n,;")), None)
    if start is None:
        raise StudyError(f"{name}: the file is empty; expected a header line and one line a row.")
    separator = max(",;\t", key=lines[start].count)
    reader = csv.reader(io.StringIO("".join(lines[start:])), delimiter=separator)
    header = [cell.strip() for cell in next(reader)]
    while header and not header[-1]:
        header.pop()
    twice = sorted({column for column in header if header.count(column) > 1})
    if twice:
        raise StudyError(f'{name}: the column "{twice[0]}" stands twice in the header; rename one of them.')
    rows, numbers = _cells(reader, len(header), start, name)
    return pd.DataFrame(rows, columns=header, index=pd.Index(numbers, name="line"), dtype=str)


def column_or_error(table: pd.DataFrame, column: str, name: str, why: str) -> pd.Series:
    """A column of the table, or a sentence that says which are there.

    Args:
        table: from `read_table`.
        column: its name.
        name: what the user calls the file.
        why: who wants it, such as "[fixes] animal names".
    """
    if column in table.columns:
        return table[column]
    close = nearest(column, list(table.columns))
    hint = f'did you mean "{close}"?' if close else f"the columns are {', '.join(table.columns)}."
    raise StudyError(f'{name}: there is no column "{column}", which {why}; {hint}')


def numbers(texts: pd.Series, name: str, blank: float | None = None) -> np.ndarray:
    """Text cells as finite numbers; blanks become `blank`, or are an error if that is None.

    Raises:
        StudyError: names file, line, column and the text that is no finite number.
    """
    is_blank = (texts == "").to_numpy()
    values = pd.to_numeric(texts.where(~is_blank, "0"), errors="coerce").to_numpy(dtype=float)
    bad = ~np.isfinite(values) | (is_blank & (blank is None))
    if bad.any():
        line, text = texts.index[bad][0], texts[bad].iloc[0]
        hint = "; write decimals with a point" if _number_with_comma(text) else ""
        more = f" (and {bad.sum() - 1} more)" if bad.sum() > 1 else ""
        raise StudyError(f'{name}, line {line}, column "{texts.name}": expected a number, got "{text}"{more}{hint}.')
    return np.where(is_blank, np.nan if blank is None else blank, values)


def first_few(items: Iterable[object]) -> str:
    """The first three items and how many more there are: "4, 9, 17 and 5 more"."""
    items = list(items)
    shown = ", ".join(str(item) for item in items[:_SHOWN])
    return shown if len(items) <= _SHOWN else f"{shown} and {len(items) - _SHOWN} more"


def counted(n: int, one: str, many: str) -> str:
    """A number and its noun: "1 fix", "3 fixes"."""
    return f"{n} {one if n == 1 else many}"


def one_name_each(names: Iterable[str], what: str, name: str) -> None:
    """Refuse two names that differ only by upper case or blanks: one thing would be taken for two."""
    seen: dict[str, str] = {}
    for item in dict.fromkeys(names):
        plain = "".join(item.casefold().split())
        other = seen.setdefault(plain, item)
        if other != item:
            raise StudyError(
                f'{name}: the {what} "{other}" and "{item}" differ only by upper case or blanks; '
                "write them alike, or give them names that differ."
            )


def _decode(path: Path, name: str) -> str:
    try:
        raw = path.read_bytes()
    except FileNotFoundError:
        raise StudyError(f"{name}: there is no such file beside the study file.") from None
    except OSError as error:
        raise StudyError(f"{name}: the file cannot be read: {error.strerror}.") from None
    if b"\0" in raw:
        raise StudyError(f"{name}: this is not a text table; save it as CSV (UTF-8).")
    try:
        return raw.decode("utf-8-sig")
    except UnicodeDecodeError:
        return raw.decode("latin-1")


def _cells(reader: Iterable[list[str]], width: int, start: int, name: str) -> tuple[list[list[str]], list[int]]:
    rows, lines = [], []
    for cells in reader:
        cells = [cell.strip() for cell in cells]
        if not any(cells):
            continue
        line = start + reader.line_num  # type: ignore[attr-defined]
        if len(cells) < width or any(cells[width:]):
            raise StudyError(f"{name}, line {line}: expected {width} cells as in the header, got {len(cells)}.")
        rows.append(cells[:width])
        lines.append(line)
    return rows, lines


def _number_with_comma(text: str) -> bool:
    try:
        float(text.replace(",", "."))
    except ValueError:
        return False
    return "," in text
