"""Which model cards the data can carry, and what speaks against the others.

Range cards need groups with ranges of at least ten cells; memory cards steps at one interval. Nothing here says that a
card is right, only that there is something to fit it to.
"""

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Protocol, runtime_checkable

import pandas as pd

FEWEST_CELLS, BETTER_CELLS = 10, 20
FEWEST_STEPS = 50  # usable steps of an animal, as memory cards ask for
_FEW_EFFECTIVE = 10  # independent fixes of a group, below which its range is hardly told
_SHARE_USABLE = 0.5
_SCENT = {"avoidance", "retreat"}


@runtime_checkable
class CardLike(Protocol):
    """What is asked of a model card."""

    @property
    def name(self) -> str:
        """Its name."""

    @property
    def kind(self) -> str:
        """Range or memory."""

    @property
    def terms(self) -> tuple[str, ...]:
        """Its terms."""


@dataclass(frozen=True)
class Evidence:
    """What the cards are judged by.

    Attributes:
        groups: group, fixes, effective, across_m, cells (across; NaN if no cell size is given), home (given or not).
        animals: animal, steps, usable (steps of the nominal interval), step_m (median of usable steps), error_m,
            verdict (of settling).
        interval_h: nominal interval.
        area: whether there is one.
        layers: names of the layers that are no no-go ground.
        loose: fixes that name no group.
    """

    groups: pd.DataFrame
    animals: pd.DataFrame
    interval_h: float
    area: bool
    layers: list[str]
    loose: int


@dataclass(frozen=True)
class Carried:
    """Whether a card can be fitted.

    Attributes:
        card: its name.
        verdict: "yes", "not yet" (something must be given first) or "no" (the data do not hold it).
        against: why not.
        mind: what to mind if it is fitted.
    """

    card: str
    verdict: str
    against: list[str]
    mind: list[str]


def carried(evidence: Evidence, cards: Iterable[CardLike]) -> list[Carried]:
    """A verdict on each card, in the order given."""
    return [_judged(evidence, card) for card in cards]


def _judged(evidence: Evidence, card: CardLike) -> Carried:
    never, missing, mind = _memory(evidence) if card.kind == "memory" else _range(evidence, card)
    if not evidence.area:
        missing.append("there is no study area yet: [study] area")
    if "resources" in card.terms and not evidence.layers:
        missing.append("there is no layer yet: a section [layers.NAME]")
    return Carried(card.name, "no" if never else "not yet" if missing else "yes", never + missing, mind)


def _range(evidence: Evidence, card: CardLike) -> tuple[list[str], list[str], list[str]]:
    never, missing, mind = [], [], []
    groups = evidence.groups
    if groups.empty:
        missing.append("no fix names a group: fill in the column that [fixes] group names")
    elif evidence.loose:
        missing.append(f"{_fixes(evidence.loose)} without a group: fill in the column that [fixes] group names")
    if _SCENT & set(card.terms) and len(groups) == 1:
        never.append("it is about neighbours, and there is one group")
    coarse = groups[groups["cells"] < FEWEST_CELLS]
    if len(coarse):
        worst = coarse.loc[coarse["cells"].idxmin()]
        missing.append(
            f'the range of "{worst["group"]}" is {worst["cells"]:.1f} cells across (of {len(groups)} groups '
            f"{len(coarse)} have fewer than {FEWEST_CELLS}): cell_m at most {worst['across_m'] / FEWEST_CELLS:.0f}, "
            f"better {worst['across_m'] / BETTER_CELLS:.0f}"
        )
    homeless = groups[(groups["fixes"] == 0) & ~groups["home"]]
    if len(homeless):
        missing.append(f'the group "{homeless["group"].iloc[0]}" has neither fixes nor a home centre')
    few = groups[(groups["fixes"] > 0) & (groups["effective"] < _FEW_EFFECTIVE)]
    if len(few):
        mind.append(
            f"{_listed(few['group'])}: fewer than {_FEW_EFFECTIVE} independent fixes, so the prior will say much of it"
        )
    unsettled = evidence.animals[evidence.animals["verdict"].isin(["not settled", "migrating"])]
    if len(unsettled):
        mind.append(f"ranges are taken as settled, and not so are {_listed(unsettled['animal'])}: think of [periods]")
    return never, missing, mind


def _memory(evidence: Evidence) -> tuple[list[str], list[str], list[str]]:
    never: list[str] = []
    missing: list[str] = []
    mind: list[str] = []
    animals = evidence.animals
    short = animals[animals["usable"] < FEWEST_STEPS]
    told = f"{FEWEST_STEPS} steps of {evidence.interval_h:.3g} h"
    if len(short) == len(animals):
        never.append(f"no animal has {told}, the commonest interval")
    elif len(short):
        missing.append(f"{_listed(short['animal'])} fewer than {told}: take their fixes out, or set [model] interval_h")
    share = animals["usable"].sum() / max(int(animals["steps"].sum()), 1)
    if share < _SHARE_USABLE and not never:
        mind.append(f"only {share:.0%} of the intervals are {evidence.interval_h:.3g} h; the others are not used")
    rough = animals[animals["step_m"] < 2 * animals["error_m"]]
    if len(rough):
        mind.append(f"the median step is less than two standard deviations of the error: {_listed(rough['animal'])}")
    return never, missing, mind


def _fixes(number: int) -> str:
    return "1 fix is" if number == 1 else f"{number:,} fixes are"


def _listed(names: pd.Series) -> str:
    """The first three names and how many more."""
    shown = ", ".join(f'"{name}"' for name in names[:3])
    return shown if len(names) <= 3 else f"{shown} and {len(names) - 3} more"
