"""The report page of a memory card: what stands in it. How it looks is in memory.html, base.html and the styles.

Every text goes through the template's escaping, so that a name with markup in it stays a name.
"""

from datetime import date
from typing import Any

import pandas as pd

from bayesrange.report._beside_figure import beside
from bayesrange.report._chains import chains_figure, lead_draws
from bayesrange.report._decay import AFTER_H, ANIMAL, MEMORIES, beyond_record
from bayesrange.report._decay_figure import decay_figure
from bayesrange.report._format import fixed, percent, whole
from bayesrange.report._memory_maps import layer_maps, recall_maps, track_maps
from bayesrange.report._memory_sentences import (
    CAUTIONS,
    POOLING,
    TERMS,
    UNMAPPED,
    beyond_one,
    beyond_several,
    counted_steps,
    hours,
    memory_words,
    question,
)
from bayesrange.report._page import render
from bayesrange.report._page_parts import checks, grid, head, priors, record, scales, spaced, verdict
from bayesrange.report._parameters import Gate, by_kind, parameter_blocks, raw_left_out
from bayesrange.report._read_memory import MemoryContents
from bayesrange.report._recall import recall_files
from bayesrange.report._sentences import COUNTS
from bayesrange.report._steps import numerics, step_rows

LEAST_SHOWN = 0.005


def memory_page(run: MemoryContents, decay: pd.DataFrame, today: date) -> str:
    """The page as HTML that needs no other file, no network and no script."""
    chains = int(run.posterior.sizes["chain"])
    gate = Gate(chains) if run.hierarchical else Gate(chains, rhat_of_group=Gate.rhat)
    return render(
        "memory.html",
        head=head(run, today),
        verdict=verdict(run, solves=False),
        question=question(run),
        counted=counted_steps(run),
        fitted=_fitted(run),
        tracks=[made for make in (track_maps, layer_maps) if (made := make(run)) is not None],
        steps=step_rows(run),
        parameters=_parameters(run, gate),
        gate=gate,
        raw_left_out=raw_left_out(run),
        one="animal",
        decay=_decay(run, decay),
        recall=_recall(run),
        beside=beside(run) if run.responses else None,
        numerics=numerics(run),
        chains=chains_figure(run, lead_draws(run)),
        checks=checks(run, gate, solves=False),
        warnings=[str(text) for text in run.facts.get("warnings", [])],
        cautions=CAUTIONS,
        record=record(run),
        prob=percent(run.prob),
    )


def _fitted(run: MemoryContents) -> dict[str, Any]:
    """The card in words, the counts, scales and priors."""
    card = run.facts["card"]
    counts = (run.facts.get("counts") or {}).items()
    return {
        "says": str(card.get("says") or ""),
        "not_when": str(card.get("not_when") or ""),
        "pooling": POOLING.get(card.get("pooling"), ""),
        "terms": [(str(term), TERMS.get(term, "")) for term in card["terms"]],
        "priors": priors(run),
        "references": [str(text) for text in card.get("references") or []],
        "counts": [(COUNTS.get(key, spaced(key)), whole(value)) for key, value in counts],
        "grid": grid(run),
        "scales": _step_scales(run) + scales(run.facts["scales"]),
    }


def _step_scales(run: MemoryContents) -> list[tuple[str, str]]:
    found, at_fit = run.numerics, run.facts["scales"]
    shown = [
        ("interval between fixes", hours(float(found["interval_h"]))),
        ("shortest step with a length of its own", f"{float(found['shortest_step_m']):.3g} m"),
    ]
    if at_fit.get("median_step_m") is not None:
        shown.append(("median step", f"{float(at_fit['median_step_m']):,.4g} m"))
    if run.has_memory:
        fixed_m = found.get("encoding_range_m")
        said = "estimated" if fixed_m is None else f"{float(fixed_m):,.4g} m"
        shown.append(("distance over which a visit is remembered", said))
    return shown


def _parameters(run: MemoryContents, gate: Gate) -> list[dict[str, Any]]:
    """The blocks of rows, with a note beside each decay time whose interval passes the record."""
    title = run.animals[0] if run.lone else "Population"
    blocks = by_kind(parameter_blocks(run, gate, memory_words(run)), title)
    beyond = beyond_record(run)
    for block in blocks:
        if not block["single"]:
            for row in block["rows"]:
                if row.name in beyond:
                    row.notes.append(beyond_one(*beyond[row.name][2:]))
            continue
        base = block["title"].removesuffix(" by animal")
        names = [row.name for row in block["rows"] if f"{base}[{row.name}]" in beyond]
        if names:
            block["notes"].append(beyond_several(names, run.animals))
    return blocks


def _decay(run: MemoryContents, table: pd.DataFrame) -> dict[str, Any] | None:
    """The figure and the table of how memory fades; None for a card without memory."""
    if table.empty:
        return None
    rows = []
    for (memory, level, animal), times in table.groupby(["memory", "level", "animal"], sort=False):
        cells = [_share(row) for row in times.itertuples()]
        rows.append({"memory": memory, "whose": animal or level, "single": level == ANIMAL, "cells": cells})
    longest = max(float(value) for value in run.numerics["record_h"].values())
    past = [name for name, elapsed in AFTER_H.items() if elapsed > longest]
    return {
        "figure": decay_figure(run),
        "rows": rows,
        "times": list(AFTER_H),
        "past": f"{' and '.join(past)} after a visit lies beyond the longest record" if past else "",
        "beyond": _beyond_words(run),
        "unmapped": UNMAPPED,
    }


def _beyond_words(run: MemoryContents) -> list[str]:
    """Whose decay times reach past the record, a sentence for each memory that has any."""
    beyond, said = beyond_record(run).values(), []
    for memory, name in MEMORIES.items():
        named = [whose or "the population" for base, whose, *_ in beyond if base == name]
        if named:
            said.append(f"Decay of the {memory} memory. {beyond_several(named, run.animals)}")
    return said


def _share(row: Any) -> dict[str, str]:
    ends = _share_text(row.share_lower), _share_text(row.share_upper)
    return {"median": _share_text(row.share_median), "interval": " to ".join(dict.fromkeys(ends))}


def _share_text(share: float) -> str:
    """Two decimals; a share too small for them is said to be so, not 0."""
    return fixed(share, 2) if share >= LEAST_SHOWN else "< 0.01"


def _recall(run: MemoryContents) -> dict[str, Any] | None:
    drawn = recall_maps(run)
    return None if drawn is None else {"figure": drawn, "files": list(recall_files(run).items())}
