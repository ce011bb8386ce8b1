"""Which rows of two runs may be compared, and what has to be said beside those that may.

A scaled parameter means the same in both runs only if what it is scaled by is the same: A₀ and the perception distance
for those that go with foreign scent, a layer's mean and sd for the response to it. Raw rows compare whatever the scales
are. Selection, steps and memory belong to the sampling interval and have no raw rows for it.
"""

from dataclasses import dataclass
from math import isclose
from typing import Any

from bayesrange.inference._reported import AREA, BY_A0, Reported

_SAME = 1e-9  # the scales come from the same arithmetic on the same files; anything larger is another ground
_ANY_INTERVAL = ("home_x", "home_y", "encoding_range")
_OF_MEMORY = ("reference_strength", "reference_decay", "working_strength", "working_decay", "recall_half")


@dataclass(frozen=True)
class Verdict:
    """Whether a row may be compared; if so what stands beside it, else why not."""

    comparable: bool
    note: str = ""


def judge(
    first: Reported, second: Reported, before: dict[str, Any], after: dict[str, Any], same_members: bool
) -> Verdict:
    """May this row of two runs be compared?

    Args:
        first: the row in the first run.
        second: the same row in the second.
        before: run.json of the first run.
        after: run.json of the second.
        same_members: whether both populations are of the same groups or animals.
    """
    if first.unit != second.unit:
        return Verdict(False, f'its unit is "{first.unit}" in one run and "{second.unit}" in the other')
    if first.base == AREA:
        return _area(before, after)
    if first.part == "effect" and not same_members:
        return Verdict(False, "covariates are scaled over the members of the population, which are not the same")
    one, other = before["scales"], after["scales"]
    if before["card"].get("kind") == "memory":
        ranges = before["memory"].get("encoding_range_m"), after["memory"].get("encoding_range_m")
        return _of_tracks(first, one, other, ranges)
    if first.base in BY_A0:
        return _by_scent(first, one, other)
    return _by_layer(first, one, other) if first.layer else Verdict(True)


def _area(before: dict[str, Any], after: dict[str, Any]) -> Verdict:
    one, other = before["cell_m"], after["cell_m"]
    note = "" if _same(one, other) else f"cells of {one:g} m and {other:g} m: areas from coarser cells are less exact"
    return Verdict(True, note)


def _by_scent(row: Reported, one: dict[str, Any], other: dict[str, Any]) -> Verdict:
    """Rows that go with foreign scent; a spread or an effect on the log scale does not depend on A₀."""
    said = []
    if row.part in ("", "population") and not _same(one["a0_km2"], other["a0_km2"]):
        said.append(f"A₀ is {one['a0_km2']:.4g} km² and {other['a0_km2']:.4g} km²: only raw rows compare")
    if not _same(one["perception_m"], other["perception_m"]):
        ways = f"{one['perception_m']:.4g} m and {other['perception_m']:.4g} m"
        said.append(f"scent is perceived over {ways}, so the two are not quite the same; set perception_m in [model]")
    return Verdict(row.raw or not said, "; ".join(said))


def _by_layer(row: Reported, one: dict[str, Any], other: dict[str, Any]) -> Verdict:
    """The response to a layer."""
    here, there = one["layers"].get(row.layer), other["layers"].get(row.layer)
    if here is None or there is None:
        return Verdict(False, "its layer is not in both runs")
    if (here.get("reference") or "") != (there.get("reference") or ""):
        return Verdict(False, f'it is against "{here.get("reference")}" and "{there.get("reference")}"')
    if _same(here["mean"], there["mean"]) and _same(here["sd"], there["sd"]):
        return Verdict(True)
    values = " and ".join(f"{layer['mean']:.4g} (sd {layer['sd']:.4g})" for layer in (here, there))
    return Verdict(row.raw, f'the layer "{row.layer}" has the mean {values}: only raw rows compare')


def _of_tracks(
    row: Reported, one: dict[str, Any], other: dict[str, Any], ranges: tuple[float | None, float | None]
) -> Verdict:
    """Rows of a memory card; `ranges` are the encoding ranges [m], None where it is estimated or there is no memory."""
    if row.base not in _ANY_INTERVAL and not _same(one["interval_h"], other["interval_h"]):
        hours = f"{one['interval_h']:g} h and {other['interval_h']:g} h"
        return Verdict(False, f"it belongs to the interval between fixes, {hours}; set interval_h in [model]")
    here, there = ranges
    if row.base in _OF_MEMORY and here is not None and there is not None and not _same(here, there):
        said = f"a stay is remembered within {here:.4g} m and {there:.4g} m, so the two are not quite the same"
        return Verdict(True, f"{said}; set encoding_range_m in [model]")
    return _by_layer(row, one, other) if row.layer else Verdict(True)


def _same(one: float, other: float) -> bool:
    return isclose(one, other, rel_tol=_SAME)
