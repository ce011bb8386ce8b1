"""A folder that a command fills anew each time: only its own earlier files may be replaced."""

from collections.abc import Sequence
from pathlib import Path

from bayesrange._errors import StudyError


def refuse_other_things(folder: Path, files: Sequence[str], mark: str, thing: str) -> None:
    """Refuse a folder that holds anything but what the same command wrote there before.

    Args:
        folder: where to write.
        files: what the command writes; the first is its page.
        mark: what the page has near its beginning.
        thing: what is written, with its article: "a screening".

    Raises:
        StudyError: the folder holds other things.
    """
    if not folder.exists():
        return
    if not folder.is_dir():
        noun = thing.partition(" ")[2]
        raise StudyError(f"{folder}: this is a file; expected a folder for the {noun}, choose another by --out.")
    held = sorted(path.name for path in folder.iterdir())
    page = folder / files[0]
    ours = page.is_file() and mark in page.read_text(encoding="utf-8", errors="replace")[:2000]
    if set(held) - set(files) or (held and not ours):
        raise StudyError(
            f"{folder}: this folder holds other things than {thing} ({held[0]}), which would be overwritten; "
            "choose another by --out."
        )
