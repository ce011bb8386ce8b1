"""The report page of a range card: what stands in it, in which words.

How it looks is in range.html, base.html and page.css beside this file. Every text goes through the template's escaping,
so that a name with markup in it stays a name.
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
from bayesrange.report._format import interval, number, percent, whole
from bayesrange.report._page_parts import (
    checks,
    found_number,
    grid,
    head,
    priors,
    record,
    scales,
    spaced,
    stopped,
    verdict,
)
from bayesrange.report._parameters import Gate, parameter_blocks, raw_left_out
from bayesrange.report._places import area_rows, overlap_rows
from bayesrange.report._read import Contents
from bayesrange.report._sentences import CAUTIONS, COUNTS, MEANINGS, POOLING


def render(name: str, **parts: Any) -> str:
    """A template of this folder, filled in; what it asks for and is not given is an error."""
    environment = Environment(
        loader=FileSystemLoader(Path(__file__).parent),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    return environment.get_template(name).render(**parts)


def page(
    run: Contents, ranges: pd.DataFrame, overlaps: pd.DataFrame, outlines: geopandas.GeoDataFrame, today: date
) -> str:
    """The page as HTML that needs no other file, no network and no script."""
    gate = Gate(int(run.posterior.sizes["chain"]))
    return render(
        "range.html",
        head=head(run, today),
        verdict=verdict(run),
        fitted=_fitted(run),
        parameters=parameter_blocks(run, gate),
        gate=gate,
        raw_left_out=raw_left_out(run),
        one="group",
        maps=[made for make in (overview, each_group, further_layers) if (made := make(run, outlines)) is not None],
        areas=area_rows(run, ranges, group_hues(run)),
        overlaps=overlap_rows(overlaps),
        chains=chains_figure(run),
        checks=checks(run, gate),
        warnings=[str(text) for text in run.facts.get("warnings", [])],
        cautions=CAUTIONS,
        record=record(run),
        prob=percent(run.prob),
    )


def _fitted(run: Contents) -> dict[str, Any]:
    """The card in words, the counts, and how much independent information the fixes hold."""
    card, effective = run.facts["card"], run.facts.get("effective") or {}
    animals = [
        (
            str(row["animal"]),
            whole(row["fixes"]),
            number(found_number(row, "crossing_time_h"), 1.0),
            whole(row["effective"]),
        )
        for row in effective.get("animals") or []
    ]
    return {
        "says": str(card.get("says") or ""),
        "not_when": str(card.get("not_when") or ""),
        "pooling": POOLING.get(card.get("pooling"), ""),
        "terms": [(str(term), MEANINGS.get(term, "")) for term in card["terms"]],
        "priors": priors(run),
        "references": [str(text) for text in card.get("references") or []],
        "counts": [
            (COUNTS.get(key, spaced(key)), whole(value)) for key, value in (run.facts.get("counts") or {}).items()
        ],
        "effective": stopped(str(effective.get("sentence") or "")),
        "why": _why(effective),
        "animals": animals,
        "grid": grid(run),
        "scales": scales(run.facts["scales"]),
    }


def _why(effective: dict[str, Any]) -> str:
    """Why the information is less than the fixes; empty if fixes were taken as independent."""
    times = [found_number(row, "crossing_time_h") for row in effective.get("animals") or []]
    known = [value for value in times if np.isfinite(value) and value > 0]
    if not known or found_number(effective, "effective") >= found_number(effective, "fixes"):
        return ""
    span = number(min(known), min(known)) if min(known) == max(known) else interval(min(known), max(known), min(known))
    return (
        f"Why fewer: an animal needs a while to cross its range (crossing time {span} h here), and fixes closer "
        "together than that partly repeat each other. Each fix is weighted accordingly; without it every interval "
        "would be too narrow."
    )
