"""The report page: what stands in it, in which words. How it looks is in page.html and page.css beside this file.

Every text goes through the template's escaping, so that a name with markup in it stays a name.
"""

from datetime import date
from pathlib import Path
from typing import Any

import geopandas
import numpy as np
import pandas as pd
from jinja2 import Environment, FileSystemLoader, StrictUndefined

from bayesrange.report._chains import chains_figure
from bayesrange.report._figures import each_group, further_layers, group_hues, overview
from bayesrange.report._format import fixed, interval, number, percent, whole
from bayesrange.report._parameters import Gate, parameter_blocks, raw_left_out, split_name
from bayesrange.report._places import area_rows, overlap_rows
from bayesrange.report._read import Contents
from bayesrange.report._sentences import CAUTIONS, COUNTS, MEANINGS, POOLING

# Betancourt 2016, arXiv:1604.00695.
LEAST_BFMI = 0.3
_COUNTED = {
    "divergences": "divergent transitions",
    "failed_solves": "of these, where no steady state was found",
    "two_states": "draws with a second steady state",
    "deepest_trees": "transitions at the deepest tree",
}


def page(
    run: Contents, ranges: pd.DataFrame, overlaps: pd.DataFrame, outlines: geopandas.GeoDataFrame, today: date
) -> str:
    """The page as HTML that needs no other file, no network and no script."""
    template = Environment(
        loader=FileSystemLoader(Path(__file__).parent),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    ).get_template("page.html")
    gate = Gate(int(run.posterior.sizes["chain"]))
    return template.render(
        head=_head(run, today),
        verdict=_verdict(run),
        fitted=_fitted(run),
        parameters=parameter_blocks(run, gate),
        gate=gate,
        raw_left_out=raw_left_out(run),
        maps=[made for make in (overview, each_group, further_layers) if (made := make(run, outlines)) is not None],
        areas=area_rows(run, ranges, group_hues(run)),
        overlaps=overlap_rows(overlaps),
        chains=chains_figure(run),
        checks=_checks(run, gate),
        warnings=[str(text) for text in run.facts.get("warnings", [])],
        cautions=CAUTIONS,
        record=_record(run),
        prob=percent(run.prob),
    )


def _head(run: Contents, today: date) -> dict[str, str]:
    period = run.facts.get("period")
    fitted = str(run.facts.get("finished") or "")[:10]
    return {
        "study": str(run.facts["name"]),
        "card": str(run.facts["card"]["name"]),
        "card_title": str(run.facts["card"].get("title") or ""),
        "period": _words(period) if period else "",
        "tracked": _tracked(run),
        "fitted": _day(date.fromisoformat(fitted)) if fitted else "",
        "written": _day(today),
    }


def _tracked(run: Contents) -> str:
    if "time" not in run.constant or not run.constant["time"].size:
        return ""
    times = pd.to_datetime(run.constant["time"].values)
    return f"{_day(times.min().date())} to {_day(times.max().date())}"


def _day(when: date) -> str:
    return f"{when.day} {when:%B %Y}"


def _verdict(run: Contents) -> dict[str, Any]:
    """Converged or not, in one sentence, with the problems that inference wrote down."""
    found = run.facts["diagnostics"]
    converged = bool(run.facts["converged"])
    numbers = (
        f"largest R-hat {fixed(_number(found, 'max_rhat'), 3)}, smallest effective sample size "
        f"{whole(_number(found, 'min_ess_bulk'))} (bulk) and {whole(_number(found, 'min_ess_tail'))} (tail), "
        f"{_counted(found.get('divergences', 0), 'divergence')}, "
        f"{_counted(found.get('failed_solves', 0), 'failed solve')}"
    )
    sentence = (
        f"The chains agree: {numbers}."
        if converged
        else f"The chains do not agree on one posterior, so the numbers below are not yet results: {numbers}."
    )
    problems = [str(text) for text in found.get("problems", [])]
    return {"converged": converged, "sentence": sentence, "problems": problems}


def _counted(count: int, thing: str) -> str:
    return f"no {thing}s" if not count else f"{count:,} {thing}{'' if count == 1 else 's'}"


def _number(facts: dict[str, Any], key: str) -> float:
    value = facts.get(key)
    return float("nan") if value is None else float(value)


def _fitted(run: Contents) -> dict[str, Any]:
    """The card in words, the counts, and how much independent information the fixes hold."""
    card, effective = run.facts["card"], run.facts.get("effective") or {}
    animals = [
        (str(row["animal"]), whole(row["fixes"]), number(_number(row, "crossing_time_h"), 1.0), whole(row["effective"]))
        for row in effective.get("animals") or []
    ]
    return {
        "says": str(card.get("says") or ""),
        "not_when": str(card.get("not_when") or ""),
        "pooling": POOLING.get(card.get("pooling"), ""),
        "terms": [(str(term), MEANINGS.get(term, "")) for term in card["terms"]],
        "priors": _priors(run),
        "references": [str(text) for text in card.get("references") or []],
        "counts": [
            (COUNTS.get(key, _words(key)), whole(value)) for key, value in (run.facts.get("counts") or {}).items()
        ],
        "effective": _stopped(str(effective.get("sentence") or "")),
        "why": _why(effective),
        "animals": animals,
        "grid": _grid(run),
        "scales": _scales(run.facts["scales"]),
    }


