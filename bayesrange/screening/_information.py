"""How many independent fixes an animal's record amounts to, quickly enough for a million fixes.

The crossing time comes from at most about 500 fixes an animal, evenly chosen; a record so thinned that the crossing
time is below 1.5 of its intervals is looked at again with four times as many. The effective number is then that of
all fixes (`interval_weights`). A fit uses every fix for the crossing time too.
"""

import numpy as np
import pandas as pd

from bayesrange.study import autocorrelation_weights, interval_weights

_FIXES, _TIMES, _INTERVALS = 500, 4, 1.5
_SMALL_ERROR = 0.1  # of the median step: below it the location error is left out, which is ten times as fast


def information(fixes: pd.DataFrame) -> pd.DataFrame:
    """By animal: animal, fixes, crossing_time_h, crossing_time_lower_h, crossing_time_upper_h, effective.

    Args:
        fixes: sorted by animal and time, no animal twice at one time; animal, time, x, y, error_m [m].
    """
    place = fixes.groupby("animal").cumcount().to_numpy()
    count = fixes["animal"].map(fixes["animal"].value_counts()).to_numpy(dtype=int)
    every = np.maximum(count // _FIXES, 1)
    found: dict[str, pd.Series] = {}
    while len(found) < fixes["animal"].nunique():
        open_ones = ~fixes["animal"].isin(list(found)).to_numpy()
        thinned = fixes[open_ones & (place % every == 0)]
        table = autocorrelation_weights(_plain(thinned)).table.set_index("animal")
        interval = thinned.groupby("animal")["time"].apply(lambda t: t.diff().median() / pd.Timedelta(hours=1))
        step = pd.Series(every, index=fixes["animal"]).groupby(level=0).first()
        for animal, row in table.iterrows():
            if step[animal] == 1 or row["crossing_time_h"] >= _INTERVALS * interval[animal]:
                found[str(animal)] = row
        every = np.maximum(every // _TIMES, 1)
    rows = []
    for animal, own in fixes.groupby("animal", sort=True):
        row, between = found[str(animal)], own["time"].diff().dt.total_seconds().to_numpy(dtype=float)[1:] / 3600
        limits = (row["crossing_time_h"], row["crossing_time_lower_h"], row["crossing_time_upper_h"])
        rows.append((str(animal), len(own), *limits, interval_weights(between, row["crossing_time_h"]).sum()))
    return pd.DataFrame(
        rows,
        columns=[
            "animal", "fixes", "crossing_time_h", "crossing_time_lower_h", "crossing_time_upper_h", "effective"
        ],
    )  # fmt: skip


def _plain(fixes: pd.DataFrame) -> pd.DataFrame:
    """The fixes with the location error taken as 0 where it is small against an animal's steps."""
    step = np.hypot(fixes.groupby("animal")["x"].diff(), fixes.groupby("animal")["y"].diff())
    median = step.groupby(fixes["animal"]).median()
    error = fixes["error_m"].groupby(fixes["animal"]).max()
    small = error <= _SMALL_ERROR * median.reindex(error.index)
    return fixes.assign(error_m=fixes["error_m"].where(~fixes["animal"].map(small).to_numpy(dtype=bool), 0.0))
