"""Of what kind the study's model card is, so that checks that only concern ranges leave tracks alone."""

import tomllib
from pathlib import Path

from bayesrange._resources import models_folder


def card_kind(name: str, folder: Path) -> str:
    """`kind` of the card in the study's folder, else of the package's own; "range" where there is none to be read.

    A card that is missing or wrong is told of where it is read for fitting.
    """
    for place in (folder, models_folder()):
        file = place / f"{Path(name).name}.toml"
        try:
            table = tomllib.loads(file.read_text(encoding="utf-8"))
        except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError):
            continue
        if "study" not in table:
            return str(table.get("kind", "range"))
    return "range"
