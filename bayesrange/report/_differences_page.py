"""The page of what lies between periods: what stands in it, in which words. How it looks is in differences.html."""

from datetime import date
from typing import Any

import pandas as pd

from bayesrange.inference import Differences, Run
from bayesrange.report._contents import read_parameters
from bayesrange.report._differences_figure import differences_figure
from bayesrange.report._format import bar, fixed, interval, known_to, listed, number, percent
from bayesrange.report._page import render
from bayesrange.report._page_parts import day
from bayesrange.report._sentences import prior_share

ONLY_RAW = "only raw rows compare"
"""What a note of the table ends with where scales differ."""

_CLEAR_SHOWN = 8


def differences_page(found: Differences, today: date) -> str:
    """The page as HTML that needs no other file, no network and no script."""
    facts = [run.info for run in found.runs]
    card, table = facts[0]["card"], found.table
    shares = [_prior_shares(run) for run in found.runs]
    names = [str(one["period"]) for one in facts]
    of_run = dict(zip(names, shares, strict=True))
    return render(
        "differences.html",
        head={"study": str(facts[0]["name"]), "card": str(card["name"]), "card_title": str(card.get("title") or "")},
        periods=listed(names),
        written=day(today),
        verdict=_verdict(facts),
        runs=[(str(one["period"]), run.folder.name) for one, run in zip(facts, found.runs, strict=True)],
        clear=[_clear(pair, own) for pair, own in table.groupby(["first", "second"], sort=False)],
        picture=differences_figure(table[_shown(table, found.single)]) if len(table) else None,
        blocks=_blocks(table, found.single, of_run),
        one="animal" if card.get("kind") == "memory" else "group",
        comparable=_comparable(found),
        left_out=found.left_out,
        prob=percent(float(table["prob"].iloc[0])) if len(table) else "",
    )


def _verdict(facts: list[dict[str, Any]]) -> dict[str, Any]:
    """Whether every run converged, and which did not."""
    lacking = [str(one["period"]) for one in facts if not one["converged"]]
    if not lacking:
        return {"converged": True, "sentence": "The chains of every period's run agree.", "problems": []}
    runs = "run" if len(lacking) == 1 else "runs"
    return {
        "converged": False,
        "sentence": f"The {runs} of {listed(lacking)} did not converge: the differences below are not yet results.",
        "problems": [f"{one['period']}: {text}" for one in facts for text in one["diagnostics"]["problems"]],
    }


def _prior_shares(run: Run) -> dict[str, float]:
    """Rows of a run whose interval is in good part the prior's, and that part."""
    table = read_parameters(run.folder / "tables" / "parameters.csv")
    shares = zip(table["parameter"], map(prior_share, table["contraction"]), strict=True)
    return {str(name): share for name, share in shares if share is not None}


def _is_double(table: pd.DataFrame) -> "pd.Series[bool]":
    """Raw rows that say again what a scaled row of the same pair says."""
    known = set(zip(table["first"], table["second"], table["quantity"], strict=True))
    rows = zip(table["first"], table["second"], table["quantity"], strict=True)
    return pd.Series(
        [name.endswith(" raw") and (one, other, name.removesuffix(" raw")) in known for one, other, name in rows],
        index=table.index, dtype=bool,
    )  # fmt: skip


def _shown(table: pd.DataFrame, single: list[bool]) -> "pd.Series[bool]":
    """Rows of the figure: each quantity once, without single groups or animals of a population."""
    return ~_is_double(table) & ~pd.Series(single, index=table.index, dtype=bool)


def _clear(pair: tuple[str, str], table: pd.DataFrame) -> str:
    """How many intervals leave out zero, in a sentence."""
    once = table[~_is_double(table)]
    apart = once[(once["lower"] > 0) | (once["upper"] < 0)]
    chance = f"about {percent(round(1 - float(once['prob'].iloc[0]), 3))} would by chance if nothing had changed"
    begin = f"{pair[0]} to {pair[1]}: {len(apart)} of {len(once)} intervals leave out zero ({chance})"
    if apart.empty:
        return begin + "."
    words = [f"{row.quantity} {'rose' if row.median > 0 else 'fell'}" for row in apart.itertuples()]
    more = f" and {len(words) - _CLEAR_SHOWN} more" if len(words) > _CLEAR_SHOWN else ""
    return f"{begin}: {', '.join(words[:_CLEAR_SHOWN])}{more}."


def _blocks(table: pd.DataFrame, single: list[bool], shares: dict[str, dict[str, float]]) -> list[dict[str, Any]]:
    """A table a pair, and one of its single groups or animals where there are some."""
    blocks = []
    of_one = pd.Series(single, index=table.index, dtype=bool)
    for (first, second), own in table.groupby(["first", "second"], sort=False):
        for alone in (False, True):
            rows = own[of_one[own.index] == alone]
            if len(rows):
                shown = [_row(row, shares[first], shares[second]) for row in rows.to_dict("records")]
                blocks.append({"title": f"{second} minus {first}", "single": alone, "rows": shown})
    return blocks


def _row(row: dict[str, Any], before: dict[str, float], after: dict[str, float]) -> dict[str, Any]:
    lower, median, upper = row["lower"], row["median"], row["upper"]
    known = known_to(lower, median, upper)
    ratios = [number(row[f"ratio_{key}"], row[f"ratio_{key}"]) for key in ("median", "lower", "upper")]
    has_ratio = pd.notna(row["ratio_median"])
    notes = [f"{row['note']}."] if row["note"] else []
    name = str(row["quantity"])
    plain = name.removesuffix(" raw")
    ends = [f"{percent(round(s, 2))} in {row[w]}" for w, own in (("first", before), ("second", after))
            if (s := own.get(plain)) is not None]  # fmt: skip
    if ends and plain == name:
        notes.append(
            f"Sparse data: the posterior sd is {listed(ends)} of the prior’s; the prior, which is alike in both "
            "periods, draws the difference towards 0."
        )
    return {
        "name": name, "unit": row["unit"], "raw": name.endswith(" raw"), "notes": notes,
        "median": number(median, known), "interval": interval(lower, upper, known), "bar": _bar(lower, median, upper),
        "ratio": ratios[0] if has_ratio else "",
        "ratio_interval": f"{ratios[1]} to {ratios[2]}" if has_ratio else "",
        "above": fixed(row["probability_above_zero"], 2),
    }  # fmt: skip


def _bar(lower: float, median: float, upper: float) -> Any:
    """The interval on an axis that holds zero."""
    return bar(lower, median, upper, None, (min(lower, 0.0), max(upper, 0.0)))


def _comparable(found: Differences) -> str:
    """What may be compared, in a sentence."""
    said = [text for text in (*found.table["note"], *found.left_out) if text]
    scales = "The scales frozen at each fit (A₀, the distance over which scent is perceived, each layer’s mean"
    if any(ONLY_RAW in text for text in said):
        return (
            f"{scales} and sd) are not all the same in these runs. Where they differ only rows in raw units are given, "
            "and a note below the row says what differs."
        )
    if said:
        return "Rows compare except where a note below the row, or the list of what was left out, says otherwise."
    return (
        f"{scales} and sd; for tracks the interval between fixes) are the same in these runs, so that every row means "
        "the same in all of them."
    )
