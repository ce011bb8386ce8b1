"""The parameters table: rows that lead, rows of single groups, and the notes that stand beside them."""

from dataclasses import dataclass, field, replace
from math import isfinite
from typing import Any

from bayesrange.report._contents import RunContents
from bayesrange.report._format import Bar, bar, fixed, interval, known_to, number, whole
from bayesrange.report._sentences import RANGE_WORDS, Words, prior_share, sparse_groups_note, sparse_note

READABLE_HOURS = 72.0


@dataclass(frozen=True)
class Gate:
    """What counts as converged: R-hat below a limit, wider for single groups, and effective sample size of all chains.

    Vehtari et al. 2021, Bayesian Analysis 16:667; the limit for single groups is common practice.
    """

    chains: int
    rhat: float = 1.01
    rhat_of_group: float = 1.05

    @property
    def least_ess(self) -> int:
        """100 a chain."""
        return 100 * self.chains


@dataclass(frozen=True)
class Row:
    """One parameter as it stands in the page; `weak_…` if it misses the gate."""

    name: str
    meaning: str
    unit: str
    median: str
    interval: str
    ess: str
    rhat: str
    prior: str
    contraction: str
    bar: Bar | None
    raw: bool
    weak_ess: bool
    weak_rhat: bool
    prior_share: float | None
    days: tuple[str, str] | None = None
    notes: list[str] = field(default_factory=list)


def parameter_blocks(run: RunContents, gate: Gate, words: Words = RANGE_WORDS) -> list[dict[str, Any]]:
    """Blocks of rows: shared or population parameters, then a block for each that groups or animals have singly."""
    lead: list[Row] = []
    single: dict[str, list[dict[str, Any]]] = {}
    told: set[str] = set()
    for record in run.parameters.to_dict("records"):
        name = str(record["parameter"])
        base, inner = split_name(name)
        of_what, one = run.whose(base, inner)
        if one is not None:
            if not _is_raw(name):
                single.setdefault(of_what, []).append({**record, "parameter": one})
            continue
        row = _row(record, gate, "" if _is_raw(name) else _meaning(name, base, words))
        if base in words.notes and base not in told and not _is_raw(name) and not _is_spread(name):
            told.add(base)
            row.notes.append(words.notes[base])
        if row.prior_share is not None:
            row.notes.append(sparse_note(name, row.prior_share))
        lead.append(row)
    blocks = [{"title": "Parameters", "meaning": "", "rows": lead, "notes": [], "single": False}] if lead else []
    for of_what, records in single.items():
        blocks.append(_single_block(of_what, records, gate, words, told))
    return blocks


def by_kind(blocks: list[dict[str, Any]], title: str) -> list[dict[str, Any]]:
    """The leading block taken apart: the population first, then its spreads; effects of covariates after the animals.

    What a spread or an effect is then stands once, above its rows.

    Args:
        blocks: as `parameter_blocks` makes them.
        title: of the first block.
    """
    kinds: dict[str, list[Row]] = {title: [], "Spread": [], "Effects of covariates": []}
    for row in (row for block in blocks if not block["single"] for row in block["rows"]):
        kinds["Spread" if _is_spread(row.name) else "Effects of covariates" if ":" in row.name else title].append(row)
    made: dict[str, list[dict[str, Any]]] = {}
    for name, rows in kinds.items():
        meaning = rows[0].meaning if rows and name != title else ""
        rows = [replace(row, meaning="") for row in rows] if meaning else rows
        made[name] = [{"title": name, "meaning": meaning, "rows": rows, "notes": [], "single": False}] if rows else []
    single = [block for block in blocks if block["single"]]
    return made[title] + made["Spread"] + single + made["Effects of covariates"]


def raw_left_out(run: RunContents) -> bool:
    """Whether raw rows of single groups or animals stand in the table only."""
    names = run.parameters["parameter"].astype(str)
    return any(_is_raw(name) and run.whose(*split_name(name))[1] is not None for name in names)


def split_name(name: str) -> tuple[str, str]:
    """The base of a table's parameter name and what stands in its brackets.

    >>> split_name("resource[earthworms, North] raw"), split_name("avoidance raw")
    (('resource', 'earthworms, North'), ('avoidance', ''))
    """
    base, bracket, rest = name.partition("[")
    if not bracket or "]" not in rest:
        return name.split(" ")[0].split(":")[0], ""
    return base, rest[: rest.rindex("]")]


def _single_block(
    of_what: str, records: list[dict[str, Any]], gate: Gate, words: Words, told: set[str]
) -> dict[str, Any]:
    """All groups' or animals' rows of one parameter, drawn on one axis so that they compare."""
    axis = (min(float(record["lower"]) for record in records), max(float(record["upper"]) for record in records))
    rows = [_row(record, gate, "", axis) for record in records]
    base = of_what.partition("[")[0]
    notes = [] if base in told or base not in words.notes else [words.notes[base]]
    told.add(base)
    sparse = {row.name: row.prior_share for row in rows if row.prior_share is not None}
    notes += [sparse_groups_note(sparse)] if sparse else []
    return {
        "title": f"{of_what} by {words.one}",
        "meaning": _meaning(of_what, base, words),
        "rows": rows,
        "notes": notes,
        "single": True,
    }


def _is_raw(name: str) -> bool:
    return name.endswith(" raw")


def _is_spread(name: str) -> bool:
    return name.endswith(" spread")


def _row(record: dict[str, Any], gate: Gate, meaning: str, axis: tuple[float, float] | None = None) -> Row:
    """A row; with an axis it is a group's, and drawn without the prior."""
    name = str(record["parameter"])
    raw = axis is None and _is_raw(name)
    lower, median, upper = (float(record[key]) for key in ("lower", "median", "upper"))
    prior = (float(record["prior_lower"]), float(record["prior_upper"]))
    contraction = float(record["contraction"])
    ess, rhat = min(float(record["ess_bulk"]), float(record["ess_tail"])), float(record["rhat"])
    known = known_to(lower, median, upper)
    split = not rhat < (
        gate.rhat if axis is None else gate.rhat_of_group
    )  # chains apart make a wide interval without any want of data
    return Row(
        name=name,
        meaning=meaning,
        unit=str(record["unit"]),
        median=number(median, known),
        interval=interval(lower, upper, known),
        ess=whole(ess),
        rhat=fixed(rhat, 3),
        prior=_prior(*prior),
        contraction=fixed(contraction, 2),
        bar=bar(lower, median, upper, None if axis else prior, axis),
        raw=raw,
        weak_ess=not ess >= gate.least_ess,
        weak_rhat=split,
        prior_share=None if raw or split else prior_share(contraction),
        days=_in_days(lower, median, upper) if str(record["unit"]) == "h" else None,
    )


def _in_days(lower: float, median: float, upper: float) -> tuple[str, str] | None:
    """Median and interval in days where hours are hard to read: above 72 h."""
    if not median > READABLE_HOURS:
        return None
    known = known_to(lower, median, upper) / 24
    return f"{number(median / 24, known)} days", f"{interval(lower / 24, upper / 24, known)} days"


def _prior(lower: float, upper: float) -> str:
    """The prior's interval, each end to two digits of its own: the lower may be near 0 and is not 0."""
    if not (isfinite(lower) and isfinite(upper)):
        return "–"
    return f"{number(lower, abs(lower))} to {number(upper, abs(upper))}"


def _meaning(name: str, base: str, words: Words) -> str:
    if _is_spread(name):
        return f"sd between {words.one}s, on the unconstrained scale"
    if ":" in name:
        return "coefficient of a covariate, on the unconstrained scale"
    return words.meanings.get(base, "")
