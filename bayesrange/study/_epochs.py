"""Groups that come and go: the fitted time cut into epochs, in each of which the same groups are there.

A group is there from the first moment of its `from` to before the end of its `until`; blanks are open.
"""

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import pandas as pd
from jaxtyping import Bool, Float, Int
from numpy.typing import NDArray

from bayesrange._errors import StudyError
from bayesrange.study._periods import Span
from bayesrange.study._tables import counted, first_few


@dataclass(frozen=True)
class Epochs:
    """Epochs of the fitted time, in order.

    Attributes:
        borders: beginnings of the epochs and the end of the last, UTC.
        present: which groups are there in each epoch.
    """

    borders: tuple[pd.Timestamp, ...]
    present: Bool[NDArray, "epochs groups"]

    @cached_property
    def _distinct(self) -> tuple[NDArray, NDArray]:
        somebody = np.unique(self.present[self.present.any(axis=1)], axis=0)[::-1]
        return somebody, np.array([_row(somebody, one) for one in self.present])

    @property
    def sets(self) -> Bool[NDArray, "sets groups"]:
        """The distinct sets of groups that are there together; a time when nobody is there is none."""
        return self._distinct[0]

    @property
    def hours(self) -> Float[NDArray, " epochs"]:
        """Length of each epoch [h]."""
        pairs = zip(self.borders[:-1], self.borders[1:], strict=True)
        return np.array([(end - start).total_seconds() / 3600 for start, end in pairs])

    @property
    def share(self) -> Float[NDArray, "sets groups"]:
        """Share of the time in which a group is there that falls into each set; columns sum to 1."""
        which = self._distinct[1]
        time = np.array([self.hours[which == k].sum() for k in range(len(self.sets))])
        own = time[:, None] * self.sets
        return own / own.sum(axis=0)

    @property
    def there(self) -> Float[NDArray, " groups"]:
        """Share of the fitted time in which each group is there."""
        return self.hours @ self.present / self.hours.sum()

    def set_of(self, time: pd.Series) -> Int[NDArray, " fixes"]:
        """Number of the set that is there at each moment, of moments within the fitted time at which somebody is."""
        last = len(self.borders) - 2
        inner = pd.DatetimeIndex(self.borders[1:-1])
        epoch = np.minimum(inner.searchsorted(pd.DatetimeIndex(time), side="right"), last)
        return self._distinct[1][epoch]

    def as_json(self, groups: list[str]) -> list[dict[str, Any]]:
        """Plain values: beginning, end and groups of each epoch."""
        pairs = zip(self.borders[:-1], self.borders[1:], self.present, strict=True)
        return [
            {"from": start.isoformat(), "until": end.isoformat(), "groups": [groups[i] for i in np.flatnonzero(who)]}
            for start, end, who in pairs
        ]

    def sentence(self, groups: list[str], name: str) -> str:
        """What has to be said of them."""
        some = [group for group, share in zip(groups, self.there, strict=True) if share < 1]
        return (
            f"{name}: {counted(len(some), 'group is', 'groups are')} there only part of the time ({first_few(some)}); "
            f"{len(self.hours)} epochs with {counted(len(self.sets), 'set', 'different sets')} of groups, each with "
            "its own steady state. A group's range is the mean over the time in which it is there."
        )


def make_epochs(stays: pd.DataFrame, span: Span) -> Epochs | None:
    """Epochs of a span; None where every group is there through all of it.

    Args:
        stays: `from` and `until` of each group (UTC), each of which is there in some of the span.
        span: the fitted time.
    """
    moments = {t for column in ("from", "until") for t in stays[column] if span.start < t < span.end}
    if not moments:
        return None
    borders = (span.start, *sorted(moments), span.end)
    present = [
        ((stays["from"] <= first) & (stays["until"] >= last)).to_numpy()
        for first, last in zip(borders[:-1], borders[1:], strict=True)
    ]
    return Epochs(borders, np.array(present))


def refuse_absent(fixes: pd.DataFrame, stays: pd.DataFrame, name: str) -> None:
    """Refuse fixes of a group at a time when it is not there.

    Args:
        fixes: of the study.
        stays: group, from and until of every group in the table.
        name: its file.

    Raises:
        StudyError: there are some.
    """
    known = fixes[["group", "time", "file", "row"]].merge(stays, on="group", how="inner")
    absent = known[(known["time"] < known["from"]) | (known["time"] >= known["until"])].sort_values(["file", "row"])
    if absent.empty:
        return
    places = absent["file"] + " line " + absent["row"].astype(str)
    groups = first_few(f'"{group}"' for group in absent["group"].unique())
    raise StudyError(
        f"{counted(len(absent), 'fix is', 'fixes are')} of a group at a time when it is not there by from and until in "
        f"{name}: {groups} ({first_few(places)}); mend from and until, or the group of these fixes."
    )


def _row(rows: NDArray, one: NDArray) -> int:
    """Number of the row that equals `one`; −1 if none does."""
    same = np.flatnonzero((rows == one).all(axis=1))
    return int(same[0]) if same.size else -1
