"""Parts of a report page that every kind of card has: head, verdict, priors, grid, checks and record."""

from datetime import date
from typing import Any

import pandas as pd

from bayesrange.report._contents import RunContents
from bayesrange.report._format import fixed, whole
from bayesrange.report._parameters import Gate, split_name

# Betancourt 2016, arXiv:1604.00695.
LEAST_BFMI = 0.3
_OF_SOLVES = ("failed_solves", "two_states")
_COUNTED = {
    "divergences": "divergent transitions",
    "failed_solves": "of these, where no steady state was found",
    "two_states": "draws with a second steady state",
    "deepest_trees": "transitions at the deepest tree",
}


def head(run: RunContents, today: date) -> dict[str, str]:
    """What the page's first lines say: study, card, period and dates."""
    period = run.facts.get("period")
    fitted = str(run.facts.get("finished") or "")[:10]
    return {
        "study": str(run.facts["name"]),
        "card": str(run.facts["card"]["name"]),
        "card_title": str(run.facts["card"].get("title") or ""),
        "period": spaced(period) if period else "",
        "tracked": _tracked(run),
        "fitted": day(date.fromisoformat(fitted)) if fitted else "",
        "written": day(today),
    }


def _tracked(run: RunContents) -> str:
    name = "fix_time" if "fix_time" in run.constant else "time"
    if name not in run.constant or not run.constant[name].size:
        return ""
    times = pd.to_datetime(run.constant[name].values)
    return f"{day(times.min().date())} to {day(times.max().date())}"


def day(when: date) -> str:
    return f"{when.day} {when:%B %Y}"


def verdict(run: RunContents, solves: bool = True) -> dict[str, Any]:
    """Converged or not, in one sentence, with the problems that inference wrote down.

    Args:
        run: what the run folder holds.
        solves: whether the kind of card solves anything that can fail.
    """
    found = run.facts["diagnostics"]
    converged = bool(run.facts["converged"])
    numbers = (
        f"largest R-hat {fixed(found_number(found, 'max_rhat'), 3)}, smallest effective sample size "
        f"{whole(found_number(found, 'min_ess_bulk'))} (bulk) and {whole(found_number(found, 'min_ess_tail'))} (tail), "
        f"{_counted(found.get('divergences', 0), 'divergence')}"
    )
    numbers += f", {_counted(found.get('failed_solves', 0), 'failed solve')}" if solves else ""
    sentence = (
        f"The chains agree: {numbers}."
        if converged
        else f"The chains do not agree on one posterior, so the numbers below are not yet results: {numbers}."
    )
    problems = [str(text) for text in found.get("problems", [])]
    return {"converged": converged, "sentence": sentence, "problems": problems}


def _counted(count: int, thing: str) -> str:
    return f"no {thing}s" if not count else f"{count:,} {thing}{'' if count == 1 else 's'}"


def found_number(facts: dict[str, Any], key: str) -> float:
    """A number of run.json, NaN where it is null or not there."""
    value = facts.get(key)
    return float("nan") if value is None else float(value)


def grid(run: RunContents) -> str:
    """The grid in words."""
    habitable_km2 = float(run.habitable.sum()) * run.cell_m**2 / 1e6
    cells = f"{run.x_m.size} × {run.y_m.size} cells of {run.cell_m:g} m"
    return f"{cells}, {habitable_km2:,.4g} km² habitable, {run.crs.name}"


def priors(run: RunContents) -> list[tuple[str, str, str]]:
    """Name, prior in words, and why this one, or that the study file changed it; parameters of this fit only."""
    card = run.facts["card"]
    fitted = {split_name(str(name))[0] for name in run.parameters["parameter"]} | {"covariate"}
    reasons, changed = card.get("prior_reasons") or {}, card.get("changed_priors") or []
    rows = []
    for name, words in (card.get("priors") or {}).items():
        if name.removesuffix(" spread") not in fitted:
            continue
        why = str(reasons.get(name) or "")
        rows.append((str(name), str(words), f"Set in the study file. {why}".strip() if name in changed else why))
    return rows


