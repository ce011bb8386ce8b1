"""A look at the data, written: screening.html, screening.csv, screening.gpkg."""

import os
from collections.abc import Iterable
from dataclasses import replace
from datetime import date
from pathlib import Path

import geopandas
import pandas as pd

from bayesrange._errors import StudyError
from bayesrange.report._own_folder import refuse_other_things
from bayesrange.report._screening_page import screening_page
from bayesrange.screening import CardLike, Carried, Screening, carried, look
from bayesrange.study import read_bare

FILES = ("screening.html", "screening.csv", "screening.gpkg")
_MARK = '<meta name="generator" content="bayesrange screen">'


def screen(study: str | Path, out: str | Path | None = None, cards: Iterable[CardLike] | None = None) -> Screening:
    """Look at the data of a study and write what was found; the data stay as they are.

    Args:
        study: the study file or its folder; area, groups, layers and model may be missing.
        out: the folder to write to; default `screening` beside the study file. An earlier screening there is replaced.
        cards: model cards to judge; default those of the package and of the study's folder.

    Raises:
        StudyError: the fixes are wrong, or the folder holds other things.
    """
    bare = read_bare(study)
    folder = Path(out) if out is not None else bare.path.parent / "screening"
    refuse_other_things(folder, FILES, _MARK, "a screening")
    found = look(bare)
    if cards is None:
        from bayesrange.inference import cards as all_cards

        cards = all_cards(bare.path.parent)
    return write_screening(found, folder, carried(found.evidence, cards))


def write_screening(found: Screening, folder: Path, cards: list[Carried]) -> Screening:
    """Write page, table and points, each whole or not at all.

    Raises:
        StudyError: the folder cannot be written to.
    """
    page = screening_page(found, cards, date.today())
    replaced = (folder / FILES[0]).exists()
    try:
        folder.mkdir(parents=True, exist_ok=True)
        _replace(folder / FILES[1], lambda part: _csv(found.table).to_csv(part, index=False))
        _replace(folder / FILES[2], lambda part: _points(found).to_file(part, layer="flags", driver="GPKG"))
        _replace(folder / FILES[0], lambda part: part.write_text(page, encoding="utf-8"))
    except OSError as error:
        raise StudyError(
            f"{folder}: the screening cannot be written there ({error.strerror}); choose another folder by --out."
        ) from None
    return replace(found, folder=folder, replaced=replaced)


def _replace(file: Path, write: object) -> None:
    part = file.with_name(f"{file.stem}.part{file.suffix}")
    part.unlink(missing_ok=True)
    write(part)  # type: ignore[operator]
    os.replace(part, file)


def _csv(table: pd.DataFrame) -> pd.DataFrame:
    """The table of flags with times in ISO 8601 and numbers to six digits."""
    plain = table.drop(columns=["x", "y"])
    rounded = {column: plain[column].map(lambda v: float(f"{v:.6g}")) for column in ("value", "limit")}
    return plain.assign(time=plain["time"].dt.strftime("%Y-%m-%dT%H:%M:%SZ"), **rounded)


def _points(found: Screening) -> geopandas.GeoDataFrame:
    points = geopandas.points_from_xy(found.table["x"], found.table["y"], crs=found.study.crs)
    return geopandas.GeoDataFrame(_csv(found.table), geometry=points)
