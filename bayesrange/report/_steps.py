"""Which steps count, and how far the numbers behind their likelihood can be trusted."""

import math
from typing import Any

import numpy as np

from bayesrange.report._format import fixed, number, whole
from bayesrange.report._memory_sentences import hours, together_sentence
from bayesrange.report._page_parts import found_number
from bayesrange.report._read_memory import MemoryContents

WANTED_SHIFT = 0.1
MUCH_AUTOCORRELATION = 0.1
SHIFTS_SHOWN = 10
_COUNTS = {
    "not_nominal": "not nominal",
    "turn_unknown": "turn unknown",
    "short": "short",
    "off_ground": "off the ground",
    "learning": "learning",
    "without_nodes": "no ground near",
}
_ALWAYS = ("not_nominal", "turn_unknown", "short")


def step_rows(run: MemoryContents) -> dict[str, Any]:
    """The table of steps that count: one row an animal and one for all, columns that are 0 throughout left out."""
    found = run.numerics["steps"]
    shown = [key for key in _COUNTS if key in _ALWAYS or any(row.get(key) for row in found.values())]
    weights = _weights(run)
    rows = []
    for name in run.animals:
        counts = found.get(name, {})
        rows.append(
            {
                "animal": name,
                "start": _start(run, name),
                "record": hours(float(run.numerics["record_h"][name])),
                "fixes": whole(counts["fixes"]),
                "steps": whole(counts["steps"]),
                "others": [whole(counts.get(key, 0)) for key in shown],
                "median": whole(_median_step(run, name)),
                "weight": fixed(weights[name], 2),
            }
        )
    total = [sum(row.get(key, 0) for row in found.values()) for key in ("fixes", "steps", *shown)]
    return {
        "rows": rows,
        "names": [_COUNTS[key] for key in shown],
        "total": [whole(value) for value in total],
        "weighted": any(weight < 1 for weight in weights.values()),
        "words": _words(run, shown),
    }


def _weights(run: MemoryContents) -> dict[str, float]:
    given = run.constant["weight"].values if "weight" in run.constant else np.ones(len(run.animals))
    return {name: float(weight) for name, weight in zip(run.animals, given, strict=True)}


def _start(run: MemoryContents, name: str) -> str:
    return str(run.constant["memory_start"].sel(animal=name).values) if "memory_start" in run.constant else "–"


def _median_step(run: MemoryContents, name: str) -> float:
    mine = run.constant["animal_of_step"].values.astype(str) == name
    return float(np.median(run.constant["length_m"].values[mine])) if mine.any() else math.nan


def _words(run: MemoryContents, shown: list[str]) -> list[str]:
    """What each column counts, for the columns that are there."""
    numerics = run.numerics
    interval, tolerance = hours(float(numerics["interval_h"])), numerics.get("tolerance")
    more = f" by more than {100 * float(tolerance):g} %" if tolerance is not None else ""
    said = {
        "not_nominal": (
            f"not nominal: intervals that differ from {interval}{more}, mostly gaps; they give no step, their time "
            "still counts in memory"
        ),
        "turn_unknown": "turn unknown: the step before is missing or short; such a step keeps its length",
        "short": (
            f"short: below {float(numerics['shortest_step_m']):.3g} m, where rounding hides length and turn; such a "
            "step counts as “shorter than that”"
        ),
        "off_ground": "off the ground: steps that start or end outside the habitable area; left out",
        "learning": "learning: steps of the first days, which only build memory",
        "without_nodes": "no ground near: steps with hardly any habitable ground within reach; left out",
    }
    return [said[key] for key in shown]


