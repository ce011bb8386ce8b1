"""Texts that the user gives: names, files, units. They stand in sentences, tables and the names of folders."""

import unicodedata
from collections.abc import Iterator
from typing import Any

from bayesrange._errors import StudyError

LONGEST = 255
"""Bytes of a name at the most: what file systems hold."""

_ANY_TEXT = ("crs",)  # well-known text of a reference system has many lines


def shown(text: str, most: int = 60) -> str:
    """A piece of the user's text fit to stand in a sentence: on one line, nothing invisible, not too long."""
    plain = "".join(c if c.isprintable() else repr(c)[1:-1] for c in str(text)[: most + 1])
    return plain if len(plain) <= most else f"{plain[:most]}…"


def is_plain(text: str) -> bool:
    """Whether a text is on one line and without invisible characters; blanks of any width are fine."""
    return all(c.isprintable() or unicodedata.category(c) == "Zs" for c in text)


def is_too_long(text: str) -> bool:
    """Whether a name, or a part of a path, is longer than a file system holds."""
    return any(len(part.encode("utf-8", "replace")) > LONGEST for part in text.split("/"))


def refuse_odd_texts(content: dict[str, Any], file: str) -> None:
    """Refuse keys and values of a study file with line breaks, invisible characters, or of no sensible length.

    Raises:
        StudyError: names section and key.
    """
    for where, text in _texts(content, []):
        if not is_plain(text):
            raise StudyError(
                f'{file}, {where}: "{shown(text)}" has a line break or an invisible character in it; write it without.'
            )
        if is_too_long(text):
            raise StudyError(f'{file}, {where}: "{shown(text)}" is longer than {LONGEST} characters; shorten it.')


def _texts(value: Any, path: list[str]) -> Iterator[tuple[str, str]]:
    """Every text below a place of the file, keys included, and where it stands: `[layers.water] file`."""
    if isinstance(value, dict):
        table = f"[{shown('.'.join(path))}]" if path else "the file's first lines"
        for key, inner in value.items():
            yield table, key
            if key not in _ANY_TEXT:
                yield from _texts(inner, [*path, key])
    elif isinstance(value, list):
        for inner in value:
            yield from _texts(inner, path)
    elif isinstance(value, str):
        section, key = path[:-1], path[-1]
        yield (f"[{shown('.'.join(section))}] {shown(key)}" if section else shown(key)), value
