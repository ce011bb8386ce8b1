"""The bundled study: where it is copied to, and how the fit compares with what is true."""

import json
import shutil
from pathlib import Path

import numpy as np
import pandas as pd
from rich.console import Console
from rich.markup import escape
from rich.table import Table
from scipy.stats import binom

from bayesrange._errors import StudyError
from bayesrange._resources import demo_folder, demo_truth
from bayesrange.inference import Run

TOO_FAR = 3.3
"""|z| that one of a few parameters passes once in a thousand times."""


def copy_study(out: Path | None) -> Path:
    """Copy the bundled study to a folder of the user's.

    Args:
        out: the folder; default `bayesrange-demo` here, or the next free number. An unfinished demo is gone on with.

    Raises:
        StudyError: `out` holds something else, or a file that was changed.
    """
    source = demo_folder()
    if out is None:
        number, out = 1, Path("bayesrange-demo")
        while out.exists() and list(out.glob("runs/*/run.json")):
            number += 1
            out = Path(f"bayesrange-demo-{number}")
    if out.exists() and not (out / "study.toml").is_file() and any(out.iterdir()):
        raise StudyError(f"{out}: expected a new or empty folder for the demo; choose another with --out.")
    out.mkdir(parents=True, exist_ok=True)
    for file in source.iterdir():
        target = out / file.name
        if target.exists() and target.read_bytes() != file.read_bytes():
            raise StudyError(f"{target}: differs from the bundled study's file; choose another folder with --out.")
        if file.is_file() and not target.exists():
            shutil.copyfile(file, target)
    return out


def truth_table(parameters: pd.DataFrame) -> pd.DataFrame:
    """Parameters of the demo beside what its animals were made with.

    Args:
        parameters: the run's parameters.csv.

    Returns:
        Columns parameter, unit, truth, median, lower, upper, z (deviation of the mean in posterior sd), inside.
    """
    true = json.loads(demo_truth().read_text(encoding="utf-8"))["parameters"]
    table = parameters[parameters["parameter"].isin(true) & ~parameters["parameter"].str.endswith(" raw")].copy()
    table["truth"] = [true[name]["value"] for name in table["parameter"]]
    table["z"] = (table["mean"] - table["truth"]) / table["sd"]
    table["inside"] = (table["lower"] <= table["truth"]) & (table["truth"] <= table["upper"])
    return table[["parameter", "unit", "truth", "median", "lower", "upper", "z", "inside"]]


def compare_with_truth(run: Run) -> None:
    """Print truth beside intervals, and how many hold it beside what chance allows."""
    table = truth_table(run.parameters)
    console = Console()
    screen = Table(title="What the simulated animals did, and what the fit found", title_justify="left")
    for name in ("parameter", "unit", "true", "median", "90 % interval", "z", "inside"):
        screen.add_column(name, justify="left" if name in ("parameter", "unit") else "right", overflow="fold")
    for row in table.itertuples():
        interval = f"{row.lower:.3g} to {row.upper:.3g}"
        screen.add_row(
            escape(row.parameter), row.unit, f"{row.truth:.3g}", f"{row.median:.3g}", interval, f"{row.z:+.1f}",
            "yes" if row.inside else "no",
        )  # fmt: skip
    console.print(screen)
    count = len(table)
    low, high = binom.interval(0.95, count, 0.9)
    far = int((np.abs(table["z"]) > TOO_FAR).sum())
    console.print(
        f"{int(table['inside'].sum())} of {count} 90 % intervals hold the truth; by chance {int(low)} to {int(high)} "
        "would (95 % of "
        f"data sets). {'No parameter is' if not far else f'{far} parameter(s) are'} beyond |z| = {TOO_FAR}."
    )