def _grid(run: Contents) -> str:
    habitable_km2 = float(run.habitable.sum()) * run.cell_m**2 / 1e6
    cells = f"{run.x_m.size} × {run.y_m.size} cells of {run.cell_m:g} m"
    return f"{cells}, {habitable_km2:,.4g} km² habitable, {run.crs.name}"


def _priors(run: Contents) -> list[tuple[str, str, str]]:
    """Name, prior in words, and why this one, or that the study file changed it; parameters of this fit only."""
    card = run.facts["card"]
    fitted = {split_name(str(name))[0] for name in run.parameters["parameter"]}
    reasons, changed = card.get("prior_reasons") or {}, card.get("changed_priors") or []
    rows = []
    for name, words in (card.get("priors") or {}).items():
        if name not in fitted:
            continue
        why = str(reasons.get(name) or "")
        rows.append((str(name), str(words), f"Set in the study file. {why}".strip() if name in changed else why))
    return rows


def _stopped(sentence: str) -> str:
    return sentence if not sentence or sentence.endswith((".", "!", "?")) else sentence + "."


def _why(effective: dict[str, Any]) -> str:
    """Why the information is less than the fixes; empty if fixes were taken as independent."""
    times = [_number(row, "crossing_time_h") for row in effective.get("animals") or []]
    known = [value for value in times if np.isfinite(value) and value > 0]
    if not known or _number(effective, "effective") >= _number(effective, "fixes"):
        return ""
    span = number(min(known), min(known)) if min(known) == max(known) else interval(min(known), max(known), min(known))
    return (
        f"Why fewer: an animal needs a while to cross its range (crossing time {span} h here), and fixes closer "
        "together than that partly repeat each other. Each fix is weighted accordingly; without it every interval "
        "would be too narrow."
    )


def _words(key: Any) -> str:
    return str(key).replace("_", " ")


def _scales(scales: dict[str, Any]) -> list[tuple[str, str]]:
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


def _checks(run: Contents, gate: Gate) -> list[dict[str, Any]]:
    """What was checked: name, value, what it should be, whether it is."""
    found = run.facts["diagnostics"]
    rhat = _number(found, "max_rhat")
    rows = [("largest R-hat", fixed(rhat, 3), f"below {gate.rhat}", rhat < gate.rhat)]
    for key, name in (("min_ess_bulk", "bulk"), ("min_ess_tail", "tail")):
        ess = _number(found, key)
        wanted = f"at least {gate.least_ess}"
        rows.append((f"smallest effective sample size, {name}", whole(ess), wanted, ess >= gate.least_ess))
    if "min_bfmi" in found:
        bfmi = _number(found, "min_bfmi")
        rows.append(("smallest energy BFMI", fixed(bfmi, 2), f"at least {LEAST_BFMI}", bfmi >= LEAST_BFMI))
    for key, name in _COUNTED.items():
        if key in found:
            rows.append((name, whole(_number(found, key)), "0", _number(found, key) == 0))
    rows.append(("chains × draws kept", f"{gate.chains} × {run.posterior.sizes['draw']:,}", "", True))
    if "acceptance_rate" in run.sample_stats:
        rows.append(("mean acceptance", fixed(float(run.sample_stats["acceptance_rate"].mean()), 2), "", True))
    return [dict(zip(("name", "value", "wanted", "good"), row, strict=True)) for row in rows]


def _record(run: Contents) -> list[dict[str, Any]]:
    """What is needed to make the run again, as tables of two columns."""
    facts = run.facts
    study = facts["study"]
    files = [(str(study["file"]), str(study["sha256"]))]
    others = (facts.get("files") or {}).items()
    files += [(str(name), str(digest)) for name, digest in others if str(name) != study["file"]]
    times = (facts.get("times") or {}).items()
    tables = [
        ("Sampling", [(_words(key), str(value)) for key, value in facts["sampling"].items()]),
        ("Versions", [(str(key), str(value)) for key, value in facts["versions"].items()]),
        ("Times", [(_words(str(key).removesuffix("_s")), f"{float(value):,.4g} s") for key, value in times]),
        ("Coordinates", [("CRS", run.crs.name), ("given as", str(facts["crs"]))]),
        ("Files and their SHA-256", files),
    ]
    return [{"title": title, "rows": rows} for title, rows in tables if rows]