def numerics(run: MemoryContents) -> dict[str, Any]:
    """What was approximated, how well, and what in the data may make intervals too narrow."""
    shifts = run.numerics.get("quadrature_shift") or {}
    largest = max((abs(float(value)) for value in shifts.values() if value is not None), default=math.nan)
    together = [list(pair) for pair in run.numerics.get("together") or []]
    order = sorted(shifts, key=lambda name: -abs(shifts[name]) if shifts[name] is not None else -math.inf)
    weighted = any(weight < 1 for weight in _weights(run).values())
    return {
        "rows": _accuracy(run, largest),
        "shifts": [(str(name), *_shift(shifts[name])) for name in order[:SHIFTS_SHOWN]],
        "other_shifts": len(order[SHIFTS_SHOWN:]),
        "autocorrelation": _autocorrelation(run),
        "autocorrelation_note": _autocorrelation_note(run),
        "together": together_sentence(together, run.hierarchical, weighted) if together else "",
    }


def _accuracy(run: MemoryContents, largest: float) -> list[dict[str, Any]]:
    given = run.numerics
    rows = [("nodes a step of the quadrature", whole(found_number(given, "nodes")), "", True)]
    if run.has_memory:
        error, limit = found_number(given, "trace_error"), found_number(given, "trace_error_limit")
        rows.append(("columns of the compressed traces", _columns(given), "", True))
        name = "largest error of an animal’s log-likelihood by the compressed traces"
        rows.append((name, number(error, abs(error)), f"below {limit:g}", error < limit))
    wanted = f"below {WANTED_SHIFT:g}"
    name = "largest shift by the quadrature [posterior sd]"
    rows.append((name, fixed(largest, 3), wanted, largest < WANTED_SHIFT))
    return [dict(zip(("name", "value", "wanted", "good"), row, strict=True)) for row in rows]


def _columns(given: dict[str, Any]) -> str:
    """Columns by decay time, times those by encoding range where that is estimated."""
    by_range = found_number(given, "range_columns")
    more = f" × {by_range:.0f}" if given.get("encoding_range_m") is None and by_range > 0 else ""
    return whole(found_number(given, "columns")) + more


def _shift(value: float | None) -> tuple[str, bool]:
    shift = math.nan if value is None else float(value)
    return fixed(round(shift, 3) + 0.0, 3), abs(shift) < WANTED_SHIFT  # no "−0.000"


def _autocorrelation(run: MemoryContents) -> list[dict[str, Any]]:
    rows = []
    for name, found in (run.numerics.get("step_autocorrelation") or {}).items():
        lag, day = found_number(found, "lag_1"), found_number(found, "day")
        wide = f"{too_narrow(lag):.2f}" if math.isfinite(lag) else "–"
        much = any(value > MUCH_AUTOCORRELATION for value in (lag, day))
        rows.append({"animal": str(name), "lag": fixed(lag, 2), "day": fixed(day, 2), "wide": wide, "much": much})
    return rows


def too_narrow(correlation: float) -> float:
    """Factor by which an interval of a mean is too narrow if successive values correlate but are taken as independent.

    √((1 + r)/(1 − r)) for a first-order autoregression (Bartlett 1946); 1 where r is not positive.

    >>> too_narrow(0.6)
    2.0
    """
    r = min(max(correlation, 0.0), 0.99)
    return math.sqrt((1 + r) / (1 - r))


def _autocorrelation_note(run: MemoryContents) -> str:
    """What the autocorrelation that is there means, in a sentence or two."""
    rows = _autocorrelation(run)
    if not any(row["much"] for row in rows):
        return (
            f"None is above {MUCH_AUTOCORRELATION:g}: steps follow one another nearly as the model has it, and the "
            "intervals need no widening on this account."
        )
    memory = ", for those of memory by an amount not known" if run.has_memory else ""
    rhythm = (
        ""
        if run.harmonics
        else ' Letting step length follow the hour (vary = ["step_length"]) takes the daily part away.'
    )
    return (
        f"Above {MUCH_AUTOCORRELATION:g} (▲): long and short steps come in runs, by bouts of rest or by the hour, "
        "which the model takes as independent. Intervals are then too narrow: for those that rest on step lengths by "
        f"about the factor given{memory}.{rhythm}"
    )
