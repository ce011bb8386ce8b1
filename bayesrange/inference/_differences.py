"""Differences between periods, with their intervals: every parameter, and every range area.

The posteriors of two periods are independent, since no fix is in both: a draw of one goes with any draw of the other.
Draws are paired at random, several times over, and never in the order in which they were drawn: both fits begin with
the same random numbers, so that draws at the same place of their chains may be alike, and their differences too small.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr
from jaxtyping import Float, Int
from numpy.typing import NDArray

from bayesrange._errors import StudyError
from bayesrange.inference._comparable import judge
from bayesrange.inference._reported import Reported, reported, table_names
from bayesrange.inference._run import Run, open_run
from bayesrange.inference._summary import PROB

PAIRINGS = 20
"""How often the draws are paired anew: each draw meets 20 of the other run's, which steadies the quantiles."""

SEED = 20
COLUMNS = (
    "quantity", "unit", "first", "second", "median", "lower", "upper", "prob", "ratio_median", "ratio_lower",
    "ratio_upper", "probability_above_zero", "note",
)  # fmt: skip
_NAMED = 4
_UNTRACKED = ("new group]", "new animal]")


@dataclass(frozen=True)
class Differences:
    """What lies between runs of several periods.

    Attributes:
        runs: in the order of the study's periods.
        table: one row a pair of periods and quantity; columns as in `COLUMNS`, differences second minus first.
        single: of each row of the table, whether it is of one group or animal of a population.
        left_out: sentences on what could not be compared.
    """

    runs: list[Run]
    table: pd.DataFrame
    single: list[bool]
    left_out: list[str] = field(default_factory=list)


def differences(first: str | Path | Run, second: str | Path | Run) -> pd.DataFrame:
    """Differences of every parameter and range area between the runs of two periods, second minus first.

    Args:
        first: a finished run, or its folder.
        second: the same card fitted to another period of the same study.

    Returns:
        One row a quantity: quantity, unit, first and second (the periods), median, lower and upper of the difference,
        prob (what lower to upper holds, equal tails), the same of the ratio second / first for what is above 0 by
        nature, the probability that the difference is above 0, and a note on what is to be minded. Sentences on rows
        that could not be compared are in `attrs["left_out"]`.

    Raises:
        StudyError: a run is not finished, or the two do not belong together.
    """
    found = between_periods([run if isinstance(run, Run) else open_run(run) for run in (first, second)])
    found.table.attrs["left_out"] = found.left_out
    return found.table


def between_periods(runs: Sequence[Run]) -> Differences:
    """Differences between consecutive runs, and between each and the first.

    Args:
        runs: finished, of one card and study, in the order of its periods.

    Raises:
        StudyError: they do not belong together.
    """
    for at, run in enumerate(runs):
        for other in runs[:at]:
            _belong_together(other, run)
    known = [reported(run) for run in runs]
    rows, left_out = [], []
    for one, other in _pairs(len(runs)):
        rows += list(_rows(runs[one], runs[other], known[one], known[other], left_out))
    table = pd.DataFrame([row for row, _ in rows], columns=list(COLUMNS))
    return Differences(list(runs), table, [single for _, single in rows], left_out)


def _pairs(count: int) -> list[tuple[int, int]]:
    """Consecutive ones, then each later one against the first."""
    return [(at, at + 1) for at in range(count - 1)] + [(0, at) for at in range(2, count)]


def _belong_together(first: Run, second: Run) -> None:
    """Refuse runs that cannot be compared.

    Raises:
        StudyError: of different cards or studies, of one period, or of fixes from the same time.
    """
    one, other = first.info, second.info
    both = f"{first.folder} and {second.folder}"
    if one["card"]["name"] != other["card"]["name"]:
        cards = f"{one['card']['name']} and {other['card']['name']}"
        raise StudyError(f"{both}: these are runs of different cards, {cards}; fit both periods with one card.")
    if (one["study"]["name"], one["crs"]) != (other["study"]["name"], other["crs"]):
        names = f'"{one["study"]["name"]}" ({one["crs"]}) and "{other["study"]["name"]}" ({other["crs"]})'
        raise StudyError(f"{both}: these are runs of different studies, {names}; give two periods of one study.")
    for run in (first, second):
        if run.info["period"] is None:
            raise StudyError(
                f"{run.folder}: this run is of no period; give runs of two periods, which the study file names in "
                "[periods]."
            )
    if one["period"] == other["period"]:
        raise StudyError(f'{both}: both runs are of the period "{one["period"]}"; give runs of two periods.')
    (start, end), (begin, finish) = _tracked(first), _tracked(second)
    if start <= finish and begin <= end:
        raise StudyError(
            f'{both}: the fixes of "{one["period"]}" and "{other["period"]}" are from times that overlap, so the study '
            "file changed between the two fits; fit both anew."
        )


