"""The page of a look at the data: what stands in it, in which words. How it looks is in screening.html and page.css."""

from collections.abc import Iterable
from datetime import date
from typing import Any

import numpy as np
import pandas as pd

from bayesrange.report._format import percent, whole
from bayesrange.report._page import render
from bayesrange.report._screening_figures import calendar, displacements, overview, rates, success_map
from bayesrange.screening import FEWEST, TOGETHER, Carried, Screening
from bayesrange.study import DROPPABLE, FLAGS

_MOST_PAIRS, _MOST_PERIODS = 10, 14


def screening_page(found: Screening, cards: Iterable[Carried], today: date) -> str:
    """The page as HTML that needs no other file, no network and no script."""
    study, counts = found.study, found.counts
    drawn = (calendar, rates, success_map, displacements)
    pictures = [made for make in drawn if (made := make(found)) is not None]
    first, last = study.fixes["time"].min(), study.fixes["time"].max()
    return render(
        "screening.html",
        title=study.settings.study.name,
        tracked=f"{first.day} {first:%B %Y} to {last.day} {last:%B %Y}",
        written=f"{today.day} {today:%B %Y}",
        flagged=int(found.flags["fix"].nunique()),
        fixes=whole(len(study.fixes)),
        summary=summary(found),
        flags=[_flag_row(found, name, number) for name, number in counts.items() if number or name != "bearing"],
        dropping=_dropping(found),
        map=overview(found),
        pictures=pictures,
        animals=_animal_rows(found.animals),
        columns=found.by_period.columns[:_MOST_PERIODS].tolist(),
        periods=[(group, [whole(n) for n in row[:_MOST_PERIODS]]) for group, *row in found.by_period.itertuples()],
        periods_left=max(found.by_period.shape[1] - _MOST_PERIODS, 0),
        by=("period" if study.spans else "month"),
        classes=[
            (r["layer"], r["class"], whole(r["fixes"]), whole(r["failed"]), percent(r["success"]))
            for r in found.by_class[found.by_class["fixes"] + found.by_class["failed"] > 0].to_dict("records")
        ],
        pairs=_pair_rows(found.pairs),
        pairs_all=len(found.pairs),
        fewest=FEWEST,
        cards=list(cards),
        warnings=study.warnings,
    )


def summary(found: Screening) -> list[str]:
    """The sentences that stand first, on the page and on screen."""
    study, animals = found.study, found.animals
    failed = int(study.counts.get("failed", 0))
    said = [
        f"{len(study.fixes):,} fixes of {len(animals)} animal{'s' if len(animals) != 1 else ''}"
        + (f" in {len(found.groups)} groups" if len(found.groups) else "")
        + (f"; {failed:,} more attempts gave no position" if failed else "")
        + "."
    ]
    effective = float(animals["effective"].sum())
    said.append(
        f"{int(animals['sound'].sum()):,} fixes carry the information of about {effective:,.0f} independent ones, "
        "because an animal's next fix is near its last."
    )
    steps = int(animals["steps"].sum())
    if steps:
        share = animals["usable"].sum() / steps
        said.append(
            f"The commonest interval is {_interval(found.interval_h)}; {percent(round(share, 2))} of the steps have it."
        )
    for verdict, words in (("not settled", "not settled"), ("migrating", "migrating")):
        who = animals.loc[animals["verdict"] == verdict, "animal"]
        if len(who):
            said.append(f"{words.capitalize()}: {_listed(who)}.")
    later = animals[(animals["verdict"] == "settled") & animals["settled"].notna()]
    if len(later):
        when = [f"{a} from {pd.Timestamp(t):%Y-%m-%d}" for a, t in zip(later["animal"], later["settled"], strict=True)]
        said.append(f"Settled only later: {_listed(pd.Series(when))}.")
    rhythm = int((animals["rhythm"] == "24-hour rhythm").sum())
    if rhythm:
        said.append(f"A 24-hour rhythm in the steps of {rhythm} of {len(animals)} animals.")
    together = found.pairs[found.pairs["share"] >= TOGETHER]
    if len(together):
        pairs = together["first"] + " and " + together["second"]
        said.append(f"Travelling together: {_listed(pairs)}.")
    return said


def _interval(hours: float) -> str:
    return f"{60 * hours:.3g} min" if hours < 1 else f"{hours:.3g} h"


def _listed(items: "pd.Series[str]") -> str:
    shown = ", ".join(str(item) for item in items[:5])
    return shown if len(items) <= 5 else f"{shown} and {len(items) - 5} more"


def _flag_row(found: Screening, name: str, number: int) -> dict[str, Any]:
    own = found.table[found.table["flag"] == name]
    flag = FLAGS[name]
    drop = found.study.settings.fixes.drop
    dropped = "yes" if drop is not None and name in drop.flags else "no" if flag.droppable else "cannot be"
    return {
        "name": name, "number": whole(number), "animals": whole(own["animal"].nunique()) if number else "",
        "values": _range(own["value"], flag.unit), "limits": _range(own["limit"], flag.unit),
        "meaning": flag.meaning, "dropped": dropped, "none": number == 0,
    }  # fmt: skip


def _range(values: "pd.Series[float]", unit: str) -> str:
    """Smallest to largest value with the unit; "" without any."""
    known = values[np.isfinite(values)]
    if known.empty:
        return ""
    low, high = f"{known.min():,.3g}", f"{known.max():,.3g}"
    plain = [f"{v:,.0f}" if v >= 1000 else text for v, text in ((known.min(), low), (known.max(), high))]
    return f"{plain[0]} {unit}" if plain[0] == plain[1] else f"{plain[0]} to {plain[1]} {unit}"


def _dropping(found: Screening) -> str:
    """The lines of the study file that would drop what was found, or that do."""
    drop = found.study.settings.fixes.drop
    wanted = [name for name in DROPPABLE if found.counts[name]]
    if drop is not None:
        wanted = [name for name in DROPPABLE if name in drop.flags]
    return f"flags = [{', '.join(f'"{name}"' for name in wanted)}]" if wanted else ""


def _animal_rows(animals: pd.DataFrame) -> list[dict[str, str]]:
    rows = []
    for one in animals.to_dict("records"):
        tried = one["sound"] + one["failed"]
        settled = f"from {pd.Timestamp(one['settled']):%Y-%m-%d}" if pd.notna(one["settled"]) else ""
        rows.append(
            {
                "animal": one["animal"], "group": one["group"], "fixes": whole(one["sound"]),
                "success": percent(one["sound"] / tried) if one["failed"] else "",
                "days": f"{one['days']:,.0f}",
                "interval": _or_dash(one["interval_h"], _interval), "gap": _or_dash(one["longest_gap_h"], _interval),
                "usable": whole(one["usable"]), "step": _or_dash(one["step_m"], whole),
                "crossing": _or_dash(one["crossing_time_h"], lambda h: f"{h:,.3g}"),
                "effective": whole(one["effective"]), "verdict": f"{one['verdict']} {settled}".strip(),
                "rhythm": {"24-hour rhythm": "yes", "no 24-hour rhythm": "no"}.get(one["rhythm"], "–"),
            }
        )  # fmt: skip
    return rows


def _or_dash(value: float, words: Any) -> str:
    return words(value) if np.isfinite(value) else "–"


def _pair_rows(pairs: pd.DataFrame) -> list[tuple[str, str, str, str, bool]]:
    return [
        (p.first, p.second, whole(p.simultaneous), percent(p.share), p.share >= TOGETHER)
        for p in pairs.head(_MOST_PAIRS).itertuples(index=False)
        if p.near
    ]