def stopped(sentence: str) -> str:
    """A sentence with its full stop."""
    return sentence if not sentence or sentence.endswith((".", "!", "?")) else sentence + "."


def spaced(key: Any) -> str:
    """A key as words."""
    return str(key).replace("_", " ")


def scales(scales: dict[str, Any]) -> list[tuple[str, str]]:
    """What was frozen at the fit, with units."""
    rows = [
        ("ground for each animal, A₀ (scent has mean 1)", scales.get("a0_km2"), "km²"),
        ("distance over which scent is perceived", scales.get("perception_m"), "m"),
        ("smoothing of the distance to home, ε", scales.get("eps_m"), "m"),
    ]
    shown = [(name, f"{float(value):,.4g} {unit}") for name, value, unit in rows if value is not None]
    for name, layer in (scales.get("layers") or {}).items():
        unit = layer.get("unit") or ""
        if layer.get("reference"):
            shown.append((f"layer {name}", f"1 in the class, 0 in {layer['reference']}"))
            continue
        shown.append(
            (f"layer {name}", f"mean {layer['mean']:,.4g}, sd {layer['sd']:,.4g} {unit}".strip().replace(" -", " −"))
        )
    return shown


def checks(run: RunContents, gate: Gate, solves: bool = True) -> list[dict[str, Any]]:
    """What was checked: name, value, what it should be, whether it is; `solves` as in `verdict`."""
    found = run.facts["diagnostics"]
    rhat = found_number(found, "max_rhat")
    rows = [("largest R-hat", fixed(rhat, 3), f"below {gate.rhat}", rhat < gate.rhat)]
    for key, name in (("min_ess_bulk", "bulk"), ("min_ess_tail", "tail")):
        ess = found_number(found, key)
        wanted = f"at least {gate.least_ess}"
        rows.append((f"smallest effective sample size, {name}", whole(ess), wanted, ess >= gate.least_ess))
    if "min_bfmi" in found:
        bfmi = found_number(found, "min_bfmi")
        rows.append(("smallest energy BFMI", fixed(bfmi, 2), f"at least {LEAST_BFMI}", bfmi >= LEAST_BFMI))
    for key, name in _COUNTED.items():
        if key in found and (solves or key not in _OF_SOLVES):
            rows.append((name, whole(found_number(found, key)), "0", found_number(found, key) == 0))
    rows.append(("chains × draws kept", f"{gate.chains} × {run.posterior.sizes['draw']:,}", "", True))
    if "acceptance_rate" in run.sample_stats:
        rows.append(("mean acceptance", fixed(float(run.sample_stats["acceptance_rate"].mean()), 2), "", True))
    return [dict(zip(("name", "value", "wanted", "good"), row, strict=True)) for row in rows]


def record(run: RunContents) -> list[dict[str, Any]]:
    """What is needed to make the run again, as tables of two columns."""
    facts = run.facts
    study = facts["study"]
    files = [(str(study["file"]), str(study["sha256"]))]
    others = (facts.get("files") or {}).items()
    files += [(str(name), str(digest)) for name, digest in others if str(name) != study["file"]]
    times = (facts.get("times") or {}).items()
    tables = [
        ("Sampling", [(spaced(key), str(value)) for key, value in facts["sampling"].items()]),
        ("Versions", [(str(key), str(value)) for key, value in facts["versions"].items()]),
        ("Times", [(spaced(str(key).removesuffix("_s")), f"{float(value):,.4g} s") for key, value in times]),
        ("Coordinates", [("CRS", run.crs.name), ("given as", str(facts["crs"]))]),
        ("Files and their SHA-256", files),
    ]
    return [{"title": title, "rows": rows} for title, rows in tables if rows]