def _tracked(run: Run) -> tuple[np.datetime64, np.datetime64]:
    """First and last fix."""
    with xr.open_datatree(run.folder / "posterior.nc", engine="h5netcdf") as tree:
        constant = tree["constant_data"]
        times = constant["fix_time" if "fix_time" in constant else "time"].values
    return times.min(), times.max()


def _rows(
    first: Run, second: Run, before: dict[str, Reported], after: dict[str, Reported], left_out: list[str]
) -> Iterator[tuple[dict[str, Any], bool]]:
    """The rows of one pair, and whether each is of one group or animal; what is left out is said in `left_out`."""
    names = first.info["period"], second.info["period"]
    ways = f"{names[0]} to {names[1]}"
    same_members = {row.name for row in before.values() if row.single} == {
        row.name for row in after.values() if row.single
    }
    pairing = _pairing(next(iter(before.values())).draws.size, next(iter(after.values())).draws.size)
    reasons: dict[str, list[str]] = {}
    for name, row in before.items():
        if name not in after:
            reasons.setdefault(f'not in the run of "{names[1]}"', []).append(name)
            continue
        verdict = judge(row, after[name], first.info, second.info, same_members)
        if not verdict.comparable:
            reasons.setdefault(verdict.note, []).append(name)
            continue
        yield _row(row, after[name], names, pairing) | {"note": verdict.note}, row.single
    only_after = [name for name in after if name not in before]
    if only_after:
        reasons.setdefault(f'not in the run of "{names[0]}"', []).extend(only_after)
    untracked = [name for name in table_names(first) if name.endswith(_UNTRACKED) and name not in before]
    if untracked:
        reasons.setdefault("of a member of the population that was not tracked", []).extend(untracked)
    left_out += [f"{ways}, left out: {_listed(whose)}: {why}." for why, whose in reasons.items()]


def _listed(names: list[str]) -> str:
    more = f" and {len(names) - _NAMED} more" if len(names) > _NAMED else ""
    return ", ".join(names[:_NAMED]) + more


def _pairing(first: int, second: int) -> tuple[Int[NDArray, " pairs"], Int[NDArray, " pairs"]]:
    """Which draws of two runs go together: in random order, anew for each of the pairings."""
    rng, size = np.random.default_rng(SEED), min(first, second)
    drawn = [[rng.permutation(count)[:size] for _ in range(PAIRINGS)] for count in (first, second)]
    return np.concatenate(drawn[0]), np.concatenate(drawn[1])


def _row(
    first: Reported,
    second: Reported,
    names: tuple[str, str],
    pairing: tuple[Int[NDArray, " pairs"], Int[NDArray, " pairs"]],
) -> dict[str, Any]:
    before, after = first.draws[pairing[0]], second.draws[pairing[1]]
    change = after - before
    median, lower, upper = _spanned(change)
    ratios = (np.nan, np.nan, np.nan)
    if first.has_ratio:
        with np.errstate(divide="ignore", invalid="ignore"):
            ratios = _spanned(after / before)
    return {
        "quantity": first.name, "unit": first.unit, "first": names[0], "second": names[1],
        "median": median, "lower": lower, "upper": upper, "prob": PROB,
        "ratio_median": ratios[0], "ratio_lower": ratios[1], "ratio_upper": ratios[2],
        "probability_above_zero": float(np.mean(change > 0)),
    }  # fmt: skip


def _spanned(values: Float[NDArray, " pairs"]) -> tuple[float, float, float]:
    """Median, and the ends of the interval with equal tails."""
    tail = (1 - PROB) / 2
    median, lower, upper = np.quantile(values, [0.5, tail, 1 - tail])
    return float(median), float(lower), float(upper)
