"""The parameters table: rows that lead, rows of single groups, and the notes that stand beside them."""

from dataclasses import dataclass, field
from math import isfinite
from typing import Any

from bayesrange.report._format import Bar, bar, fixed, interval, known_to, number, whole
from bayesrange.report._read import Contents
from bayesrange.report._sentences import MEANINGS, NOTES, prior_share, sparse_groups_note, sparse_note


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
    notes: list[str] = field(default_factory=list)


def parameter_blocks(run: Contents, gate: Gate) -> list[dict[str, Any]]:
    """Blocks of rows: shared or population parameters, then a block for each parameter that groups have singly."""
    lead: list[Row] = []
    single: dict[str, list[dict[str, Any]]] = {}
    told: set[str] = set()
    for record in run.parameters.to_dict("records"):
        name = str(record["parameter"])
        base, inner = split_name(name)
        of_what, group = _of_group(base, inner, run)
        if group is not None:
            if not _is_raw(name):
                single.setdefault(of_what, []).append({**record, "parameter": group})
            continue
        row = _row(record, gate, "" if _is_raw(name) else _meaning(name, base))
        if base in NOTES and base not in told and not _is_raw(name) and not _is_spread(name):
            told.add(base)
            row.notes.append(NOTES[base])
        if row.prior_share is not None:
            row.notes.append(sparse_note(name, row.prior_share))
        lead.append(row)
    blocks = [{"title": "Parameters", "meaning": "", "rows": lead, "notes": [], "single": False}] if lead else []
    return blocks + [_group_block(of_what, records, gate) for of_what, records in single.items()]


def raw_left_out(run: Contents) -> bool:
    """Whether raw rows of single groups stand in the table only."""
    names = run.parameters["parameter"].astype(str)
    return any(_is_raw(name) and _of_group(*split_name(name), run)[1] is not None for name in names)


def split_name(name: str) -> tuple[str, str]:
    """The base of a table's parameter name and what stands in its brackets.

    >>> split_name("resource[earthworms, North] raw"), split_name("avoidance raw")
    (('resource', 'earthworms, North'), ('avoidance', ''))
    """
    base, bracket, rest = name.partition("[")
    if not bracket or "]" not in rest:
        return name.split(" ")[0].split(":")[0], ""
    return base, rest[: rest.rindex("]")]


def _of_group(base: str, inner: str, run: Contents) -> tuple[str, str | None]:
    """The parameter and the group: `localising[North]` is one group's, `resource[earthworms]` none's.

    A layer's name is looked up, not split at the comma, which may be part of a name.
    """
    if not inner or (base == "resource" and inner in run.layers):
        return base, None
    for layer in run.layers if base == "resource" else ():
        if inner.startswith(layer + ", "):
            return f"{base}[{layer}]", inner.removeprefix(layer + ", ")
    return base, inner


def _group_block(of_what: str, records: list[dict[str, Any]], gate: Gate) -> dict[str, Any]:
    """All groups' rows of one parameter, drawn on one axis so that groups compare."""
    axis = (min(float(record["lower"]) for record in records), max(float(record["upper"]) for record in records))
    rows = [_row(record, gate, "", axis) for record in records]
    meaning = _meaning(of_what, of_what.partition("[")[0])
    sparse = {row.name: row.prior_share for row in rows if row.prior_share is not None}
    notes = [sparse_groups_note(sparse)] if sparse else []
    return {"title": f"{of_what} by group", "meaning": meaning, "rows": rows, "notes": notes, "single": True}


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
    )


def _prior(lower: float, upper: float) -> str:
    """The prior's interval, each end to two digits of its own: the lower may be near 0 and is not 0."""
    if not (isfinite(lower) and isfinite(upper)):
        return "–"
    return f"{number(lower, abs(lower))} to {number(upper, abs(upper))}"


def _meaning(name: str, base: str) -> str:
    if _is_spread(name):
        return "sd between groups, on the unconstrained scale"
    if ":" in name:
        return "coefficient of a covariate, on the unconstrained scale"
    return MEANINGS.get(base, "")
