"""Selection with and without memory, side by side.

A run of a card without memory counts if it stands in the same folder as this run, is finished, and saw the same: the
same data files, period, grid cell and step interval. The study file and the card may differ; they name the card.
"""

import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from bayesrange.report._contents import FORMAT, is_memory, read_parameters
from bayesrange.report._read_memory import MemoryContents


@dataclass(frozen=True)
class Null:
    """A finished run without memory on the same data."""

    card: str
    folder: Path
    finished: str
    converged: bool
    parameters: pd.DataFrame


@dataclass(frozen=True)
class Estimate:
    """Median and interval of one run."""

    median: float
    lower: float
    upper: float


@dataclass(frozen=True)
class Pair:
    """One selection row in this run and in each null, in the order of the nulls; None where a null has no such row."""

    response: str
    animal: str | None
    unit: str
    here: Estimate
    there: list[Estimate | None]


def find_nulls(run: MemoryContents) -> list[Null]:
    """The newest finished run of each card without memory that stands beside this run and saw the same data."""
    newest: dict[str, Null] = {}
    for file in sorted(run.folder.resolve().parent.glob("*/run.json")):
        found = _null(file, run)
        if found is not None and (found.card not in newest or found.finished >= newest[found.card].finished):
            newest[found.card] = found
    return sorted(newest.values(), key=lambda null: null.card != "steps-resources")


def _null(file: Path, run: MemoryContents) -> Null | None:
    if file.parent.resolve() == run.folder.resolve():
        return None
    try:
        facts = json.loads(file.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return None  # not a run of ours, or half written: it is no finished run
    if not isinstance(facts, dict) or facts.get("format") != FORMAT or not is_memory(facts):
        return None
    table = file.parent / "tables" / "parameters.csv"
    if _seen(facts) != _seen(run.facts) or not table.is_file():
        return None
    parameters = read_parameters(table)
    names = parameters["parameter"].astype(str)
    if names.str.startswith(("reference_", "working_")).any() or not names.str.startswith("selection[").any():
        return None
    finished = str(facts.get("finished") or "")
    return Null(str(facts["card"]["name"]), file.parent, finished, bool(facts["converged"]), parameters)


def _seen(facts: dict[str, Any]) -> dict[str, Any]:
    """What a run was made from, apart from the study file and the card."""
    card = facts["card"]["name"]
    own = {facts["study"]["file"], f"{card}.toml", f"models/{card}.toml"}
    data = {name: digest for name, digest in facts["files"].items() if name not in own}
    steps = facts.get("memory") or {}
    return {
        "files": data,
        "period": facts.get("period"),
        "cell_m": facts["cell_m"],
        "interval_h": steps.get("interval_h"),
    }


def pairs(run: MemoryContents, nulls: list[Null]) -> list[Pair]:
    """Selection of the population and of each animal, in this run and without memory."""
    there = [_estimates(null.parameters) for null in nulls]
    units = dict(zip(run.parameters["parameter"], run.parameters["unit"], strict=True))
    here = _estimates(run.parameters)
    found = []
    for response in run.responses:
        for animal in (None, *run.animals):
            name = f"selection[{response}]" if animal is None else f"selection[{response}, {animal}]"
            others = [table.get(name) for table in there]
            if name in here and any(other is not None for other in others):
                found.append(Pair(response, animal, str(units[name]), here[name], others))
    return found


def _estimates(table: pd.DataFrame) -> dict[str, Estimate]:
    rows = table[table["parameter"].astype(str).str.startswith("selection[")]
    return {
        str(row.parameter): Estimate(float(row.median), float(row.lower), float(row.upper)) for row in rows.itertuples()
    }


def times_as_large(here: Estimate, there: Estimate) -> float | None:
    """How many times the selection without memory is that with memory; None where one of them may be 0."""
    known = all(np.sign(one.lower) == np.sign(one.upper) != 0 for one in (here, there))
    if not known or np.sign(here.median) != np.sign(there.median):
        return None
    return there.median / here.median
