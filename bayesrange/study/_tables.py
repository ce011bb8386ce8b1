"""Text tables as people save them: separator, encoding, line numbers, columns.

Every cell is read as text, blanks cut off at both ends, so that the checks that follow can quote what is written.
A line is named by its number in the file, the header being line 1.
"""

import codecs
import csv
import io
import re
from collections.abc import Iterable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from bayesrange._errors import StudyError
from bayesrange.study._settings_file import nearest
from bayesrange.study._texts import LONGEST, is_too_long
from bayesrange.study._texts import shown as shown

_SHOWN = 3
_NUMBER = r"[+-]?(\d+[.,]?\d*|[.,]\d+)([eE][+-]?\d+)?"
_CP1252_GAPS = {0x81, 0x8D, 0x8F, 0x90, 0x9D}  # bytes without a meaning in Windows' Latin-1


def read_table(path: Path, name: str) -> pd.DataFrame:
    """A delimited text file as text cells, with its line numbers as index; fully blank lines are left out.

    The separator is whichever of comma, semicolon, tab and bar the header line has most of, or what a first line such
    as `sep=;` says. UTF-16 is known by its mark; else UTF-8 is tried first, then Windows' Latin-1. A cell in double
    quotes may hold separators and line breaks.

    Args:
        path: where the file is.
        name: what the user calls it.

    Raises:
        StudyError: missing or empty file, a line with too many or too few cells, a column name given twice.
    """
    lines = _decode(path, name).replace("\r\n", "\n").replace("\r", "\n").split("\n")
    told = re.fullmatch(r"sep=([,;\t|])", lines[0].strip(" "))
    start = next((i for i, line in enumerate(lines) if line.strip(" \t,;|") and not (told and i == 0)), None)
    if start is None:
        raise StudyError(f"{name}: the file is empty; expected a header line and one line a row.")
    separator = told[1] if told else max(",;\t|", key=lines[start].count)
    if (plain := _plain_table(lines, start, separator, name)) is not None:
        return plain
    reader = csv.reader(io.StringIO("\n".join(lines[start:])), delimiter=separator, strict=True)
    try:
        return _table(reader, start, name)
    except csv.Error as error:
        raise StudyError(
            f"{name}, line {start + reader.line_num}: the quotes are not as in a CSV file ({error}); close each quoted "
            'cell with ", and double a " inside it.'
        ) from None


def _plain_table(lines: list[str], start: int, separator: str, name: str) -> pd.DataFrame | None:
    """The same table ten times as fast, or None where a cell is quoted or a line has another number of cells."""
    rows = [number for number, line in enumerate(lines[start:], start + 1) if line.strip(" \t")]
    text = "\n".join(lines[number - 1] for number in rows)
    between = lines[start].count(separator)
    if '"' in text or "\0" in text or not between or any(lines[n - 1].count(separator) != between for n in rows):
        return None
    header = _header(lines[start].split(separator), name)
    if len(header) <= between:
        return None
    table = pd.read_csv(
        io.StringIO(text), sep=separator, header=None, skiprows=1, names=header, dtype=str, na_filter=False,
        quoting=csv.QUOTE_NONE, lineterminator="\n", skip_blank_lines=False, index_col=False,
    )  # fmt: skip
    table.index = pd.Index(rows[1:], name="line")
    for column in header:
        table[column] = table[column].str.strip()
    filled = (table != "").any(axis=1)
    return table if filled.all() else table[filled]


def _header(cells: list[str], name: str) -> list[str]:
    header = [cell.strip() for cell in cells]
    while header and not header[-1]:
        header.pop()
    twice = sorted({column for column in header if header.count(column) > 1})
    if twice:
        raise StudyError(f'{name}: the column "{shown(twice[0])}" stands twice in the header; rename one of them.')
    return header


def _table(reader: Any, start: int, name: str) -> pd.DataFrame:
    header = _header(next(reader), name)
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
    hint = f'did you mean "{close}"?' if close else f"the columns are {shown(', '.join(table.columns), 200)}."
    raise StudyError(f'{name}: there is no column "{column}", which {why}; {hint}')


def numbers(texts: pd.Series, name: str, blank: float | None = None) -> np.ndarray:
    """Text cells as finite numbers; blanks become `blank`, or are an error if that is None.

    Decimals have a point, or in all cells of the column a comma (`has_decimal_commas`).

    Raises:
        StudyError: names file, line, column and the text that is no finite number.
    """
    is_blank = (texts == "").to_numpy()
    plain = texts.str.replace(",", ".", regex=False) if has_decimal_commas(texts) else texts
    plain = plain.where(plain.str.fullmatch(_NUMBER), "").where(~is_blank, "0")
    values = pd.to_numeric(plain, errors="coerce").to_numpy(dtype=float)
    bad = ~np.isfinite(values) | (is_blank & (blank is None))
    if bad.any():
        line, text = texts.index[bad][0], texts[bad].iloc[0]
        hint = "; write decimals with a point" if _number_with_comma(text) else ""
        more = f" (and {bad.sum() - 1} more)" if bad.sum() > 1 else ""
        raise StudyError(
            f'{name}, line {line}, column "{texts.name}": expected a number, got "{shown(text)}"{more}{hint}.'
        )
    return np.where(is_blank, np.nan if blank is None else blank, values)


def has_decimal_commas(texts: pd.Series) -> bool:
    """Whether the column's decimals are written with commas.

    So if some cells have a comma and none a point, unless every comma could as well mark thousands ("500,000").
    """
    with_comma = texts[texts.str.contains(",", regex=False)]
    if with_comma.empty or texts.str.contains(".", regex=False).any():
        return False
    return not with_comma.str.fullmatch(r"[+-]?[1-9]\d{0,2}(,\d{3})+").all()


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
        if not item.isprintable():
            raise StudyError(
                f'{name}: among the {what} is "{shown(item)}", which has a line break or an invisible character in it; '
                "write the name without."
            )
        if is_too_long(item):
            raise StudyError(
                f'{name}: among the {what} is "{shown(item)}", which is longer than {LONGEST} characters; shorten it.'
            )
        plain = "".join(item.casefold().split())
        other = seen.setdefault(plain, item)
        if other != item:
            raise StudyError(
                f'{name}: the {what} "{other}" and "{item}" differ only by upper case or blanks; '
                "write them alike, or give them names that differ."
            )


def _decode(path: Path, name: str) -> str:
    if path.is_dir():
        raise StudyError(f"{name}: this is a folder; expected a file.")
    if path.exists() and not path.is_file():
        raise StudyError(f"{name}: this is no ordinary file; expected a text table.")
    try:
        raw = path.read_bytes()
    except FileNotFoundError:
        raise StudyError(f"{name}: there is no such file beside the study file.") from None
    except OSError as error:
        raise StudyError(f"{name}: the file cannot be read: {error.strerror}.") from None
    if raw.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)):
        try:
            return raw.decode("utf-16")
        except UnicodeDecodeError:
            raise StudyError(f"{name}: this begins like UTF-16 text but is none; save it as CSV (UTF-8).") from None
    if b"\0" in raw:
        raise StudyError(f"{name}: this is not a text table; save it as CSV (UTF-8).")
    try:
        return raw.decode("utf-8-sig")
    except UnicodeDecodeError:
        return raw.decode("cp1252" if not _CP1252_GAPS & set(raw) else "latin-1")


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
